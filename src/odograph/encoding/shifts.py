"""A calibrated test of each term: is its alignment with the spikes better than shifted ones?

The model of all other terms, with design matrix X, is fitted once. The efficient score for adding the tested
term with basis B (Cox & Hinkley 1974, Theoretical Statistics, section 9.3) and its variance,

    U = B'(e - W X a),   a = A^-1 X'e,   V = B'WB - B'WX A^-1 X'WB,   A = X'WX + c S_lam,   e = y - mu,

are computed with the term's covariate turned circularly against spikes and the other covariates. `a` is a
step that undoes most of the penalty's pull on the null model (c is small), whose bias would otherwise look
like tuning to anything correlated with the other terms; V accounts for what they have already explained,
which at the true alignment is more than at any other. The statistic is a sum of squares of U standardised by
its own V, weighted towards smooth curves; of a few degrees of smoothness, set beforehand, the one that stands
out most counts, alike for all shifts (strengths fitted at the true alignment would favour it). Shifting keeps
every signal's own autocorrelation, which is what makes ordinary tests of tuning too liberal for neurons that
drift or burst; p is the rank of the true alignment, (1 + exceedances) / (1 + shifts) (Davison & Hinkley 1997,
Bootstrap Methods and their Application, section 4.2).

The sequence of valid time is what is turned, so masked time has no part in it. Shifts go in steps of a few
bins, over which residuals are summed; where it is affordable U is had for all admissible shifts at once as a
cross-correlation by FFT, else for a seeded draw of them. V away from the true alignment is the mean over a
few drawn shifts.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import fft, linalg

from odograph.compiled import compiled
from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Workspace
from odograph.encoding.smoothing import factorise
from odograph.encoding.spikes import UnitSpikes
from odograph.encoding.terms import Term

FFT_LIMIT = 4_000_000  # numbers in a term's transformed basis: about 60 MB
UNDERSMOOTHING = 0.05
VARIANCE_SHIFTS = 16
SHIFTS_AT_ONCE = 16384  # to bound the memory of intermediate results
SMOOTHNESS = (0.06, 0.25, 0.8)


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

    def at_steps(self, values: np.ndarray) -> np.ndarray:
        """Values in the middle of each step, (..., n_bins) -> (..., n_steps)."""
        return values[..., self.bins_per_step // 2 :: self.bins_per_step][..., : self.n_steps]

    def cells(self, term: Term) -> np.ndarray:
        """The cell of a term in the middle of each step, (n_steps,)."""
        return self.at_steps(term.cell)


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


@compiled
def shifted_cell_sums(cell, residual, shift, out):
    """out[c] = sum of residual[i] over steps whose covariate, turned by `shift`, lies in cell c."""
    out[:] = 0.0
    n = len(cell)
    for i in range(n - shift):
        out[cell[i + shift]] += residual[i]
    for i in range(n - shift, n):
        out[cell[i + shift - n]] += residual[i]


@compiled
def shifted_products(cells, starts, columns, weights, supports, offsets, value, cell, shift, out):
    """out[c] = sum of value[i] X[i] over steps whose tested covariate, turned by `shift`, lies in cell c.

    cells (n_terms, n_steps) of the null model's terms, whose sparse bases columns/weights are; X's splines,
    intercept first, are the columns of `out` (n_cells, n_splines), which is overwritten.
    """
    out[:, :] = 0.0
    n = len(cell)
    for i in range(n):
        c = cell[(i + shift) % n]
        out[c, 0] += value[i]
        for t in range(len(starts)):
            k = starts[t] + cells[t, i]
            for j in range(supports[t]):
                out[c, offsets[t] + columns[k, j]] += value[i] * weights[k, j]


@dataclass(frozen=True)
class NullModel:
    """A model without the tested term, over steps.

    Attributes
    ----------
    residual : ndarray, (n_steps,)
        e - W X a, see the module's text.
    expected : ndarray, (n_steps,)
        W's diagonal: expected spikes.
    space : Workspace
    inverse : ndarray, (n_coordinates, n_coordinates)
        A^-1.
    """

    residual: np.ndarray
    expected: np.ndarray
    space: Workspace
    inverse: np.ndarray


def null_model(
    space: Workspace, fit: Fit, design: SessionDesign, unit: UnitSpikes, plan: ShiftPlan
) -> NullModel:
    """Prepare the fitted model without the tested term."""
    ones = np.ones(design.folds.n_groups)
    total = space.expected(fit.coefficients, ones)
    factors = np.exp(space.eta)
    gradient, information = space.derivatives(total)
    places = list(zip(space.layout.cell_start, space.layout.cell_end, space.terms, strict=True))
    mu = np.full(design.n_bins, np.exp(fit.coefficients[0]) * design.bin_s)
    for start, end, term in places:
        mu *= factors[start:end][term.cell]
    ridge = np.exp(fit.log_strengths) @ space.layout.spectra
    score = space.project(
        np.concatenate([unit.per_cell(t) for t in space.terms]) if space.terms else np.empty(0), unit.n_spikes
    )
    inverse = factorise(information + np.diag(UNDERSMOOTHING * ridge))[1]
    step = inverse @ (score - gradient)
    effects = space.effects(step)
    shift = np.full(design.n_bins, step[0])
    for start, end, term in places:
        shift += effects[start:end][term.cell]
    residual = plan.per_step(unit.counts - mu * (1 + shift))
    return NullModel(residual - residual.mean(), plan.per_step(mu), space, inverse)


def step_cells(space: Workspace, plan: ShiftPlan) -> np.ndarray:
    """The cell of each of a model's terms in the middle of every step, (n_terms, n_steps) of int32."""
    cells = [plan.cells(term) for term in space.terms]
    return np.array(cells, dtype=np.int32).reshape(len(cells), plan.n_steps)


