"""Does tuning deepen as the animal runs faster? The speed-gain model.

    log rate = constant + f_speed(v) + sum over planes and circles of (1 + g_t z(v)) f_t + other terms

with z(v) = log(1 + v / 5 cm/s), standardised over valid time. A positive gain g_t says that the term's part
of the log rate is multiplied up at speed: deeper and sharper tuning, with no shape assumed for either.

All coefficients and gains are fitted jointly by Newton's method on the penalised likelihood. The smoothing
strengths start from the additive model's and are chosen again at the fitted gains, at which the model is
linear in its coefficients. Standard errors come from the full (observed) Hessian, with the uncertainty of the
chosen strengths added to first order (Wood, Pya & Saefken 2016, J. Am. Stat. Assoc. 111:1548).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.encoding import kernels
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Workspace
from odograph.encoding.smoothing import Quadratic, strength_covariance, tune
from odograph.encoding.spikes import UnitSpikes

SPEED_SCALE_CM_S = 5.0
LARGEST_GAIN = 3.0
STRENGTH_ROUNDS = 2
LARGEST_ROUNDS = 40
DECREMENT = 1e-6  # twice the penalised likelihood, in nats, that a fit may leave to be gained


@dataclass(frozen=True)
class GainFit:
    """The joint fit.

    Attributes
    ----------
    terms : tuple of str
        The scaled terms.
    coefficients : ndarray, (n_coordinates,)
    gains : ndarray, (n_scaled,)
        Per standard deviation of z.
    covariance : ndarray, (n_scaled, n_scaled)
        Of the gains.
    converged : bool
    """

    terms: tuple[str, ...]
    coefficients: np.ndarray
    gains: np.ndarray
    covariance: np.ndarray
    converged: bool


@dataclass(frozen=True)
class Point:
    """The model at some parameters.

    Attributes
    ----------
    coefficients : ndarray, (n_coordinates,)
    gains : ndarray, (n_scaled,)
    effects : ndarray, (all cells,)
        Every term's part of the log rate at its cells, unscaled, laid end to end.
    mu : ndarray, (n_rows,)
        Expected spikes of every row.
    by_term : ndarray, (n_terms,)
        The gains of all terms, 0 of those that are not scaled.
    value : float
        Penalised log-likelihood.
    """

    coefficients: np.ndarray
    gains: np.ndarray
    effects: np.ndarray
    mu: np.ndarray
    by_term: np.ndarray
    value: float


def modulation(speed_cm_s: np.ndarray) -> np.ndarray:
    """z: a monotone function of speed with mean 0 and standard deviation 1 over the given time, (n_bins,)."""
    z = np.log1p(np.maximum(speed_cm_s, 0) / SPEED_SCALE_CM_S)
    return (z - z.mean()) / z.std()


class GainModel:
    """The speed-gain model of one unit on the collapsed rows of its session's full model.

    Parameters
    ----------
    space : Workspace
        Of the full model.
    unit : UnitSpikes
    fit : Fit
        The additive fit: where smoothing strengths start.
    names : tuple of str
        The scaled terms.
    speed_name : str
        The term whose cells carry z.
    z : ndarray, (n_bins,)
        From `modulation`.
    """

    def __init__(
        self,
        space: Workspace,
        unit: UnitSpikes,
        fit: Fit,
        names: tuple[str, ...],
        speed_name: str,
        z: np.ndarray,
    ) -> None:
        self.space, self.lay = space, space.layout
        self.cells, terms = self.lay.table.cells, space.terms
        self.scaled = [t for t, term in enumerate(terms) if term.name in names]
        self.log_strengths = fit.log_strengths
        self.n_spikes = float(unit.n_spikes)
        speed = self.lay.index_of(speed_name)
        cell, n_cells = terms[speed].cell, terms[speed].n_cells
        z_cell = np.bincount(cell, z, n_cells) / np.maximum(np.bincount(cell, minlength=n_cells), 1)
        self.z = z_cell[self.cells[speed]]
        z_spike = z_cell[cell[unit.bins]]
        # Spikes of every cell, plain and weighted by their z: all that the likelihood asks of them.
        self.spikes = np.concatenate([unit.per_cell(term) for term in terms])
        self.weighted = np.concatenate([np.bincount(t.cell[unit.bins], z_spike, t.n_cells) for t in terms])

    def of(self, t: int) -> slice:
        """The cells of a term among those of all terms."""
        return slice(self.lay.cell_start[t], self.lay.cell_end[t])

    def seen(self, gains: np.ndarray) -> np.ndarray:
        """Spikes of every cell, each counted with its term's scale, (all cells,)."""
        out = self.spikes.copy()
        for g, t in zip(gains, self.scaled, strict=True):
            out[self.of(t)] += g * self.weighted[self.of(t)]
        return out

    @property
    def ridge(self) -> np.ndarray:
        """Diagonal of S_lam, (n_coordinates,)."""
        return np.exp(self.log_strengths) @ self.lay.spectra

    def at(self, coefficients: np.ndarray, gains: np.ndarray) -> Point:
        """The model at some parameters."""
        effects = self.space.effects(coefficients).copy()
        by_term = np.zeros(len(self.cells))
        by_term[self.scaled] = gains
        mu, seconds, starts = np.empty(len(self.z)), self.lay.table.seconds, self.lay.cell_start
        total = kernels.scaled_counts(
            self.cells, seconds, by_term, self.z, effects, starts, coefficients[0], mu
        )
        value = self.n_spikes * coefficients[0] + effects @ self.seen(gains) - total
        value -= self.ridge @ coefficients**2 / 2
        return Point(coefficients, gains, effects, mu, by_term, float(value))

    def derivatives(self, point: Point) -> tuple[np.ndarray, np.ndarray]:
        """Score, (n + n_scaled,), and negative Hessian of the penalised likelihood at a point."""
        n, m = len(point.coefficients), len(self.scaled)
        hessian = np.zeros((n + m, n + m))
        hessian[:n, :n], expected = self._information(point)
        hessian[np.arange(n), np.arange(n)] += self.ridge
        score = np.empty(n + m)
        score[:n] = self.space.project(self.seen(point.gains), self.n_spikes) - expected
        score[:n] -= self.ridge * point.coefficients
        slopes = [self.z * point.effects[self.of(t)][self.cells[t]] for t in self.scaled]
        for i, t in enumerate(self.scaled):
            pull = point.mu * slopes[i]
            total = pull.sum()
            score[n + i] = point.effects[self.of(t)] @ self.weighted[self.of(t)] - total
            crossed = np.empty(len(self.spikes))
            kernels.scaled_sums(self.cells, pull, point.by_term, self.z, self.lay.cell_start, crossed)
            # The predictor is bilinear in f_t and g_t, so the residual enters the observed Hessian as well.
            n_cells = len(point.effects[self.of(t)])
            crossed[self.of(t)] -= self.weighted[self.of(t)]
            crossed[self.of(t)] += np.bincount(self.cells[t], point.mu * self.z, n_cells)
            hessian[:n, n + i] = hessian[n + i, :n] = self.space.project(crossed, total)
            for j in range(m):
                hessian[n + i, n + j] = pull @ slopes[j]
        return score, hessian

    def _information(self, point: Point) -> tuple[np.ndarray, np.ndarray]:
        """X'WX and X'mu of the bases as scaled at the point."""
        raw = np.empty((self.lay.n_splines, self.lay.n_splines))
        kernels.scaled_information(
            self.cells, point.mu, point.by_term, self.z, *self.space.flat, self.lay.spline_count, raw
        )
        information = self.space.reduce(raw)
        return information, information[:, 0].copy()


