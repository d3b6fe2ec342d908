"""Smoothing strengths by restricted maximum likelihood of the working least-squares problem.

With information H and working right-hand side w fixed, the restricted likelihood of the log strengths rho is,
up to a constant (Wood 2011, J. R. Stat. Soc. B 73:3; Wood & Fasiolo 2017, Biometrics 73:1071),

    -V(rho) = w' A^-1 w / 2 - log|A| / 2 + log|S_lam|_+ / 2,      A = H + S_lam,

whose stationary point is the fixed point of the generalized Fellner-Schall update. Because all penalties are
diagonal (`odograph.encoding.bases`), its gradient and Hessian cost no more than the inverse of A, so Newton's
method takes the place of the slowly converging update, which is kept as the fallback.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.linalg import lapack

from odograph.compiled import compiled
from odograph.encoding import kernels

LARGEST_LOG_STRENGTH = 20.0
SMALLEST_LOG_STRENGTH = -12.0
LARGEST_MOVE = 4.0
INNER_ROUNDS = 4
SMALLEST_CURVATURE = 0.1


@dataclass(frozen=True)
class Quadratic:
    """The working problem: maximise w'b - b'(H + S_lam) b / 2.

    Attributes
    ----------
    information : ndarray, (n, n)
        H = X'WX.
    target : ndarray, (n,)
        w = X'(y - mu) + H b at the rates around which the problem was made.
    spectra : ndarray, (n_penalties, n)
    """

    information: np.ndarray
    target: np.ndarray
    spectra: np.ndarray


@dataclass(frozen=True)
class State:
    """The working problem solved at some strengths; `settled` when no strength wants to move further."""

    coefficients: np.ndarray
    covariance: np.ndarray
    log_strengths: np.ndarray
    settled: bool


def neutral_strengths(information: np.ndarray, spectra: np.ndarray) -> np.ndarray:
    """Log strengths at which each penalty weighs about as much as the data in its coordinates."""
    diagonal = np.diag(information)
    weight = [max(diagonal[s > 0].sum(), 1e-6) / s.sum() for s in spectra]
    return np.clip(np.log(np.array(weight)), SMALLEST_LOG_STRENGTH, LARGEST_LOG_STRENGTH)


def factorise(matrix: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Lower Cholesky factor and inverse of a symmetric positive definite matrix.

    Every coordinate gets a ridge of 1e-12 of its own diagonal, or as much more as the factorisation needs (of
    the mean diagonal, where no data inform it and no penalty holds it). A ridge of one size for all would
    weigh on what goes unpenalised as soon as another coordinate is held stiffly.

    Raises
    ------
    FloatingPointError
        The matrix is not positive definite even with a thousandth of its mean diagonal added.
    """
    diagonal = np.diag(matrix)
    scale = np.where(diagonal > 0, diagonal, max(diagonal.mean(), 0.0))
    for ridge in (1e-12, 1e-9, 1e-6, 1e-3):
        lifted = matrix.copy()
        lifted.flat[:: len(matrix) + 1] += ridge * scale
        lower, status = lapack.dpotrf(lifted.T, lower=1, clean=0, overwrite_a=1)
        if status == 0:
            inverse, status = lapack.dpotri(lower, lower=1)
        if status == 0:
            kernels.mirror(inverse)
            return lower, inverse
    raise FloatingPointError("the penalised information matrix is not positive definite")


@compiled
def strength_derivatives(covariance, coefficients, spectra, strengths):
    """What V's derivatives by the log strengths are made of.

    covariance (n, n), coefficients (n,), spectra (n_penalties, n), strengths (n_penalties,). Returns
    strength_j times b'S_j b, tr(S_lam^- S_j) and tr(A^-1 S_j), each (n_penalties,), and the Hessian of V,
    (n_penalties, n_penalties).
    """
    m, n = spectra.shape
    rough, ratio, trace, hessian = np.zeros(m), np.zeros(m), np.zeros(m), np.zeros((m, m))
    total = np.zeros(n)
    for j in range(m):
        for i in range(n):
            total[i] += strengths[j] * spectra[j, i]
    for j in range(m):
        across = np.zeros(n)
        for i in range(n):
            w = strengths[j] * spectra[j, i]
            if w == 0.0:
                continue
            rough[j] += w * coefficients[i] ** 2
            ratio[j] += w / total[i]
            trace[j] += w * covariance[i, i]
            pull = w * coefficients[i]
            for k in range(n):
                c = covariance[i, k]
                across[k] += c * (2 * pull * coefficients[k] + w * c)
            for k in range(m):
                hessian[j, k] += w * strengths[k] * spectra[k, i] / total[i] ** 2 / 2
        for k in range(m):
            for i in range(n):
                hessian[j, k] -= across[i] * strengths[k] * spectra[k, i] / 2
        hessian[j, j] += (rough[j] - ratio[j] + trace[j]) / 2
    return rough, ratio, trace, hessian


