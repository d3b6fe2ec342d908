"""Does the code sharpen with running speed: the fitted speed gains of all units together."""

from __future__ import annotations

import numpy as np
import pandas as pd

from odograph.population.composition import share_rows
from odograph.population.gather import fitted_units, variables_of
from odograph.population.speed import by_animal, median_or_nan, median_row
from odograph.settings.population import PopulationSettings

CHANGES = {"bits_per_spike": "fitted information", "bits_per_s": "fitted information rate"}


def gain_variables(units: pd.DataFrame) -> list[str]:
    """Variables whose speed gain was fitted in any session."""
    return [variable for variable in variables_of(units) if f"{variable}_speed_gain" in units]


def gained_units(units: pd.DataFrame, variable: str) -> pd.DataFrame:
    """Units that encode a variable and have a gain for it.

    Parameters
    ----------
    units : DataFrame
        The table of `gather_units`.
    variable : str
        One of `gain_variables`.

    Returns
    -------
    DataFrame
        session, unit, animal, gain, standard_error, sharpens, blunts, and slow_ and fast_ bits_per_spike and
        bits_per_s (the fitted tuning at the 20th and 80th percentile of running speed), sorted by animal,
        session and unit.
    """
    fitted = fitted_units(units)
    fitted = fitted[fitted[f"encodes_{variable}"].to_numpy(bool)]
    table = fitted[["session", "unit", "animal"]].assign(
        gain=fitted[f"{variable}_speed_gain"].to_numpy(float),
        standard_error=fitted[f"{variable}_speed_gain_se"].to_numpy(float),
    )
    for verdict in ("sharpens", "blunts"):
        column = f"{variable}_{verdict}"
        table[verdict] = fitted[column].to_numpy(bool) if column in fitted else False
    for pace in ("slow", "fast"):
        for unit in CHANGES:
            table[f"{pace}_{unit}"] = fitted[f"{variable}_fitted_{pace}_{unit}"].to_numpy(float)
    return table[np.isfinite(table["gain"])].sort_values(["animal", "session", "unit"], ignore_index=True)


def gain_rows(units: pd.DataFrame, variable: str, settings: PopulationSettings) -> list[dict[str, object]]:
    """Rows of one variable's speed gains; see `odograph.population.adaptivity.speed_table`."""
    table, measure = gained_units(units, variable), f"{variable}_speed_gain"
    animals = table["animal"].to_numpy(object).astype(str)
    rows: list[dict[str, object]] = []
    for level, name, chosen in by_animal(animals):
        part, own = table[chosen], animals[chosen]
        head = {"measure": measure, "level": level, "name": name}
        gain = part["gain"].to_numpy(float)
        gained = median_row(gain, own, settings, f"{measure} {level} {name}", within_animal=level == "animal")
        rows.append(head | {"category": "median gain", "unit": "per standard deviation of z"} | gained)
        verdicts = ("sharpens", "blunts")
        members = part[list(verdicts)].to_numpy(bool).reshape(len(part), 2)
        shares = share_rows(
            members,
            own,
            settings,
            purpose=f"{measure} shares {level} {name}",
            within_animal=level == "animal",
        )
        for verdict, row in zip(verdicts, shares, strict=True):
            row["value"] = row.pop("share")
            rows.append(head | {"category": verdict, "unit": "share"} | row)
        for unit, what in CHANGES.items():
            slow, fast = (part[f"{pace}_{unit}"].to_numpy(float) for pace in ("slow", "fast"))
            purpose = f"{measure} {unit} {level} {name}"
            row = median_row(fast - slow, own, settings, purpose, within_animal=level == "animal")
            row |= {"median_slow": median_or_nan(slow), "median_fast": median_or_nan(fast)}
            rows.append(head | {"category": f"{what}, fast minus slow", "unit": unit} | row)
    return rows
