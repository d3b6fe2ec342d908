"""A calibrated test of each term: is its alignment with the spikes better than shifted ones?

The model of all other terms is fitted once. The score statistic for adding the tested term,

    T = U' (B'WB + S_lam)^-1 U,      U = B'(y - mu),

is computed with the term's covariate turned circularly against spikes and the other covariates. Shifting
keeps every signal's own autocorrelation, which is what makes ordinary tests of tuning too liberal for neurons
that drift or burst; p is the rank of the true alignment, (1 + exceedances) / (1 + shifts) (Davison & Hinkley
1997, Bootstrap Methods and their Application, section 4.2). Shifts turn the sequence of valid bins, so masked
time has no part in them.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from scipy import linalg

from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Workspace
from odograph.encoding.spikes import UnitSpikes
from odograph.encoding.terms import Term


@njit(cache=True, nogil=True)
def shifted_cell_sums(cell, residual, shift, out):
    """out[c] = sum of residual[i] over bins whose covariate, turned by `shift` bins, lies in cell c."""
    out[:] = 0.0
    n = len(cell)
    for i in range(n - shift):
        out[cell[i + shift]] += residual[i]
    for i in range(n - shift, n):
        out[cell[i + shift - n]] += residual[i]


@njit(cache=True, nogil=True)
def bin_rates(cells, factors, starts, scale, out):
    """Expected count of every valid bin: `scale` times one factor per term; cells (n_terms, n_bins)."""
    for i in range(len(out)):
        value = scale
        for t in range(len(starts)):
            value *= factors[starts[t] + cells[t, i]]
        out[i] = value


def draw_shifts(n_bins: int, bin_s: float, n_shifts: int, minimum_s: float, seed: int) -> np.ndarray:
    """Distinct circular shifts in bins, ascending, none nearer to zero than `minimum_s`."""
    shortest = max(1, round(minimum_s / bin_s))
    admissible = np.arange(shortest, n_bins - shortest + 1)
    if len(admissible) <= n_shifts:
        return admissible
    return np.sort(np.random.default_rng(seed).choice(admissible, n_shifts, replace=False))


def residuals(
    space: Workspace, fit: Fit, design: SessionDesign, unit: UnitSpikes
) -> tuple[np.ndarray, np.ndarray]:
    """Counts minus expected counts, and expected counts, of every valid bin; each (n_bins,)."""
    mu = np.empty(design.n_bins)
    space.expected(fit.coefficients, np.ones(design.folds.n_groups))
    cells = np.array([term.cell for term in space.terms], dtype=np.int32).reshape(len(space.terms), -1)
    scale = np.exp(fit.coefficients[0]) * design.bin_s
    bin_rates(cells, np.exp(space.eta), space.layout.cell_start, scale, mu)
    return unit.counts - mu, mu


def shift_test(
    term: Term, strengths: np.ndarray, residual: np.ndarray, expected: np.ndarray, shifts: np.ndarray
) -> float:
    """p of a term given the model of all other terms.

    Parameters
    ----------
    term : Term
        The tested term.
    strengths : ndarray, (n_penalties,)
        Its smoothing strengths in the model that has it.
    residual, expected : ndarray, (n_bins,)
        Of the model without it, see `residuals`.
    shifts : ndarray of int, (n_shifts,)

    Returns
    -------
    float
        NaN when there is no admissible shift.
    """
    if not len(shifts):
        return float("nan")
    basis = term.basis.dense() @ term.coordinates.matrix()
    weight = np.bincount(term.cell, weights=expected, minlength=term.n_cells)
    centre = weight / weight.sum()
    basis = basis - centre @ basis
    metric = (basis * weight[:, None]).T @ basis
    metric[np.diag_indices_from(metric)] += strengths @ term.coordinates.spectra
    metric[np.diag_indices_from(metric)] += 1e-8 * np.trace(metric) / len(metric)
    whitened = linalg.solve_triangular(linalg.cholesky(metric, lower=True), basis.T, lower=True)
    sums = np.empty((len(shifts) + 1, term.n_cells))
    for row, shift in enumerate(np.append(0, shifts)):
        shifted_cell_sums(term.cell, residual, int(shift), sums[row])
    statistic = np.sum((sums @ whitened.T) ** 2, axis=1)
    return float((1 + np.sum(statistic[1:] >= statistic[0])) / (1 + len(shifts)))
