"""Does tuning deepen as the animal runs faster? The speed-gain model.

    log rate = constant + f_speed(v) + sum over planes and circles of (1 + g_t z(v)) f_t + other terms

with z(v) = log(1 + v / 5 cm/s), standardised over valid time. A positive gain g_t says that the term's part
of the log rate is multiplied up at speed: deeper and sharper tuning, with no shape assumed for either. All
coefficients and gains are fitted jointly by Newton's method on the penalised likelihood; the smoothing
strengths start from the additive model's and are chosen again at the fitted gains, where the model is linear.
Standard errors come from the full (observed) Hessian.

The test of g_t = 0 uses the efficient score at the additive fit: with e = y - mu, the statistic

    U / sqrt(V),   U = sum (e - mu X a) z f_t,   V = sum mu (z f_t)^2 - q' A^-1 q,   q = X'W z f_t,

with a and A as in `odograph.encoding.shifts`, and its rank among circular shifts of z against everything
else, U and V computed anew for every shift.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.encoding import kernels
from odograph.encoding.design import SessionDesign
from odograph.encoding.fit import Fit
from odograph.encoding.layout import Workspace
from odograph.encoding.smoothing import Quadratic, tune
from odograph.encoding.spikes import UnitSpikes

SPEED_SCALE_CM_S = 5.0
LARGEST_GAIN = 3.0
STRENGTH_ROUNDS = 2
COORDINATES_AT_ONCE = 8  # in the gain test's cross-correlations, to bound its memory


@dataclass(frozen=True)
class GainFit:
    """The joint fit: coefficients (n_coordinates,), gains and their covariance, by scaled term."""

    terms: tuple[str, ...]
    coefficients: np.ndarray
    gains: np.ndarray
    covariance: np.ndarray
    converged: bool
    log_likelihood: float


def modulation(speed_cm_s: np.ndarray) -> np.ndarray:
    """z: a monotone function of speed with mean 0 and standard deviation 1 over the given time, (n_bins,)."""
    z = np.log1p(np.maximum(speed_cm_s, 0) / SPEED_SCALE_CM_S)
    return (z - z.mean()) / z.std()


def scaled_terms(space: Workspace, names: tuple[str, ...]) -> list[int]:
    """Places in the table of the terms whose tuning is scaled by speed."""
    return [t for t, term in enumerate(space.terms) if term.name in names]


class _Joint:
    """The speed-gain model of one session's full model on its collapsed rows."""

    def __init__(
        self, space: Workspace, names: tuple[str, ...], speed_term: int, z_cell: np.ndarray, fit: Fit
    ) -> None:
        self.space, self.lay = space, space.layout
        self.cells = self.lay.table.cells
        self.z = z_cell[self.cells[speed_term]]
        self.scaled = scaled_terms(space, names)
        self.log_strengths = fit.log_strengths

    @property
    def ridge(self) -> np.ndarray:
        """Diagonal of S_lam, (n_coordinates,)."""
        return np.exp(self.log_strengths) @ self.lay.spectra

    def spikes(self, spike_cells: np.ndarray, z_spike: np.ndarray):
        """Spike sums that do not depend on the parameters: per cell, plain and weighted by z."""
        plain, weighted = [], []
        for t, term in enumerate(self.space.terms):
            plain.append(np.bincount(spike_cells[t], minlength=term.n_cells).astype(float))
            weighted.append(np.bincount(spike_cells[t], weights=z_spike, minlength=term.n_cells))
        return plain, weighted

    def effects(self, beta: np.ndarray) -> list[np.ndarray]:
        """Each term's contribution at its cells, by term."""
        self.space.expected(beta, np.ones(1 + int(self.lay.table.group.max())))
        return [
            self.space.eta[a:z].copy() for a, z in zip(self.lay.cell_start, self.lay.cell_end, strict=True)
        ]

    def rows(self, beta: np.ndarray, gains: np.ndarray):
        """Expected counts (n_rows,), each term's scale 1 + g z (n_terms, n_rows) and effects at rows."""
        scale = np.ones(self.cells.shape)
        for g, t in zip(gains, self.scaled, strict=True):
            scale[t] += g * self.z
        effect = np.array([f[c] for f, c in zip(self.effects(beta), self.cells, strict=True)])
        eta = beta[0] + np.sum(scale * effect, axis=0)
        return self.lay.table.seconds * np.exp(np.minimum(eta, 50)), scale, effect

    def value(self, beta, gains, spikes, mu) -> float:
        plain, weighted = spikes
        effects = self.effects(beta)
        total = beta[0] * plain[0].sum() + sum(f @ k for f, k in zip(effects, plain, strict=True))
        total += sum(g * (effects[t] @ weighted[t]) for g, t in zip(gains, self.scaled, strict=True))
        return float(total - mu.sum() - (self.ridge @ beta**2) / 2)

    def project(self, per_cell: list[np.ndarray], total: float) -> np.ndarray:
        return self.space.project(np.concatenate(per_cell), total)

    def step(self, beta, gains, spikes, mu, scale, effect):
        """Score and negative Hessian of the penalised likelihood in (beta, gains)."""
        plain, weighted = spikes
        n, m = len(beta), len(gains)
        cell = [
            np.bincount(c, weights=mu * s, minlength=term.n_cells)
            for c, s, term in zip(self.cells, scale, self.space.terms, strict=True)
        ]
        seen = [k.copy() for k in plain]
        for g, t in zip(gains, self.scaled, strict=True):
            seen[t] += g * weighted[t]
        score = np.empty(n + m)
        score[:n] = self.project(seen, plain[0].sum()) - self.project(cell, mu.sum()) - self.ridge * beta
        hessian = np.zeros((n + m, n + m))
        hessian[:n, :n] = self._information(mu, scale)
        hessian[np.arange(n), np.arange(n)] += self.ridge
        effects = self.effects(beta)
        for i, t in enumerate(self.scaled):
            slope = self.z * effect[t]
            score[n + i] = effects[t] @ weighted[t] - mu @ slope
            crossed = [
                np.bincount(c, weights=mu * s * slope, minlength=term.n_cells)
                for c, s, term in zip(self.cells, scale, self.space.terms, strict=True)
            ]
            # The predictor is bilinear in f_t and g_t, so the residual enters the observed Hessian as well.
            crossed[t] -= weighted[t] - np.bincount(
                self.cells[t], weights=mu * self.z, minlength=self.space.terms[t].n_cells
            )
            hessian[:n, n + i] = hessian[n + i, :n] = self.project(crossed, float(mu @ slope))
            for j, u in enumerate(self.scaled):
                hessian[n + i, n + j] = np.sum(mu * slope * self.z * effect[u])
        return score, hessian

    def _information(self, mu, scale) -> np.ndarray:
        splines = self.lay.n_splines
        raw = np.zeros((splines, splines))
        kernels.scaled_information(
            self.cells, mu, scale, *self.space.flat, self.lay.spline_count, raw
        )  # fmt: skip
        return self.space.reduce(raw)


