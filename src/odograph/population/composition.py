"""How many units encode which variables, with intervals that respect that units come from few animals."""

from __future__ import annotations

from itertools import product

import numpy as np
import pandas as pd

from odograph.population.gather import fitted_units, spelled, variables_of
from odograph.population.intervals import Interval, bootstrap_interval, wilson_interval
from odograph.settings.population import PopulationSettings

COLUMNS = (
    "level",
    "name",
    "kind",
    "category",
    "k",
    "n",
    "animals",
    "share",
    "low",
    "high",
    "confidence",
    "method",
)
AT_LEAST_ONE = "at least one variable"
TWO_OR_MORE = "two or more variables"
LEVEL_OF_FIT = 0.05
COMPATIBLE = f"rescaled intervals compatible with the selected model at {100 * LEVEL_OF_FIT:g} %"
# Above this many variables only the combinations that some unit has are listed.
_MOST_LISTED_VARIABLES = 4


def composition(units: pd.DataFrame, settings: PopulationSettings) -> pd.DataFrame:
    """Shares of the fitted units by what they encode.

    Parameters
    ----------
    units : DataFrame
        The table of `gather_units`. Units that were not fitted are not counted, neither in k nor in n.
    settings : PopulationSettings

    Returns
    -------
    DataFrame
        One row per level ("all", "animal", "group", "region"), name within it, and category. `kind` is
        "exact" for a combination and nothing else (`position+speed`, `constant`), and "includes" for a
        variable whatever else the unit encodes (`position, whatever else`), `at least one variable` and
        `two or more variables`. Where fits were judged on held-out time, `kind` "fit" has the units, of those
        judged, whose rescaled intervals are compatible with the selected model. `k` of `n` units in `animals`
        animals; `share` and its interval `low`, `high` of `confidence` by `method`, as `share_rows` makes
        them.
    """
    fitted = fitted_units(units)
    variables = variables_of(units)
    categories, members = _membership(fitted, variables)
    animals = fitted["animal"].to_numpy(object).astype(str)
    rows = []
    for level, name, chosen in subsets(fitted):
        shares_of_categories = share_rows(
            members[chosen],
            animals[chosen],
            settings,
            purpose=f"composition {level} {name}",
            within_animal=level == "animal",
        )
        for (kind, category), shares in zip(categories, shares_of_categories, strict=True):
            rows.append({"level": level, "name": name, "kind": kind, "category": category, **shares})
        rows += _fit_rows(fitted[chosen], level, name, settings)
    return pd.DataFrame(rows, columns=list(COLUMNS))


def _fit_rows(
    units: pd.DataFrame, level: str, name: str, settings: PopulationSettings
) -> list[dict[str, object]]:
    """How many units' selected models pass the Kolmogorov-Smirnov test on held-out time; none without it."""
    if "rescaling_ks_p" not in units:
        return []
    judged = units[units["rescaling_ks_p"].notna()]
    (share,) = share_rows(
        (judged["rescaling_ks_p"].to_numpy(float) > LEVEL_OF_FIT)[:, None],
        judged["animal"].to_numpy(object).astype(str),
        settings,
        purpose=f"fit {level} {name}",
        within_animal=level == "animal",
    )
    return [{"level": level, "name": name, "kind": "fit", "category": COMPATIBLE, **share}]


def share_rows(
    members: np.ndarray,
    animals: np.ndarray,
    settings: PopulationSettings,
    *,
    purpose: str,
    within_animal: bool,
) -> list[dict[str, object]]:
    """Counts, shares and intervals of categories among units.

    Within one animal a share takes Wilson's interval over its units. Over animals it takes the two-level
    bootstrap's, of the pooled share. Where no unit or every unit is in a category, resampling gives the same
    share again and again: such a share takes Wilson's interval too, and `method` says so.

    Parameters
    ----------
    members : (n, c) bool array
        Which unit belongs to which category.
    animals : (n,) array of str
        Animal of each unit.
    settings : PopulationSettings
    purpose : str
        Names the random draws; see `bootstrap_interval`.
    within_animal : bool
        Whether the claim is about this one animal.

    Returns
    -------
    list of dict
        Per category: k, n, animals, share, low, high, confidence, method.
    """
    n, n_animals = len(members), len(np.unique(animals))
    counts = members.sum(axis=0, dtype=int).tolist()
    wilson = [wilson_interval(k, n, settings.confidence) for k in counts]
    intervals = wilson
    if n and not within_animal:
        shares = members.astype(float)
        intervals = bootstrap_interval(shares, animals, lambda drawn: drawn.mean(axis=0), purpose, settings)
        if n_animals >= settings.minimum_animals:
            alike = [
                Interval(own.low, own.high, f"{own.method}: all alike, nothing to resample") for own in wilson
            ]
            choices = zip(counts, alike, intervals, strict=True)
            intervals = [fixed if k in (0, n) else drawn for k, fixed, drawn in choices]
    return [
        {
            "k": k,
            "n": n,
            "animals": n_animals,
            "share": k / n if n else float("nan"),
            "low": interval.low,
            "high": interval.high,
            "confidence": settings.confidence,
            "method": interval.method,
        }
        for k, interval in zip(counts, intervals, strict=True)
    ]


def subsets(units: pd.DataFrame) -> list[tuple[str, str, np.ndarray]]:
    """All units, then those of each animal, group and region: level, name, which units, (n,) of bool.

    Units without a group or region are in no such subset.
    """
    found = [("all", "all", np.ones(len(units), bool))]
    for level in ("animal", "group", "region"):
        labels = units[level].to_numpy(object)
        names = sorted({str(label) for label in labels if label is not None and label == label})
        found += [(level, name, np.array([label == name for label in labels], bool)) for name in names]
    return found


def _membership(fitted: pd.DataFrame, variables: list[str]) -> tuple[list[tuple[str, str]], np.ndarray]:
    """Categories as (kind, category) and which unit (rows) is in which (columns)."""
    encodes = fitted[[f"encodes_{variable}" for variable in variables]].to_numpy(bool)
    n_encoded = encodes.sum(axis=1)
    categories = [("includes", f"{variable}, whatever else") for variable in variables]
    columns = [encodes[:, i] for i in range(len(variables))]
    categories += [("includes", AT_LEAST_ONE), ("includes", TWO_OR_MORE)]
    columns += [n_encoded >= 1, n_encoded >= 2]
    for pattern in _combinations(encodes, len(variables)):
        categories.append(("exact", spelled(variables, pattern)))
        columns.append((encodes == pattern).all(axis=1))
    return categories, np.column_stack(columns)


def _combinations(encodes: np.ndarray, n_variables: int) -> list[tuple[bool, ...]]:
    """Combinations to list: none first, then singles, pairs, ... each in the order of the variables."""
    if n_variables <= _MOST_LISTED_VARIABLES:
        found = set(product((False, True), repeat=n_variables))
    else:
        found = {tuple(row) for row in encodes.tolist()} | {(False,) * n_variables}
    return sorted(found, key=lambda pattern: (sum(pattern), [not there for there in pattern]))