def fit_gains(
    space: Workspace, unit: UnitSpikes, fit: Fit, names: tuple[str, ...], speed_name: str, z: np.ndarray
) -> GainFit:
    """Fit the speed-gain model jointly, from the additive fit of the full model; see `GainModel`.

    Scale only planes and circles that the unit encodes: elsewhere there is nothing whose depth could change.
    """
    model = GainModel(space, unit, fit, names, speed_name, z)
    point = model.at(fit.coefficients, np.zeros(len(model.scaled)))
    for _ in range(STRENGTH_ROUNDS):
        point, _, converged = _climb(model, point)
        _choose_strengths(model, point)
    point, inverse, converged = _climb(model, model.at(point.coefficients, point.gains))
    covariance = _gain_covariance(model, point, inverse)
    if converged:
        point, converged = _free_amplitudes(model, point)
    terms = tuple(space.terms[t].name for t in model.scaled)
    return GainFit(terms, point.coefficients, point.gains, covariance, converged)


def _climb(model: GainModel, point: Point) -> tuple[Point, np.ndarray, bool]:
    """Newton's method in coefficients and gains at the present strengths; the last inverse Hessian beside."""
    n, inverse = len(point.coefficients), np.empty((0, 0))
    for _ in range(LARGEST_ROUNDS):
        score, hessian = model.derivatives(point)
        inverse = _inverse(hessian)
        move = inverse @ score
        if score @ move < DECREMENT:
            return point, inverse, True
        length = min(1.0, 1.0 / max(np.abs(move[n:]).max(), 1.0), 5.0 / max(np.abs(move).max(), 5.0))
        for _ in range(30):
            gains = np.clip(point.gains + length * move[n:], -LARGEST_GAIN, LARGEST_GAIN)
            there = model.at(point.coefficients + length * move[:n], gains)
            if there.value >= point.value - 1e-9 * (1 + abs(point.value)):
                break
            length /= 2
        point = there
    return point, inverse, False


