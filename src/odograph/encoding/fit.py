"""The penalised Poisson fit of one model to one unit, its smoothing strengths chosen with it.

Log rate = intercept + sum of terms. The coefficients maximise the penalised log-likelihood

    sum_spikes eta - sum_rows mu - b' S_lam b / 2,      S_lam = sum_j lam_j S_j.

Around the current rates this is a weighted least-squares problem; `odograph.encoding.smoothing` chooses the
strengths by that problem's restricted likelihood, and the two alternate until neither moves. The fixed point
is that of the generalized Fellner-Schall update (Wood & Fasiolo 2017, Biometrics 73:1071), which for a
Poisson model leaves out how the weights move with the strengths.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.encoding.layout import Workspace
from odograph.encoding.smoothing import Quadratic, neutral_strengths, tune

LARGEST_STEP = 5.0


@dataclass(frozen=True)
class Fit:
    """A fitted model.

    Attributes
    ----------
    coefficients : ndarray, (n_coordinates,)
    covariance : ndarray, (n_coordinates, n_coordinates)
        Bayesian posterior covariance (X'WX + S_lam)^-1.
    log_strengths : ndarray, (n_penalties,)
    edf : float
        Effective degrees of freedom tr((X'WX + S_lam)^-1 X'WX).
    log_likelihood : float
        sum_spikes eta - sum_rows mu, eta in log hertz.
    expected_spikes : ndarray, (n_groups,)
        Expected spikes in every group, those that did not train included.
    converged : bool
    iterations : int
        Passes over the rows.
    decrement : float
        Newton decrement at the last step: twice the penalised likelihood that was still to be gained.
    """

    coefficients: np.ndarray
    covariance: np.ndarray
    log_strengths: np.ndarray
    edf: float
    log_likelihood: float
    expected_spikes: np.ndarray
    converged: bool
    iterations: int
    decrement: float


def fit_model(
    space: Workspace,
    spikes: np.ndarray,
    use: np.ndarray,
    start: Fit | None = None,
    *,
    tolerance: float = 1e-3,
    largest_iterations: int = 100,
    fixed_log_strengths: np.ndarray | None = None,
) -> Fit:
    """Fit one model to one unit.

    Parameters
    ----------
    space : Workspace
        The model's buffers.
    spikes : ndarray, (n_coordinates,)
        X'y of the training part, see `Workspace.project`.
    use : ndarray, (n_groups,)
        1.0 for the groups that train, 0.0 for the others.
    start : Fit, optional
        Where to start; else from the constant rate and neutral strengths.
    tolerance : float
        Convergence, in nats: the Newton decrement, and what the restricted likelihood could still gain by
        moving the strengths, are below this when the last step is taken.
    fixed_log_strengths : ndarray, (n_penalties,), optional
        Fit at these strengths instead of choosing them.

    Raises
    ------
    FloatingPointError
        No finite fit exists.
    """
    seconds = float(space.layout.table.seconds @ use[space.layout.table.group])
    if start is None:
        beta = np.zeros(space.layout.n_coordinates)
        beta[0] = np.log(max(spikes[0], 0.5) / seconds)
        rho = None
    else:
        beta, rho = start.coefficients.copy(), start.log_strengths
    if fixed_log_strengths is not None:
        rho = np.asarray(fixed_log_strengths, dtype=float)
    spectra, choose = space.layout.spectra, fixed_log_strengths is None
    before, objective, halvings, converged = beta, -np.inf, 0, False
    quadratic, decrement, iteration = None, np.inf, 0
    while iteration < largest_iterations:
        iteration += 1
        total = space.expected(beta, use)
        value = spikes @ beta - total - (0.0 if rho is None else _roughness(beta, rho, spectra))
        if (not np.isfinite(value) or value < objective - 1e-7 * (1 + abs(objective))) and halvings < 40:
            # The step went past the maximum: the quadratic did not hold that far.
            beta, halvings = (beta + before) / 2, halvings + 1
            continue
        halvings = 0
        gradient, information = space.derivatives(total)
        if rho is None:
            rho = neutral_strengths(information, spectra)
        quadratic = Quadratic(information, spikes - gradient + information @ beta, spectra)
        state = tune(quadratic, rho, choose=choose, tolerance=tolerance)
        step = state.coefficients - beta
        decrement = float(step @ (information @ step) + _twice_roughness(step, state.log_strengths, spectra))
        largest = float(np.abs(step).max())
        if state.settled and decrement < tolerance:
            beta, rho, converged = state.coefficients, state.log_strengths, True
            break
        before, rho = beta, state.log_strengths
        beta = beta + step * min(1.0, LARGEST_STEP / max(largest, LARGEST_STEP))
        objective = spikes @ before - total - _roughness(before, rho, spectra)
    if not converged:
        state = tune(quadratic, rho, choose=False, tolerance=tolerance)
    if not np.all(np.isfinite(beta)):
        raise FloatingPointError("the fitted rates are not finite")
    covariance = state.covariance
    expected_spikes = space.expected_by_group(beta, len(use))
    return Fit(
        coefficients=beta,
        covariance=covariance,
        log_strengths=rho,
        edf=float(np.sum(covariance * quadratic.information)),
        log_likelihood=float(spikes @ beta - expected_spikes @ use),
        expected_spikes=expected_spikes,
        converged=converged,
        iterations=iteration,
        decrement=decrement,
    )


def _twice_roughness(beta: np.ndarray, rho: np.ndarray, spectra: np.ndarray) -> float:
    return float((np.exp(rho) @ spectra) @ beta**2) if len(rho) else 0.0


def _roughness(beta: np.ndarray, rho: np.ndarray, spectra: np.ndarray) -> float:
    return _twice_roughness(beta, rho, spectra) / 2