def transform_covariate(term: Term, plan: ShiftPlan) -> np.ndarray | None:
    """Conjugate spectra of a term's coordinates over steps, (n_coordinates, n_steps // 2 + 1).

    None where they would not be worth their memory; the term's test then draws its shifts.
    """
    if term.coordinates.size * plan.n_steps > FFT_LIMIT:
        return None
    basis = term.functions
    return fft.rfft(np.ascontiguousarray(basis[plan.cells(term)].T), axis=1)


def score_variance(term: Term, null: NullModel, plan: ShiftPlan, cells: np.ndarray, shift: int) -> np.ndarray:
    """V of a term turned by `shift` steps, (n_coordinates, n_coordinates); cells (n_terms, n_steps)."""
    lay = null.space.layout
    products = np.empty((term.n_cells, lay.n_splines))
    shifted_products(
        cells,
        lay.cell_start,
        lay.columns,
        lay.weights,
        lay.support,
        lay.spline_start,
        null.expected,
        plan.cells(term),
        shift,
        products,
    )
    basis = term.functions
    own = (basis * products[:, :1]).T @ basis
    crossed = null.space.reduce_rows(np.ascontiguousarray(products.T)) @ basis
    return own - crossed.T @ null.inverse @ crossed


def shift_test(
    term: Term, null: NullModel, plan: ShiftPlan, spectrum: np.ndarray | None, cells: np.ndarray
) -> tuple[float, int]:
    """p of a term given the model of all other terms.

    Parameters
    ----------
    term : Term
        The tested term.
    null : NullModel
    plan : ShiftPlan
    spectrum : ndarray or None
        From `transform_covariate`.
    cells : ndarray of int32, (n_terms, n_steps)
        Of the null model's terms, in the middle of each step.

    Returns
    -------
    p : float
        NaN when there is no admissible shift.
    n_shifts : int
        Shifts behind it.
    """
    if not len(plan.shifts):
        return float("nan"), 0
    at_truth, away, weights = _standardisers(term, null, plan, cells)
    shifts = plan.shifts if spectrum is not None else plan.drawn
    if spectrum is not None:
        turned = np.empty((len(spectrum), plan.n_steps))
        residual = np.conj(fft.rfft(null.residual))
        for row, one in zip(turned, spectrum, strict=True):
            row[:] = fft.irfft(residual * one, n=plan.n_steps)
        truth, sums = turned[:, :1], turned[:, shifts[0] : shifts[-1] + 1]
    else:
        per_cell = np.empty((len(shifts) + 1, term.n_cells))
        for row, shift in enumerate(np.append(0, shifts)):
            shifted_cell_sums(plan.cells(term), null.residual, int(shift), per_cell[row])
        sums = (per_cell @ term.functions).T
        truth, sums = sums[:, :1], sums[:, 1:]
    squares = [weights @ (at_truth @ truth) ** 2]
    for first in range(0, len(shifts), SHIFTS_AT_ONCE):
        squares.append(weights @ (away @ sums[:, first : first + SHIFTS_AT_ONCE]) ** 2)
    statistic = _largest(np.hstack(squares))
    # Rounding must not decide ties, which occur where a covariate repeats itself.
    exceed = int(np.sum(statistic[1:] >= statistic[0] - 1e-9 * abs(statistic[0])))
    return (1 + exceed) / (1 + len(shifts)), len(shifts)


