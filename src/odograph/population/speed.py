"""Does the code change with running speed: shapes of speed tuning, information at slow and fast running."""

from __future__ import annotations

import numpy as np
import pandas as pd
from scipy.stats import wilcoxon

from odograph.population.composition import share_rows
from odograph.population.gather import fitted_units, variables_of
from odograph.population.intervals import bootstrap_interval, counted, median_interval
from odograph.settings.population import PopulationSettings

SHAPES = ("rising", "falling", "non_monotonic", "undecided")
COLUMNS = (
    "measure",
    "level",
    "name",
    "category",
    "k",
    "n",
    "animals",
    "value",
    "low",
    "high",
    "confidence",
    "unit",
    "median_slow",
    "median_fast",
    "p",
    "method",
)


def speed_table(units: pd.DataFrame, settings: PopulationSettings) -> pd.DataFrame:
    """Speed-tuning shapes and the change of information with speed, in one table.

    Parameters
    ----------
    units : DataFrame
        The table of `gather_units`.
    settings : PopulationSettings

    Returns
    -------
    DataFrame
        Rows with measure "speed_shape": per shape, `k` of the `n` units that encode speed, `value` the
        share. Rows with measure "<variable>_information_change", for every variable measured at slow and at
        fast running: `value` is the median over `n` units of fast minus slow (`unit` bits_per_spike), `k` how
        many units gained, `p` of the Wilcoxon signed-rank test. Each for all animals together and for each
        animal; the interval is `low`, `high` of `confidence` by `method`.
    """
    changes = [
        row for variable in compared_variables(units) for row in change_rows(units, variable, settings)
    ]
    return pd.DataFrame([*shape_rows(units, settings), *changes], columns=list(COLUMNS))


def compared_variables(units: pd.DataFrame) -> list[str]:
    """Variables whose information was measured at slow and at fast running."""
    return [
        variable
        for variable in variables_of(units)
        if all(f"{variable}_information_{half}_bits_per_spike" in units for half in ("slow", "fast"))
    ]


def shape_rows(units: pd.DataFrame, settings: PopulationSettings) -> list[dict[str, object]]:
    """Rows of the shapes of speed tuning among the units that encode speed; see `speed_table`."""
    fitted = fitted_units(units)
    tuned = fitted[fitted["encodes_speed"].to_numpy(bool)] if "encodes_speed" in fitted else fitted.iloc[:0]
    shape = tuned["speed_shape"].to_numpy(object) if len(tuned) else np.empty(0, object)
    members = np.column_stack([shape == name for name in SHAPES]).reshape(len(tuned), len(SHAPES))
    animals = tuned["animal"].to_numpy(object).astype(str)
    rows = []
    for level, name, chosen in _by_animal(animals):
        counts = share_rows(
            members[chosen],
            animals[chosen],
            settings,
            purpose=f"speed shapes {level} {name}",
            within_animal=level == "animal",
        )
        for category, row in zip(SHAPES, counts, strict=True):
            row["value"] = row.pop("share")
            head = {"measure": "speed_shape", "level": level, "name": name, "category": category}
            rows.append({**head, **row, "unit": "share"})
    return rows


def information_pairs(units: pd.DataFrame, variable: str) -> pd.DataFrame:
    """Information at slow and fast running of the units that encode a variable and have both values.

    Parameters
    ----------
    units : DataFrame
        The table of `gather_units`.
    variable : str
        One of `compared_variables`.

    Returns
    -------
    DataFrame
        session, unit, animal, slow_bits_per_spike, fast_bits_per_spike, change_bits_per_spike (fast minus
        slow), sorted by animal, session and unit.
    """
    names = [f"{variable}_information_{half}_bits_per_spike" for half in ("slow", "fast")]
    fitted = fitted_units(units)
    fitted = fitted[fitted[f"encodes_{variable}"].to_numpy(bool)]
    slow, fast = (fitted[name].to_numpy(float) for name in names)
    pairs = fitted[["session", "unit", "animal"]].assign(
        slow_bits_per_spike=slow, fast_bits_per_spike=fast, change_bits_per_spike=fast - slow
    )
    known = np.isfinite(slow) & np.isfinite(fast)
    return pairs[known].sort_values(["animal", "session", "unit"], ignore_index=True)


def change_rows(units: pd.DataFrame, variable: str, settings: PopulationSettings) -> list[dict[str, object]]:
    """Rows of the change of one variable's information from slow to fast running; see `speed_table`."""
    pairs = information_pairs(units, variable)
    measure = f"{variable}_information_change"
    animals = pairs["animal"].to_numpy(object).astype(str)
    rows = []
    for level, name, chosen in _by_animal(animals):
        part = pairs[chosen]
        change = part["change_bits_per_spike"].to_numpy(float)
        if level == "animal":
            interval = median_interval(change, settings.confidence)
        else:
            purpose = f"{measure} {level} {name}"
            interval = bootstrap_interval(change, animals[chosen], np.median, purpose, settings)[0]
        rows.append(
            {
                "measure": measure,
                "level": level,
                "name": name,
                "category": "fast minus slow",
                "k": int(np.sum(change > 0)),
                "n": len(change),
                "animals": len(np.unique(animals[chosen])),
                "value": _median(change),
                "low": interval.low,
                "high": interval.high,
                "confidence": settings.confidence,
                "unit": "bits_per_spike",
                "median_slow": _median(part["slow_bits_per_spike"]),
                "median_fast": _median(part["fast_bits_per_spike"]),
                "p": signed_rank_p(change),
                "method": f"{interval.method}; p: Wilcoxon signed rank over {counted(len(change), 'unit')}, "
                "as if independent",
            }
        )
    return rows


def signed_rank_p(change: np.ndarray) -> float:
    """Two-sided p of the Wilcoxon signed-rank test (Wilcoxon 1945, Biometrics Bulletin 1:80), zeros left out.

    Parameters
    ----------
    change : (n,) array
        Paired differences.

    Returns
    -------
    float
        Exact for up to 50 differences without ties, else by the normal approximation; NaN when every
        difference is zero or there is none.
    """
    change = np.asarray(change, float)
    change = change[change != 0]
    return float(wilcoxon(change).pvalue) if len(change) else float("nan")


def _median(values: np.ndarray) -> float:
    return float(np.median(values)) if len(values) else float("nan")


def _by_animal(animals: np.ndarray) -> list[tuple[str, str, np.ndarray]]:
    """All units, then those of each animal."""
    everything = ("all", "all", np.ones(len(animals), bool))
    return [everything, *(("animal", str(name), animals == name) for name in np.unique(animals))]