@compiled
def descent(hessian, gradient, free):
    """Newton's move, (n,), among the `free` entries, for a function that need not be convex."""
    places = np.flatnonzero(free)
    n = len(places)
    block = np.empty((n, n))
    for i in range(n):
        for j in range(n):
            block[i, j] = hessian[places[i], places[j]]
    values, vectors = np.linalg.eigh(block)
    move = np.zeros(len(gradient))
    for k in range(n):
        slope = 0.0
        for i in range(n):
            slope += vectors[i, k] * gradient[places[i]]
        # Where the curvature is not positive the direction still descends, with a length the slope sets.
        curvature = max(abs(values[k]), abs(slope) / LARGEST_MOVE, 1e-7)
        for i in range(n):
            move[places[i]] -= vectors[i, k] * slope / curvature
    return move


class _Solved:
    """The working problem at given log strengths, with what Newton's method on them needs."""

    def __init__(self, problem: Quadratic, rho: np.ndarray) -> None:
        self.problem, self.rho, self.strengths = problem, rho, np.exp(rho)
        penalised = problem.information.copy()
        if len(rho):
            penalised.flat[:: len(penalised) + 1] += self.total
        lower, self.covariance = factorise(penalised)
        self.coefficients = self.covariance @ problem.target
        self._half_log_determinant = float(np.log(np.diag(lower)).sum())

    @property
    def value(self) -> float:
        """V(rho): the negative restricted log-likelihood, to be minimised."""
        prior = np.log(self.total[self.total > 0]).sum()
        return float(-(self.problem.target @ self.coefficients) / 2 + self._half_log_determinant - prior / 2)

    @cached_property
    def total(self) -> np.ndarray:
        """Diagonal of S_lam, (n,)."""
        return self.strengths @ self.problem.spectra

    @cached_property
    def derivatives(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """strength_j times b'S_j b, tr(S_lam^- S_j) and tr(A^-1 S_j), each (n_penalties,); V's Hessian."""
        return strength_derivatives(self.covariance, self.coefficients, self.problem.spectra, self.strengths)

    @property
    def gradient(self) -> np.ndarray:
        rough, ratio, trace, _ = self.derivatives
        return (rough - ratio + trace) / 2

    def hessian(self) -> np.ndarray:
        return self.derivatives[3]

    def fellner_schall(self) -> np.ndarray:
        """The generalized Fellner-Schall update of the log strengths."""
        rough, ratio, trace, _ = self.derivatives
        change = np.log(np.maximum(ratio - trace, 1e-12) / np.maximum(rough, 1e-12))
        return _bounded(self.rho + np.clip(change, -LARGEST_MOVE, LARGEST_MOVE))


def strength_covariance(problem: Quadratic, rho: np.ndarray) -> np.ndarray:
    """Covariance of chosen log strengths, (n_penalties, n_penalties): the inverse Hessian of V.

    Directions in which V is as good as flat count with a variance of 1 / SMALLEST_CURVATURE: strengths that
    may be anything without changing the fit would otherwise have a variance without bound (Wood, Pya &
    Saefken 2016, J. Am. Stat. Assoc. 111:1548, section 4).
    """
    values, vectors = np.linalg.eigh(_Solved(problem, rho).hessian())
    return (vectors / np.maximum(values, SMALLEST_CURVATURE)) @ vectors.T


def _bounded(rho: np.ndarray) -> np.ndarray:
    return np.clip(rho, SMALLEST_LOG_STRENGTH, LARGEST_LOG_STRENGTH)


def tune(problem: Quadratic, rho: np.ndarray, *, choose: bool, tolerance: float) -> State:
    """Move the log strengths towards the working problem's restricted-likelihood maximum and solve there.

    Parameters
    ----------
    problem : Quadratic
    rho : ndarray, (n_penalties,)
        Where to start.
    choose : bool
        False: solve at `rho`.
    tolerance : float
        Settled when the predicted gain of the next move is below this (nats) before the first move.
    """
    here = _Solved(problem, rho)
    if not choose or not len(rho):
        return State(here.coefficients, here.covariance, rho, True)
    settled = False
    for turn in range(INNER_ROUNDS):
        move, gain = _move(here)
        if gain < tolerance:
            settled = turn == 0
            break
        there = _descend(here, move)
        if there is None:
            settled = turn == 0
            break
        here = there
    return State(here.coefficients, here.covariance, here.rho, settled)


def _move(here: _Solved) -> tuple[np.ndarray, float]:
    """Newton's move of the log strengths, and the gain it predicts; flat directions move little."""
    gradient = here.gradient
    free = ~(
        ((here.rho >= LARGEST_LOG_STRENGTH) & (gradient < 0))
        | ((here.rho <= SMALLEST_LOG_STRENGTH) & (gradient > 0))
    )
    if not free.any():
        return np.zeros_like(gradient), 0.0
    move = descent(here.hessian(), gradient, free)
    move = _bounded(here.rho + move) - here.rho
    return move, float(-(gradient @ move) / 2)


def _descend(here: _Solved, move: np.ndarray) -> _Solved | None:
    """Solve at the moved strengths, shortening the move until V falls; else by the classical update."""
    value = here.value
    for _ in range(4):
        there = _Solved(here.problem, here.rho + move)
        if there.value <= value + 1e-9 * (1 + abs(value)):
            return there
        move = move / 3
    there = _Solved(here.problem, here.fellner_schall())
    return there if there.value < value else None