def _largest(sums: np.ndarray) -> np.ndarray:
    """Over degrees of smoothness, the largest of each alignment's sums in standard deviations."""
    centre, spread = sums.mean(axis=1, keepdims=True), sums.std(axis=1, keepdims=True)
    return np.max((sums - centre) / np.maximum(spread, 1e-300), axis=0)


def _standardisers(
    term: Term, null: NullModel, plan: ShiftPlan, cells: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Matrices that standardise U at the true alignment and away from it, and weights of its squares.

    Both lead to coordinates in which U has unit variance and roughness is diagonal; weights, (n_degrees,
    n_coordinates), make sums with SMOOTHNESS times the coordinates as effective degrees of freedom.
    """
    drawn = plan.drawn[np.linspace(0, len(plan.drawn) - 1, min(VARIANCE_SHIFTS, len(plan.drawn))).astype(int)]
    away = np.mean([score_variance(term, null, plan, cells, int(shift)) for shift in drawn], axis=0)
    away = _floored(away)
    # Where the other terms determine the covariate, what is left to standardise by is kept from vanishing.
    truth = _floored(score_variance(term, null, plan, cells, 0)) + 1e-3 * away
    roughness = term.coordinates.spectra.sum(axis=0)
    stiff, vectors = linalg.eigh(np.diag(roughness), away)
    stiff = np.maximum(stiff, 0)
    weights = np.array([1 / (1 + _strength(stiff, share * len(stiff)) * stiff) for share in SMOOTHNESS])
    inverse = linalg.solve_triangular(linalg.cholesky(truth, lower=True), np.eye(len(truth)), lower=True)
    return vectors.T @ linalg.cholesky(away, lower=True) @ inverse, vectors.T, weights


def _floored(variance: np.ndarray) -> np.ndarray:
    """A variance whose eigenvalues are at least a thousandth of their mean.

    Directions that the data do not inform (splines never visited, the constant of a category's levels) have
    none, up to rounding of either sign; U is as good as zero there, and stays so.
    """
    values, vectors = np.linalg.eigh((variance + variance.T) / 2)
    lowest = 1e-3 * max(values.mean(), 1e-12)
    return (vectors * np.maximum(values, lowest)) @ vectors.T


def _strength(stiff: np.ndarray, freedom: float) -> float:
    """The strength at which sum 1 / (1 + strength * stiff) is `freedom`, or as near as it can be."""
    free = np.sum(stiff <= 1e-12 * stiff.max())
    if freedom <= free + 0.1:
        freedom = free + 0.1 * (len(stiff) - free)
    low, high = -60.0, 60.0
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if np.sum(1 / (1 + np.exp(middle) * stiff)) > freedom else (low, middle)
    return float(np.exp(middle))
