"""How well does a model describe a unit's spike train, on time that played no part in fitting it?

Every valid bin is held out by one fold, so the folds' predictions together give an expected count for all of
valid time. Two questions are asked of it:

- Time rescaling: with time measured in expected spikes, the intervals between spikes are exponential with
  mean 1 if the model is right (Brown, Barbieri, Ventura, Kass & Frank 2002, Neural Comput. 14:325). The
  expected rate is constant within a bin, so an interval is exact whatever the width of bins. Masked time
  stands still. The rate is fitted, not known, and its mean follows the spikes of the whole session: for
  simulated units that the model describes, p is rarely small (below 0.05 in under 5 % of them).
- Residuals: counts less their expectation have no memory under the model. The product of two Poisson
  residuals has mean 0 and variance mu_i mu_j, which gives the band around an autocorrelation of 0 (serial
  correlation of counts: Cameron & Trivedi 1998, Regression Analysis of Count Data, chapter 7).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft
from scipy.special import kolmogorov, ndtri

from odograph.encoding.design import SessionDesign
from odograph.encoding.evaluate import Score
from odograph.encoding.layout import Workspace
from odograph.encoding.spikes import UnitSpikes

LONGEST_LAG_S = 1.0
BAND = float(ndtri(0.975))
STRETCH = 8192  # bins transformed at once: they stay in the processor's cache


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
        """The correlation of the largest absolute value, and its lag in s."""
        k = int(np.argmax(np.abs(self.correlation)))
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

    p from the limiting distribution, corrected for n (Vrbik 2018, Pioneer J. Theor. Appl. Stat. 15:15); it is
    within 0.001 of the exact one for n of 20 and more.
    """
    n = len(intervals)
    if n == 0:
        return Rescaling(float("nan"), float("nan"), 0)
    uniform = np.sort(-np.expm1(-intervals))
    steps = np.arange(n + 1) / n
    statistic = float(max(np.max(steps[1:] - uniform), np.max(uniform - steps[:-1])))
    x = statistic * np.sqrt(n)
    return Rescaling(statistic, float(kolmogorov(x + 1 / (6 * np.sqrt(n)) + (x - 1) / (4 * n))), n)


def lagged_products(signals: np.ndarray, pairs: list[tuple[int, int]], n_lags: int) -> np.ndarray:
    """Sums over i of a[i] b[i + lag] for lags of 1 to `n_lags`, (n_pairs, n_lags), by FFT.

    Parameters
    ----------
    signals : ndarray, (n_signals, n)
    pairs : list of (int, int)
        Which signals are a and b.
    n_lags : int
    """
    size = fft.next_fast_len(min(STRETCH, signals.shape[1]) + 2 * n_lags, real=True)
    own = size - n_lags  # a stretch of its own bins, followed by those that it reaches
    spectra = np.zeros((len(pairs), size // 2 + 1), dtype=complex)
    for first in range(0, signals.shape[1], own):
        earlier = np.conj(fft.rfft(signals[:, first : first + own], size))
        later = fft.rfft(signals[:, first : first + size], size)
        for spectrum, (a, b) in zip(spectra, pairs, strict=True):
            spectrum += earlier[a] * later[b]
    return fft.irfft(spectra, size)[:, 1 : n_lags + 1]


def residual_autocorrelation(
    counts: np.ndarray, mu: np.ndarray, valid: np.ndarray, bin_s: float
) -> Residuals:
    """Autocorrelation of residuals up to a lag of 1 s; pairs with a masked bin take no part.

    The sum of r_i r_j over pairs of bins at a lag, and the standard deviation of it under the model, are
    divided by (sum mu_i sum mu_j)^1/2 over the same pairs. A lag without pairs has a correlation and a band
    of 0.

    Parameters
    ----------
    counts, mu : ndarray, (n_bins,)
        Spikes, and their expectation, of valid bins.
    valid : ndarray of bool, (n_all_bins,)
    bin_s : float
    """
    signals = np.zeros((3, len(valid)))
    for signal, values in zip(signals, (counts - mu, mu, 1.0), strict=True):
        signal[valid] = values
    n_lags = min(max(1, round(LONGEST_LAG_S / bin_s)), len(valid) - 1)
    pairs = [(0, 0), (1, 1), (1, 2), (2, 1)]
    products, variance, before, after = lagged_products(signals, pairs, n_lags)
    # By FFT a sum of nothing is 0 up to rounding, of either sign.
    paired = np.minimum(before, after) > 1e-9 * mu.sum()
    scale = np.where(paired, 1 / np.sqrt(np.where(paired, before * after, 1.0)), 0.0)
    lag_s = bin_s * np.arange(1, n_lags + 1)
    return Residuals(lag_s, products * scale, BAND * np.sqrt(np.maximum(variance, 0.0)) * scale)


def judge(
    space: Workspace, design: SessionDesign, unit: UnitSpikes, score: Score
) -> tuple[Rescaling, Residuals]:
    """Both, for a model's held-out predictions; `space` is the model's."""
    mu = held_out_counts(space, design, score)
    rescaling = rescaling_test(rescaled_intervals(mu, unit.bins, unit.within))
    return rescaling, residual_autocorrelation(unit.counts, mu, design.valid, design.bin_s)