def fit_gains(
    space: Workspace,
    design: SessionDesign,
    unit: UnitSpikes,
    fit: Fit,
    names: tuple[str, ...],
    speed_name: str,
    z: np.ndarray,
) -> GainFit:
    """Fit the speed-gain model jointly, from the additive fit of the full model.

    Parameters
    ----------
    space : Workspace
        Of the full model.
    fit : Fit
        The additive fit: the start, and the smoothing strengths that are kept.
    names : tuple of str
        The planes and circles whose tuning is scaled. A term that the unit does not encode has no gain: there
        is nothing to scale.
    speed_name : str
        The term whose cells carry z.
    z : ndarray, (n_bins,)
        From `modulation`.
    """
    speed_term = space.layout.index_of(speed_name)
    term = space.terms[speed_term]
    seconds = np.bincount(term.cell, minlength=term.n_cells)
    z_cell = np.bincount(term.cell, weights=z, minlength=term.n_cells) / np.maximum(seconds, 1)
    joint = _Joint(space, names, speed_term, z_cell, fit)
    spike_cells = np.array([t.cell[unit.bins] for t in space.terms])
    spikes = joint.spikes(spike_cells, z_cell[spike_cells[speed_term]])
    beta, gains = fit.coefficients.copy(), np.zeros(len(joint.scaled))
    for _ in range(STRENGTH_ROUNDS):
        beta, gains, inverse, value, converged = _climb(joint, beta, gains, spikes)
        _choose_strengths(joint, beta, gains, spikes)
    beta, gains, inverse, value, converged = _climb(joint, beta, gains, spikes)
    beta, gains = _free_amplitudes(joint, beta, gains, spikes)
    n = len(beta)
    names = tuple(space.terms[t].name for t in joint.scaled)
    roughness = float(joint.ridge @ beta**2) / 2
    return GainFit(names, beta, gains, inverse[n:, n:], converged, value + roughness)


