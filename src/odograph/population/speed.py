"""Does the code change with running speed: shapes of speed tuning, information at slow and fast running."""

from __future__ import annotations

import numpy as np
import pandas as pd
from scipy.stats import wilcoxon

from odograph.population.composition import share_rows, subsets
from odograph.population.gather import fitted_units, variables_of
from odograph.population.intervals import bootstrap_interval, counted, median_interval
from odograph.settings.population import PopulationSettings

SHAPES = ("rising", "falling", "non_monotonic", "undecided")


def compared_variables(units: pd.DataFrame) -> list[str]:
    """Variables whose information was measured at slow and at fast running."""
    return [
        variable
        for variable in variables_of(units)
        if all(f"{variable}_information_{half}_bits_per_spike" in units for half in ("slow", "fast"))
    ]


def shape_rows(units: pd.DataFrame, settings: PopulationSettings) -> list[dict[str, object]]:
    """Rows of the shapes of speed tuning among the units that encode speed; see `adaptivity.speed_table`."""
    fitted = fitted_units(units)
    tuned = fitted[fitted["encodes_speed"].to_numpy(bool)] if "encodes_speed" in fitted else fitted.iloc[:0]
    shape = tuned["speed_shape"].to_numpy(object) if len(tuned) else np.empty(0, object)
    members = np.column_stack([shape == name for name in SHAPES]).reshape(len(tuned), len(SHAPES))
    animals = tuned["animal"].to_numpy(object).astype(str)
    sessions = tuned["session"].to_numpy(object)
    rows = []
    for level, name, chosen in subsets(tuned):
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
            rows.append({**head, **row, "sessions": len(set(sessions[chosen])), "unit": "share"})
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
        session, unit, animal, group, region, slow_bits_per_spike, fast_bits_per_spike, change_bits_per_spike
        (fast minus slow), sorted by animal, session and unit.
    """
    names = [f"{variable}_information_{half}_bits_per_spike" for half in ("slow", "fast")]
    fitted = fitted_units(units)
    fitted = fitted[fitted[f"encodes_{variable}"].to_numpy(bool)]
    slow, fast = (fitted[name].to_numpy(float) for name in names)
    pairs = fitted[["session", "unit", "animal", "group", "region"]].assign(
        slow_bits_per_spike=slow, fast_bits_per_spike=fast, change_bits_per_spike=fast - slow
    )
    known = np.isfinite(slow) & np.isfinite(fast)
    return pairs[known].sort_values(["animal", "session", "unit"], ignore_index=True)


def change_rows(units: pd.DataFrame, variable: str, settings: PopulationSettings) -> list[dict[str, object]]:
    """Rows of the change of a variable's information from slow to fast running."""
    pairs = information_pairs(units, variable)
    measure = f"{variable}_information_change"
    animals = pairs["animal"].to_numpy(object).astype(str)
    rows = []
    for level, name, chosen in subsets(pairs):
        part = pairs[chosen]
        change = part["change_bits_per_spike"].to_numpy(float)
        purpose = f"{measure} {level} {name}"
        row = median_row(change, animals[chosen], settings, purpose, within_animal=level == "animal")
        row |= {
            "median_slow": median_or_nan(part["slow_bits_per_spike"]),
            "median_fast": median_or_nan(part["fast_bits_per_spike"]),
        }
        head = {"measure": measure, "level": level, "name": name, "category": "fast minus slow"}
        rows.append(head | row | {"sessions": part["session"].nunique(), "unit": "bits_per_spike"})
    return rows


def median_row(
    values: np.ndarray,
    animals: np.ndarray,
    settings: PopulationSettings,
    purpose: str,
    *,
    within_animal: bool,
) -> dict[str, object]:
    """Median of values, (n,), its interval, how many are above 0, and the signed-rank p.

    `purpose` names the random draws, `within_animal` whether the claim is about this one animal.
    """
    if within_animal:
        interval = median_interval(values, settings.confidence)
    else:
        interval = bootstrap_interval(values, animals, np.median, purpose, settings)[0]
    return {
        "k": int(np.sum(values > 0)),
        "n": len(values),
        "animals": len(np.unique(animals)),
        "value": median_or_nan(values),
        "low": interval.low,
        "high": interval.high,
        "confidence": settings.confidence,
        "p": signed_rank_p(values),
        "method": f"{interval.method}; p: Wilcoxon signed rank over {counted(len(values), 'unit')}, "
        "as if independent",
    }


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


def median_or_nan(values: np.ndarray) -> float:
    """Median, NaN of nothing."""
    return float(np.median(values)) if len(values) else float("nan")
