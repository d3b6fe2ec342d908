"""Rows as the encoding stage writes them, for made-up studies."""

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

VARIABLES = ("position", "head_direction", "speed")


def unit_row(session, unit, model="constant", *, status="fitted", shape=None, p=None, **values):
    """One unit row whose selected model is `model`; tested variables get the p-values in `p`."""
    terms = [] if model == "constant" else model.split("+")
    row = {
        "session": session,
        "unit": unit,
        "n_spikes": 1000,
        "mean_rate_hz": 2.5,
        "status": status,
        "status_reason": "",
        "selected_model": model,
        "selected_bits_per_spike": 0.1 * len(terms),
        "selected_deviance_explained": 0.05,
        "best_model": model,
        "speed_shape": shape or ("rising" if "speed" in terms else "not_tuned"),
        "speed_shape_probability": 0.99,
        "fit_key": f"key-{session}-{unit}",
        "code": f"{session}{unit}",
    }
    for variable in VARIABLES:
        row[f"encodes_{variable}"] = variable in terms
        row[f"{variable}_p"] = (p or {}).get(variable, np.nan)
    for variable in VARIABLES[:2]:
        for half in ("", "slow_", "fast_"):
            row[f"{variable}_information_{half}bits_per_spike"] = np.nan
    return {**row, **values}


def inventory(session, units, animal=None, region=None, **document):
    """An inventory that holds the units; `region` is one for all, or a dict by unit."""
    return {
        "session": session,
        "verdict": "pass",
        "findings": [],
        "subject": {"subject_id": animal},
        "units": [
            {
                "unit": unit,
                "region": region.get(unit) if isinstance(region, dict) else region,
                "attributes": {},
                "kept": True,
            }
            for unit in units
        ],
        **document,
    }


def sessions_table(*rows):
    """A sessions table of (session, animal, group)."""
    return pd.DataFrame(rows, columns=["session", "animal", "group"])


def drawn_study(rng, n_animals=4, n_units=25):
    """Unit tables (two shards a session), inventories and sessions of a random study."""
    tables, inventories, rows = [], [], []
    for animal in range(n_animals):
        session = f"day{animal}"
        rows.append((session, f"animal{animal}", "young" if animal % 2 else "old"))
        units = []
        for unit in range(n_units):
            terms = [variable for variable in VARIABLES if rng.random() < 0.4]
            slow, fast = rng.gamma(2.0, 0.5, 2)
            units.append(
                unit_row(
                    session,
                    unit,
                    "+".join(terms) or "constant",
                    shape=str(rng.choice(["rising", "falling", "undecided"])) if "speed" in terms else None,
                    p={
                        variable: float(rng.random() ** (9 if variable in terms else 1))
                        for variable in VARIABLES
                    },
                    position_information_slow_bits_per_spike=slow,
                    position_information_fast_bits_per_spike=fast,
                )
            )
        table = pd.DataFrame(units)
        tables += [table.iloc[::2], table.iloc[1::2]]
        regions = {unit: "upper" if unit % 3 else "lower" for unit in range(n_units)}
        inventories.append(inventory(session, range(n_units), region=regions))
    return tables, inventories, sessions_table(*rows)


@pytest.fixture
def made_up():
    """The makers of rows above."""
    return SimpleNamespace(
        unit_row=unit_row, inventory=inventory, sessions_table=sessions_table, drawn_study=drawn_study
    )