def _climb(joint: _Joint, beta: np.ndarray, gains: np.ndarray, spikes):
    """Newton's method in (beta, gains) at the present strengths."""
    mu, scale, effect = joint.rows(beta, gains)
    value, inverse = joint.value(beta, gains, spikes, mu), None
    for _ in range(40):
        score, hessian = joint.step(beta, gains, spikes, mu, scale, effect)
        inverse = _inverse(hessian)
        move = inverse @ score
        if abs(score @ move) < 1e-6:
            return beta, gains, inverse, value, True
        length = min(1.0, 1.0 / max(np.abs(move[len(beta) :]).max(), 1.0), 5.0 / max(np.abs(move).max(), 5.0))
        for _ in range(30):
            there = beta + length * move[: len(beta)]
            moved = np.clip(gains + length * move[len(beta) :], -LARGEST_GAIN, LARGEST_GAIN)
            mu, scale, effect = joint.rows(there, moved)
            new = joint.value(there, moved, spikes, mu)
            if new >= value - 1e-9 * (1 + abs(value)):
                break
            length /= 2
        beta, gains, value = there, moved, new
    return beta, gains, inverse, value, False


def _free_amplitudes(joint: _Joint, beta: np.ndarray, gains: np.ndarray, spikes):
    """Let each scaled term's amplitude go unpenalised, its shape kept, and settle the gains with it.

    The penalty flattens f_t, and a flattened f_t needs a larger gain to say the same of g_t f_t; without its
    pull on the amplitude the gain is free of that bias.
    """
    n, m = len(beta), len(gains)
    held = np.zeros((n + m, n + m))
    slices = [joint.lay.slices[t] for t in joint.scaled]
    free = np.ones(n, dtype=bool)
    for block in slices:
        free[block] = False
    others = np.flatnonzero(free)
    for _ in range(20):
        mu, scale, effect = joint.rows(beta, gains)
        score, hessian = joint.step(beta, gains, spikes, mu, scale, effect)
        directions = np.zeros((n + m, len(others) + 2 * m))
        directions[others, np.arange(len(others))] = 1.0
        for i, block in enumerate(slices):
            directions[block, len(others) + i] = beta[block]
            directions[n + i, len(others) + m + i] = 1.0
            score[block] += joint.ridge[block] * beta[block]
            held[block, block] = np.diag(joint.ridge[block])
        move = directions @ np.linalg.solve(
            directions.T @ (hessian - held) @ directions + 1e-9 * np.eye(directions.shape[1]),
            directions.T @ score,
        )
        move *= min(1.0, 0.5 / max(np.abs(move[n:]).max(), 0.5))
        beta, gains = beta + move[:n], np.clip(gains + move[n:], -LARGEST_GAIN, LARGEST_GAIN)
        if np.abs(move).max() < 1e-5:
            break
    return beta, gains


def _choose_strengths(joint: _Joint, beta: np.ndarray, gains: np.ndarray, spikes) -> None:
    """Smoothing strengths at these gains, for which the model is an ordinary additive one on scaled bases."""
    n = len(beta)
    mu, scale, effect = joint.rows(beta, gains)
    score, hessian = joint.step(beta, gains, spikes, mu, scale, effect)
    information = hessian[:n, :n] - np.diag(joint.ridge)
    target = score[:n] + joint.ridge * beta + information @ beta
    problem = Quadratic(information, target, joint.lay.spectra)
    joint.log_strengths = tune(problem, joint.log_strengths, choose=True, tolerance=1e-3).log_strengths


def _inverse(hessian: np.ndarray) -> np.ndarray:
    """Inverse of the negative Hessian, its curvatures taken as positive, so that every step climbs."""
    # Strong penalties spread the diagonal over many orders of magnitude, which is scaled out first.
    scale = 1 / np.sqrt(np.maximum(np.abs(np.diag(hessian)), 1e-12))
    values, vectors = np.linalg.eigh(hessian * scale[:, None] * scale)
    vectors = vectors * scale[:, None]
    return (vectors / np.maximum(np.abs(values), 1e-10)) @ vectors.T