def _free_amplitudes(model: GainModel, point: Point) -> tuple[Point, bool]:
    """Let each scaled term's amplitude go unpenalised, its shape kept, and settle the gains with it.

    The penalty flattens f_t, and a flattened f_t needs a larger gain to say the same of g_t f_t; without its
    pull on the amplitude the gain is free of that bias.
    """
    n, m = len(point.coefficients), len(point.gains)
    blocks = [model.lay.slices[t] for t in model.scaled]
    scaled = np.concatenate([np.arange(block.start, block.stop) for block in blocks])
    others = np.setdiff1d(np.arange(n), scaled)
    ridge = np.zeros(n + m)
    ridge[scaled] = model.ridge[scaled]
    directions = np.zeros((n + m, len(others) + 2 * m))
    directions[others, np.arange(len(others))] = 1.0
    directions[np.arange(n, n + m), len(others) + m + np.arange(m)] = 1.0
    for _ in range(LARGEST_ROUNDS):
        score, hessian = model.derivatives(point)
        score[scaled] += ridge[scaled] * point.coefficients[scaled]
        hessian[np.diag_indices(n + m)] -= ridge
        for i, block in enumerate(blocks):
            directions[block, len(others) + i] = point.coefficients[block]
        move = directions @ (_inverse(directions.T @ hessian @ directions) @ (directions.T @ score))
        if np.abs(move).max() < 1e-5:
            return point, True
        move *= min(1.0, 0.5 / max(np.abs(move[n:]).max(), 0.5))
        gains = np.clip(point.gains + move[n:], -LARGEST_GAIN, LARGEST_GAIN)
        point = model.at(point.coefficients + move[:n], gains)
    return point, False


def _working_problem(model: GainModel, point: Point) -> Quadratic:
    """Around these gains, at which the model is an ordinary additive one on scaled bases."""
    n = len(point.coefficients)
    score, hessian = model.derivatives(point)
    information = hessian[:n, :n] - np.diag(model.ridge)
    target = score[:n] + model.ridge * point.coefficients + information @ point.coefficients
    return Quadratic(information, target, model.lay.spectra)


def _choose_strengths(model: GainModel, point: Point) -> None:
    """Smoothing strengths at these gains."""
    problem = _working_problem(model, point)
    model.log_strengths = tune(problem, model.log_strengths, choose=True, tolerance=1e-3).log_strengths


def _gain_covariance(model: GainModel, point: Point, inverse: np.ndarray) -> np.ndarray:
    """Covariance of the gains: their block of the inverse Hessian, and what the strengths may move them."""
    n = len(point.coefficients)
    pulls = np.exp(model.log_strengths)[:, None] * model.lay.spectra * point.coefficients
    slopes = -inverse[n:, :n] @ pulls.T
    return (
        inverse[n:, n:]
        + slopes @ strength_covariance(_working_problem(model, point), model.log_strengths) @ slopes.T
    )


def _inverse(hessian: np.ndarray) -> np.ndarray:
    """Inverse of the negative Hessian, its curvatures taken as positive, so that every step climbs."""
    # Strong penalties spread the diagonal over many orders of magnitude, which is scaled out first.
    scale = 1 / np.sqrt(np.maximum(np.abs(np.diag(hessian)), 1e-12))
    values, vectors = np.linalg.eigh(hessian * scale[:, None] * scale)
    vectors = vectors * scale[:, None]
    return (vectors / np.maximum(np.abs(values), 1e-10)) @ vectors.T
