"""A calibrated test of each term: is its alignment with the spikes better than shifted ones?

The model of all other terms is fitted once. The score statistic for adding the tested term,

    T = U' (B'WB + S_lam)^-1 U,      U = B'(y - mu),

is computed with the term's covariate turned circularly against spikes and the other covariates. Shifting
keeps every signal's own autocorrelation, which is what makes ordinary tests of tuning too liberal for neurons
that drift or burst; p is the rank of the true alignment, (1 + exceedances) / (1 + shifts) (Davison & Hinkley
1997, Bootstrap Methods and their Application, section 4.2). The sequence of valid time is what is turned, so
masked time has no part in it. Shifts go in steps of a few bins, over which residuals are summed; where it is
affordable all admissible shifts are had at once as a cross-correlation by FFT, else a seeded draw of them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from scipy import fft, linalg

from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Workspace
from odograph.encoding.spikes import UnitSpikes
from odograph.encoding.terms import Term

FFT_LIMIT = 4_000_000  # numbers in a term's transformed basis: about 60 MB


@dataclass(frozen=True)
class ShiftPlan:
    """How a session's covariates are turned.

    Attributes
    ----------
    bins_per_step : int
    n_steps : int
        Whole steps in valid time.
    shifts : ndarray of int, ascending
        Admissible shifts in steps, all of them.
    drawn : ndarray of int, ascending
        A seeded draw of the admissible shifts, for terms with too many columns for all.
    """

    bins_per_step: int
    n_steps: int
    shifts: np.ndarray
    drawn: np.ndarray

    def per_step(self, values: np.ndarray) -> np.ndarray:
        """Sums over steps, (n_bins,) -> (n_steps,)."""
        whole = self.n_steps * self.bins_per_step
        return values[:whole].reshape(self.n_steps, self.bins_per_step).sum(axis=1)

    def cells(self, term: Term) -> np.ndarray:
        """The cell of a term in the middle of each step, (n_steps,)."""
        return term.cell[self.bins_per_step // 2 :: self.bins_per_step][: self.n_steps]


def plan_shifts(
    n_bins: int, bin_s: float, *, step_s: float, minimum_s: float, draws: int, seed: int
) -> ShiftPlan:
    """Admissible circular shifts: whole steps, none nearer to the true alignment than `minimum_s`."""
    bins = max(1, round(step_s / bin_s))
    n_steps = n_bins // bins
    shortest = max(1, int(np.ceil(minimum_s / (bins * bin_s) - 1e-9)))
    shifts = np.arange(shortest, n_steps - shortest + 1)
    drawn = shifts
    if len(shifts) > draws:
        drawn = np.sort(np.random.default_rng(seed).choice(shifts, draws, replace=False))
    return ShiftPlan(bins, n_steps, shifts, drawn)


@njit(cache=True, nogil=True)
def shifted_cell_sums(cell, residual, shift, out):
    """out[c] = sum of residual[i] over steps whose covariate, turned by `shift`, lies in cell c."""
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


def residuals(
    space: Workspace, fit: Fit, design: SessionDesign, unit: UnitSpikes
) -> tuple[np.ndarray, np.ndarray]:
    """Counts minus expected counts, and expected counts, of every valid bin; each (n_bins,)."""
    mu = np.empty(design.n_bins)
    space.expected(fit.coefficients, np.ones(design.folds.n_groups))
    if "cells" not in (kept := design.kept.setdefault(("bins", tuple(t.name for t in space.terms)), {})):
        kept["cells"] = np.array([t.cell for t in space.terms], dtype=np.int32).reshape(len(space.terms), -1)
    scale = np.exp(fit.coefficients[0]) * design.bin_s
    bin_rates(kept["cells"], np.exp(space.eta), space.layout.cell_start, scale, mu)
    return unit.counts - mu, mu


def transform_covariate(term: Term, plan: ShiftPlan) -> np.ndarray | None:
    """Conjugate spectra of a term's coordinates over steps, (n_coordinates, n_steps // 2 + 1).

    None where they would not be worth their memory; the term's test then draws its shifts.
    """
    if term.coordinates.size * plan.n_steps > FFT_LIMIT:
        return None
    basis = term.basis.dense() @ term.coordinates.matrix()
    return fft.rfft(np.ascontiguousarray(basis[plan.cells(term)].T), axis=1)


def shift_test(
    term: Term,
    strengths: np.ndarray,
    residual: np.ndarray,
    expected: np.ndarray,
    plan: ShiftPlan,
    spectrum: np.ndarray | None,
) -> tuple[float, int]:
    """p of a term given the model of all other terms.

    Parameters
    ----------
    term : Term
        The tested term.
    strengths : ndarray, (n_penalties,)
        Its smoothing strengths in the model that has it.
    residual, expected : ndarray, (n_bins,)
        Of the model without it, see `residuals`.
    plan : ShiftPlan
    spectrum : ndarray or None
        From `transform_covariate`.

    Returns
    -------
    p : float
        NaN when there is no admissible shift.
    n_shifts : int
        Shifts behind it.
    """
    if not len(plan.shifts):
        return float("nan"), 0
    residual, expected = plan.per_step(residual), plan.per_step(expected)
    whitening, centre = _whitening(term, strengths, expected, plan)
    if spectrum is not None:
        turned = fft.irfft(np.conj(fft.rfft(residual)) * spectrum, n=plan.n_steps, axis=1)
        shifts = plan.shifts
        sums = turned[:, np.append(0, shifts)]
    else:
        shifts = plan.drawn
        basis = term.basis.dense() @ term.coordinates.matrix()
        per_cell = np.empty((len(shifts) + 1, term.n_cells))
        cell = plan.cells(term)
        for row, shift in enumerate(np.append(0, shifts)):
            shifted_cell_sums(cell, residual, int(shift), per_cell[row])
        sums = (per_cell @ basis).T
    sums -= centre[:, None] * residual.sum()
    statistic = np.sum((whitening @ sums) ** 2, axis=0)
    # Rounding must not decide ties, which occur where a covariate repeats itself.
    exceed = int(np.sum(statistic[1:] >= statistic[0] * (1 - 1e-9)))
    return (1 + exceed) / (1 + len(shifts)), len(shifts)


def _whitening(
    term: Term, strengths: np.ndarray, expected: np.ndarray, plan: ShiftPlan
) -> tuple[np.ndarray, np.ndarray]:
    """L^-1 of the statistic's metric LL' = B'WB + S_lam, B centred, and that centre."""
    basis = term.basis.dense() @ term.coordinates.matrix()
    weight = np.bincount(plan.cells(term), weights=expected, minlength=term.n_cells)
    centre = weight @ basis / weight.sum()
    centred = basis - centre
    metric = (centred * weight[:, None]).T @ centred
    metric[np.diag_indices_from(metric)] += strengths @ term.coordinates.spectra
    metric[np.diag_indices_from(metric)] += 1e-8 * np.trace(metric) / len(metric)
    lower = linalg.cholesky(metric, lower=True)
    return linalg.solve_triangular(lower, np.eye(len(lower)), lower=True), centre
