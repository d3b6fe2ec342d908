"""Does the code sharpen with running speed: the fitted speed gains of all units together."""

from __future__ import annotations

import numpy as np
import pandas as pd

from odograph.population.composition import share_rows, subsets
from odograph.population.gather import fitted_units, variables_of
from odograph.population.intervals import bootstrap_interval, mean_interval
from odograph.population.speed import median_or_nan, median_row
from odograph.settings.population import PopulationSettings

GAIN_UNIT = "per standard deviation of z"
CHANGES = {"bits_per_spike": "fitted information", "bits_per_s": "fitted information rate"}
VERDICTS = ("sharpens", "blunts")


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
        session, unit, animal, group, region, gain, standard_error, sharpens, blunts, and slow_ and fast_
        bits_per_spike and bits_per_s (the fitted tuning at the 20th and 80th percentile of running speed),
        sorted by animal, session and unit.
    """
    asked = _asked_units(units, variable)
    return asked[np.isfinite(asked["gain"])].drop(columns="failed").reset_index(drop=True)


def _asked_units(units: pd.DataFrame, variable: str) -> pd.DataFrame:
    """Units that encode a variable, with their gain or without one because its fit `failed`."""
    fitted = fitted_units(units)
    fitted = fitted[fitted[f"encodes_{variable}"].to_numpy(bool)]
    table = fitted[["session", "unit", "animal", "group", "region"]].assign(
        gain=fitted[f"{variable}_speed_gain"].to_numpy(float),
        standard_error=fitted[f"{variable}_speed_gain_se"].to_numpy(float),
        failed=(fitted["speed_gain_status"] == "failed").to_numpy(bool),
    )
    for verdict in VERDICTS:
        column = f"{variable}_{verdict}"
        table[verdict] = fitted[column].to_numpy(bool) if column in fitted else False
    for pace in ("slow", "fast"):
        for unit in CHANGES:
            table[f"{pace}_{unit}"] = fitted[f"{variable}_fitted_{pace}_{unit}"].to_numpy(float)
    known = np.isfinite(table["gain"]) | table["failed"]
    return table[known].sort_values(["animal", "session", "unit"], ignore_index=True)


def gain_rows(units: pd.DataFrame, variable: str, settings: PopulationSettings) -> list[dict[str, object]]:
    """Rows of one variable's speed gains; see `odograph.population.adaptivity.speed_table`."""
    asked = _asked_units(units, variable)
    rows: list[dict[str, object]] = []
    for level, name, chosen in subsets(asked):
        part = asked[chosen]
        gained = part[np.isfinite(part["gain"])]
        head = {"measure": f"{variable}_speed_gain", "level": level, "name": name}
        purpose, within = f"{variable}_speed_gain {level} {name}", level == "animal"
        found = [
            *_centre_rows(gained, settings, purpose, within_animal=within),
            *_share_rows(gained, VERDICTS, settings, purpose, within_animal=within),
            *_change_rows(gained, settings, purpose, within_animal=within),
        ]
        rows += [head | row | {"sessions": gained["session"].nunique()} for row in found]
        failed = _share_rows(part, ("failed",), settings, purpose, within_animal=within)
        rows += [head | row | {"sessions": part["session"].nunique()} for row in failed]
    return rows


def _animals(table: pd.DataFrame) -> np.ndarray:
    return table["animal"].to_numpy(object).astype(str)


def _centre_rows(
    table: pd.DataFrame, settings: PopulationSettings, purpose: str, *, within_animal: bool
) -> list[dict[str, object]]:
    """Mean and median gain."""
    gain, animals = table["gain"].to_numpy(float), _animals(table)
    median = median_row(gain, animals, settings, purpose, within_animal=within_animal)
    if within_animal:
        interval = mean_interval(gain, settings.confidence)
    else:
        interval = bootstrap_interval(gain, animals, np.mean, f"{purpose} mean", settings)[0]
    mean = {name: median[name] for name in ("k", "n", "animals", "confidence")} | {
        "value": float(gain.mean()) if len(gain) else float("nan"),
        "low": interval.low,
        "high": interval.high,
        "method": interval.method,
    }
    return [
        {"category": "mean gain", "unit": GAIN_UNIT} | mean,
        {"category": "median gain", "unit": GAIN_UNIT} | median,
    ]


def _share_rows(
    table: pd.DataFrame,
    columns: tuple[str, ...],
    settings: PopulationSettings,
    purpose: str,
    *,
    within_animal: bool,
) -> list[dict[str, object]]:
    """Shares of the units in which a column holds."""
    members = table[list(columns)].to_numpy(bool).reshape(len(table), len(columns))
    name = f"{purpose} shares {' '.join(columns)}"
    shares = share_rows(members, _animals(table), settings, purpose=name, within_animal=within_animal)
    return [
        {"category": column, "unit": "share", "value": row.pop("share")} | row
        for column, row in zip(columns, shares, strict=True)
    ]


def _change_rows(
    table: pd.DataFrame, settings: PopulationSettings, purpose: str, *, within_animal: bool
) -> list[dict[str, object]]:
    """Median change of what the fitted tuning tells, from slow to fast running."""
    rows = []
    for unit, what in CHANGES.items():
        slow, fast = (table[f"{pace}_{unit}"].to_numpy(float) for pace in ("slow", "fast"))
        name = f"{purpose} {unit}"
        row = median_row(fast - slow, _animals(table), settings, name, within_animal=within_animal)
        row |= {"median_slow": median_or_nan(slow), "median_fast": median_or_nan(fast)}
        rows.append({"category": f"{what}, fast minus slow", "unit": unit} | row)
    return rows
