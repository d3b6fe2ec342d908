"""Intervals and adjusted p-values for units that come in animals.

Units of one animal resemble each other, so what spans several animals is resampled in two levels: animals
with replacement, then the units of each drawn animal with replacement (Davison & Hinkley 1997, Bootstrap
Methods and Their Application, section 3.8). Within one animal a share takes Wilson's interval (Wilson 1927,
Journal of the American Statistical Association 22:209).
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
from scipy.stats import binom, false_discovery_control, norm, t

from odograph.settings.population import PopulationSettings

# The bootstrap of few clusters gives intervals that are too narrow (Cameron, Gelbach & Miller 2008, Review
# of Economics and Statistics 90:414): with 30 units an animal and shares that vary by 0.2 between animals,
# 95 % intervals held the truth in 79, 90, 94 % of simulations at 3, 5, 10 animals. Below this many the
# method says so.
FEW_ANIMALS = 10


@dataclass(frozen=True)
class Interval:
    """An interval and how it came about.

    Parameters
    ----------
    low, high : float
        Limits; NaN where no interval can be given.
    method : str
        In words, with the seed and draws of a bootstrap.
    """

    low: float
    high: float
    method: str


def no_interval(reason: str) -> Interval:
    """An interval that is not available, and why."""
    return Interval(float("nan"), float("nan"), f"not available: {reason}")


def wilson_interval(k: int, n: int, confidence: float) -> Interval:
    """Wilson's score interval of a share.

    Parameters
    ----------
    k, n : int
        Successes and trials.
    confidence : float
        Coverage, such as 0.95.

    Raises
    ------
    ValueError
        k outside 0..n.
    """
    if not 0 <= k <= n:
        raise ValueError(f"k must lie in 0..n: k {k}, n {n}")
    if n == 0:
        return no_interval("no units")
    z = float(norm.ppf(0.5 + confidence / 2))
    centre = (k + z**2 / 2) / (n + z**2)
    half = z * np.sqrt(k * (n - k) / n + z**2 / 4) / (n + z**2)
    # The limits at 0 and n are 0 and 1 exactly; the arithmetic leaves a rounding error there.
    low = 0.0 if k == 0 else float(centre - half)
    high = 1.0 if k == n else float(centre + half)
    return Interval(low, high, "Wilson, over units")


def benjamini_hochberg(p: np.ndarray) -> np.ndarray:
    """Adjusted p-values that control the false discovery rate (Benjamini & Hochberg 1995, JRSS B 57:289).

    Parameters
    ----------
    p : (n,) array
        p-values; NaN is no test: it stays NaN and does not count among the tests.

    Returns
    -------
    (n,) array

    Raises
    ------
    ValueError
        A p-value outside 0..1.
    """
    p = np.asarray(p, float)
    adjusted = np.full(p.shape, np.nan)
    tested = np.isfinite(p)
    if tested.any():
        adjusted[tested] = false_discovery_control(p[tested], method="bh")
    return adjusted


def resampled_units(animals: np.ndarray, draws: int, rng: np.random.Generator) -> Iterator[np.ndarray]:
    """Two-level resamples: per draw, the indices of the units of animals drawn with replacement.

    Parameters
    ----------
    animals : (n,) array
        Animal of each unit.
    draws : int
        Number of resamples.
    rng : numpy.random.Generator
        Source of the draws.

    Yields
    ------
    (m,) int array
        Indices into `animals`; as many animals as there are, each with as many units as it has.
    """
    _, animal_index, sizes = np.unique(animals, return_inverse=True, return_counts=True)
    units_by_animal = np.argsort(animal_index, kind="stable")
    starts = np.cumsum(sizes) - sizes
    for _ in range(draws):
        drawn = rng.integers(0, len(sizes), len(sizes))
        repeats = sizes[drawn]
        within = np.floor(rng.random(repeats.sum()) * np.repeat(repeats, repeats)).astype(np.int64)
        yield units_by_animal[np.repeat(starts[drawn], repeats) + within]


def bootstrap_interval(
    values: np.ndarray,
    animals: np.ndarray,
    statistic: Callable[[np.ndarray], np.ndarray],
    purpose: str,
    settings: PopulationSettings,
) -> list[Interval]:
    """Percentile intervals by the two-level bootstrap over animals.

    Parameters
    ----------
    values : (n, ...) array
        One row per unit, in an order that does not depend on the order of the inputs.
    animals : (n,) array of str
        Animal of each unit.
    statistic : callable
        From resampled values (m, ...) to one number or a (c,) array.
    purpose : str
        What the interval is for. The random draws follow from it and the seed alone, so adding a region or a
        group leaves the other intervals as they are.
    settings : PopulationSettings

    Returns
    -------
    list of Interval
        One per component of the statistic.
    """
    n_animals = len(np.unique(animals))
    n_components = np.size(statistic(values)) if len(values) else 1
    if n_animals < settings.minimum_animals:
        return [no_interval(counted(n_animals, "animal"))] * n_components
    rng = np.random.default_rng([settings.bootstrap_seed, *hashlib.sha256(purpose.encode()).digest()[:16]])
    resamples = resampled_units(animals, settings.bootstrap_draws, rng)
    drawn = np.array([np.atleast_1d(statistic(values[index])) for index in resamples])
    tail = (1 - settings.confidence) / 2
    low, high = np.quantile(drawn, [tail, 1 - tail], axis=0)
    method = (
        f"bootstrap of {n_animals} animals, then their units "
        f"({settings.bootstrap_draws} draws, seed {settings.bootstrap_seed}, percentiles)"
    )
    if n_animals < FEW_ANIMALS:
        method += "; few animals, likely too narrow"
    return [Interval(float(a), float(b), method) for a, b in zip(low, high, strict=True)]


def median_interval(values: np.ndarray, confidence: float) -> Interval:
    """Distribution-free interval of a median from two order statistics (Conover 1971, section 3.2).

    Parameters
    ----------
    values : (n,) array
        Independent values.
    confidence : float
        Coverage that the interval has at least.

    Returns
    -------
    Interval
        Not available when so few values cannot reach the coverage.
    """
    ordered = np.sort(np.asarray(values, float))
    n = len(ordered)
    # Largest r with P(fewer than r values below the median) within one tail: the r-th value from either end.
    rank = int(binom.ppf((1 - confidence) / 2, n, 0.5)) if n else 0
    if rank < 1:
        return no_interval(counted(n, "unit"))
    return Interval(float(ordered[rank - 1]), float(ordered[n - rank]), "order statistics, over units")


def mean_interval(values: np.ndarray, confidence: float) -> Interval:
    """Student's interval of a mean (Student 1908, Biometrika 6:1).

    Parameters
    ----------
    values : (n,) array
        Independent values.
    confidence : float
        Coverage, such as 0.95.
    """
    values = np.asarray(values, float)
    n = len(values)
    if n < 2:
        return no_interval(counted(n, "unit"))
    half = float(t.ppf(0.5 + confidence / 2, n - 1) * values.std(ddof=1) / np.sqrt(n))
    return Interval(float(values.mean()) - half, float(values.mean()) + half, "Student's t, over units")


def counted(number: int, noun: str, plural: str | None = None) -> str:
    """A number with its noun: "1 animal", "3 animals"."""
    return f"{number} {noun if number == 1 else plural or noun + 's'}"
