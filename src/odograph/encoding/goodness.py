"""How well does a model describe a unit's spike train, on time that played no part in fitting it?

Every valid bin is held out by one fold, so the folds' predictions together give an expected count for all of
valid time. Two questions are asked of it:

- Time rescaling: with time measured in expected spikes, the intervals between spikes are exponential with
  mean 1 if the model is right (Brown, Barbieri, Ventura, Kass & Frank 2002, Neural Comput. 14:325). The
  expected rate is constant within a bin, so an interval is exact whatever the width of bins. Masked time
  stands still.
- Residuals: counts less their expectation have no memory under the model. The product of two Poisson
  residuals has mean 0 and variance mu_i mu_j, which gives the band around an autocorrelation of 0.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import kolmogorov, ndtri

from odograph.encoding.design import SessionDesign
from odograph.encoding.evaluate import Score
from odograph.encoding.layout import Workspace
from odograph.encoding.spikes import UnitSpikes

LONGEST_LAG_S = 1.0
BAND = float(ndtri(0.975))


@dataclass(frozen=True)
class Rescaling:
    """Kolmogorov-Smirnov statistic of rescaled intervals against an exponential, its p, their number."""

    statistic: float
    p: float
    n_intervals: int


@dataclass(frozen=True)
class Residuals:
    """Autocorrelation of residuals, and the half-width of its 95 % band under the model; each (n_lags,)."""

    lag_s: np.ndarray
    correlation: np.ndarray
    band: np.ndarray

    @property
    def peak(self) -> tuple[float, float]:
        """The correlation that is largest in units of its band, and its lag in s."""
        k = int(np.argmax(np.abs(self.correlation) / self.band))
        return float(self.correlation[k]), float(self.lag_s[k])


def held_out_counts(space: Workspace, design: SessionDesign, score: Score) -> np.ndarray:
    """Expected spikes of every valid bin, (n_bins,), by the fold that held it out."""
    fold_of_bin = design.folds.group % design.folds.n_folds
    mu = np.empty(design.n_bins)
    for fold, coefficients in enumerate(score.fold_coefficients):
        bins = np.flatnonzero(fold_of_bin == fold)
        eta = np.full(len(bins), coefficients[0])
        effects = space.effects(coefficients)
        for start, end, term in zip(space.layout.cell_start, space.layout.cell_end, space.terms, strict=True):
            eta += effects[start:end][term.cell[bins]]
        mu[bins] = design.bin_s * np.exp(eta)
    return mu


def rescaled_intervals(mu: np.ndarray, bins: np.ndarray, within: np.ndarray) -> np.ndarray:
    """Expected spikes between one spike and the next, the first counted from the start, (n_spikes,).

    Parameters
    ----------
    mu : ndarray, (n_bins,)
        Expected spikes of every bin.
    bins : ndarray of int, (n_spikes,)
        Each spike's bin, ascending.
    within : ndarray, (n_spikes,)
        Its place in the bin, 0 to 1.
    """
    start = np.concatenate([[0.0], np.cumsum(mu)])
    return np.diff(start[bins] + within * mu[bins], prepend=0.0)


def rescaling_test(intervals: np.ndarray) -> Rescaling:
    """Kolmogorov-Smirnov test of intervals, (n,), against an exponential of mean 1.

    p from the limiting distribution with the small-sample factor of Stephens 1970, J. R. Stat. Soc. B 32:115.
    """
    n = len(intervals)
    if n == 0:
        return Rescaling(float("nan"), float("nan"), 0)
    uniform = np.sort(-np.expm1(-intervals))
    steps = np.arange(n + 1) / n
    statistic = float(max(np.max(steps[1:] - uniform), np.max(uniform - steps[:-1])))
    root = np.sqrt(n)
    return Rescaling(statistic, float(kolmogorov(statistic * (root + 0.12 + 0.11 / root))), n)


def residual_autocorrelation(
    counts: np.ndarray, mu: np.ndarray, valid: np.ndarray, bin_s: float
) -> Residuals:
    """Autocorrelation of residuals up to a lag of 1 s; pairs with a masked bin take no part.

    Parameters
    ----------
    counts, mu : ndarray, (n_bins,)
        Spikes, and their expectation, of valid bins.
    valid : ndarray of bool, (n_all_bins,)
    bin_s : float
    """
    residual, expected = np.zeros(len(valid)), np.zeros(len(valid))
    residual[valid], expected[valid] = counts - mu, mu
    lags = np.arange(1, min(max(1, round(LONGEST_LAG_S / bin_s)), len(valid) - 1) + 1)
    correlation, band = np.empty(len(lags)), np.empty(len(lags))
    weight = valid.astype(float)
    for i, lag in enumerate(lags):
        earlier, later = slice(None, -lag), slice(lag, None)
        spread = np.sqrt((expected[earlier] @ weight[later]) * (weight[earlier] @ expected[later]))
        spread = max(spread, 1e-300)
        correlation[i] = residual[earlier] @ residual[later] / spread
        band[i] = BAND * np.sqrt(expected[earlier] @ expected[later]) / spread
    return Residuals(lags * bin_s, correlation, np.maximum(band, 1e-300))


def judge(
    space: Workspace, design: SessionDesign, unit: UnitSpikes, score: Score
) -> tuple[Rescaling, Residuals]:
    """Both, for a model's held-out predictions; `space` is the model's."""
    mu = held_out_counts(space, design, score)
    rescaling = rescaling_test(rescaled_intervals(mu, unit.bins, unit.within))
    return rescaling, residual_autocorrelation(unit.counts, mu, design.valid, design.bin_s)
