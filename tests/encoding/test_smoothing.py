"""Derivatives of the restricted likelihood by finite differences, its maximum, awkward matrices."""

import numpy as np
import pytest

from odograph.encoding.bases import curve_coordinates, surface_coordinates
from odograph.encoding.smoothing import (
    LARGEST_LOG_STRENGTH,
    SMALLEST_CURVATURE,
    SMALLEST_LOG_STRENGTH,
    Quadratic,
    _Solved,
    descent,
    factorise,
    neutral_strengths,
    strength_covariance,
    tune,
)


@pytest.fixture(scope="module")
def problem():
    """An intercept, a plane (two penalties on the same coordinates) and a line, with a signal in both."""
    rng = np.random.default_rng(4)
    plane, line = surface_coordinates(5).spectra, curve_coordinates(9).spectra
    n = 1 + plane.shape[1] + line.shape[1]
    spectra = np.zeros((3, n))
    spectra[:2, 1 : 1 + plane.shape[1]] = plane
    spectra[2, 1 + plane.shape[1] :] = line
    X = rng.normal(size=(300, n))
    truth = rng.normal(size=n) / (1 + spectra.sum(axis=0))
    return Quadratic(X.T @ X, X.T @ (X @ truth + rng.normal(size=300)), spectra)


def test_gradient_and_hessian_are_those_of_the_value(problem):
    rho, step = np.array([0.3, -1.0, 2.0]), 1e-4
    here = _Solved(problem, rho)
    for j in range(3):
        ahead, behind = (_Solved(problem, rho + s * step * np.eye(3)[j]) for s in (1, -1))
        assert (ahead.value - behind.value) / (2 * step) == pytest.approx(here.gradient[j], rel=1e-5)
        slope = (ahead.gradient - behind.gradient) / (2 * step)
        np.testing.assert_allclose(here.hessian()[j], slope, rtol=1e-5, atol=1e-7)
    np.testing.assert_allclose(here.hessian(), here.hessian().T, atol=1e-12)


def test_value_is_the_marginal_likelihood_of_a_gaussian_model():
    """Closed form: y ~ N(X b, I), b ~ N(0, 1 / lam): -V differs from log p(y) by a constant in lam."""
    rng = np.random.default_rng(1)
    X, y = rng.normal(size=(30, 4)), rng.normal(size=30)
    problem = Quadratic(X.T @ X, X.T @ y, np.ones((1, 4)))
    found, expected = [], []
    for lam in (0.1, 1.0, 30.0):
        covariance = np.eye(30) + X @ X.T / lam
        expected.append(-(y @ np.linalg.solve(covariance, y)) / 2 - np.linalg.slogdet(covariance)[1] / 2)
        found.append(-_Solved(problem, np.log([lam])).value)
    np.testing.assert_allclose(np.diff(found), np.diff(expected), rtol=1e-8)


def test_tuning_ends_where_the_gradient_vanishes_and_the_classical_update_stands(problem):
    rho = neutral_strengths(problem.information, problem.spectra)
    for _ in range(20):
        state = tune(problem, rho, choose=True, tolerance=1e-12)
        rho = state.log_strengths
    there = _Solved(problem, rho)
    inside = rho < LARGEST_LOG_STRENGTH / 2  # beyond, the likelihood is as good as flat
    assert state.settled and inside.sum() == 2
    np.testing.assert_allclose(there.gradient[inside], 0, atol=1e-4)
    np.testing.assert_allclose(there.fellner_schall()[inside], rho[inside], atol=1e-4)


def test_a_useless_penalty_goes_to_its_bound():
    # Noise alone: the data are explained by the intercept, and the strength wants to be infinite.
    problem = Quadratic(np.eye(5) * 100, np.array([5.0, 0, 0, 0, 0]), np.array([[0.0, 1, 1, 1, 1]]))
    rho = np.zeros(1)
    for _ in range(30):
        rho = tune(problem, rho, choose=True, tolerance=1e-9).log_strengths
    assert rho[0] > 10


def test_fixed_strengths_are_only_solved_at(problem):
    rho = np.array([1.0, 2.0, 3.0])
    state = tune(problem, rho, choose=False, tolerance=1e-3)
    penalised = problem.information + np.diag(np.exp(rho) @ problem.spectra)
    np.testing.assert_allclose(state.coefficients, np.linalg.solve(penalised, problem.target), rtol=1e-8)
    np.testing.assert_array_equal(state.log_strengths, rho)


def test_descent_goes_downhill_from_a_saddle():
    hessian, gradient = np.diag([2.0, -1.0]), np.array([1.0, 0.5])
    move = descent(hessian, gradient, np.array([True, True]))
    assert move @ gradient < 0
    assert move[0] == pytest.approx(-0.5)
    assert descent(hessian, gradient, np.array([True, False]))[1] == 0


def test_factorise_inverts_and_survives_a_direction_without_data():
    rng = np.random.default_rng(2)
    X = rng.normal(size=(40, 6))
    lower, inverse = factorise(X.T @ X)
    np.testing.assert_allclose(inverse, np.linalg.inv(X.T @ X), rtol=1e-8)
    np.testing.assert_allclose(np.tril(lower) @ np.tril(lower).T, X.T @ X, rtol=1e-8)
    X[:, 5] = 0
    _, inverse = factorise(X.T @ X)
    assert np.all(np.isfinite(inverse))
    stiff = np.diag([100.0, 50.0, 4e8 * 800])  # a stiff coordinate must not weigh on the others
    np.testing.assert_allclose(1 / np.diag(factorise(stiff)[1]), np.diag(stiff), rtol=1e-9)
    with pytest.raises(FloatingPointError, match="not positive definite"):
        factorise(-np.eye(3))


@pytest.mark.parametrize(
    "target, bound",
    [([5.0, 0, 0, 0, 0], LARGEST_LOG_STRENGTH), ([0, 1e9, 1e9, -1e9, 1e9], SMALLEST_LOG_STRENGTH)],
)
def test_strengths_stop_at_their_bounds(target, bound):
    """Without roughness the strength wants to be infinite, with roughness beyond measure 0."""
    problem = Quadratic(np.eye(5) * 1e6, np.array(target), np.array([[0.0, 1, 1, 1, 1]]))
    rho = neutral_strengths(problem.information, problem.spectra)
    for _ in range(100):
        state = tune(problem, rho, choose=True, tolerance=1e-15)
        assert SMALLEST_LOG_STRENGTH <= state.log_strengths[0] <= LARGEST_LOG_STRENGTH
        rho = state.log_strengths
    assert rho[0] == bound and state.settled


def test_strengths_that_start_at_a_bound_leave_it(problem):
    free = neutral_strengths(problem.information, problem.spectra)
    ends = []
    for start in (free, np.full(3, SMALLEST_LOG_STRENGTH), np.full(3, LARGEST_LOG_STRENGTH - 1)):
        rho = start
        for _ in range(60):
            rho = tune(problem, rho, choose=True, tolerance=1e-12).log_strengths
        ends.append(_Solved(problem, rho).value)
    np.testing.assert_allclose(ends, ends[0], atol=1e-3)  # nats; V is as good as flat towards the bound


def test_strength_of_a_ridge_in_closed_form():
    """Exact: orthonormal columns, z = w ~ N(0, 1 + 1 / lam): the maximum is 1 / lam = mean z^2 - 1."""
    z = np.array([1.5, -2.0, 0.3, 2.5, -1.1, 0.7])
    problem = Quadratic(np.eye(6), z, np.ones((1, 6)))
    rho = np.zeros(1)
    for _ in range(20):
        rho = tune(problem, rho, choose=True, tolerance=1e-14).log_strengths
    variance = np.mean(z**2)
    assert rho[0] == pytest.approx(-np.log(variance - 1), abs=1e-6)
    # The likelihood of 1 + 1 / lam = v has curvature n / (2 v^2) there, and dv / d log lam = -(v - 1).
    curvature = 6 / (2 * variance**2) * (variance - 1) ** 2
    assert _Solved(problem, rho).hessian()[0, 0] == pytest.approx(curvature, rel=1e-5)
    assert strength_covariance(problem, rho)[0, 0] == pytest.approx(1 / curvature, rel=1e-5)


def test_the_variance_of_a_strength_that_may_be_anything_is_bounded():
    problem = Quadratic(np.eye(5) * 100, np.array([5.0, 0, 0, 0, 0]), np.array([[0.0, 1, 1, 1, 1]]))
    assert strength_covariance(problem, np.array([15.0]))[0, 0] == pytest.approx(1 / SMALLEST_CURVATURE)


def test_neutral_strengths_by_hand():
    # Data 2 + 4 over roughness 1 + 3 on the first penalty's coordinates; 9 over 0.5 on the second's.
    information, spectra = np.diag([7.0, 2.0, 4.0, 9.0]), np.array([[0, 1.0, 3.0, 0], [0, 0, 0, 0.5]])
    np.testing.assert_allclose(neutral_strengths(information, spectra), np.log([6 / 4, 18.0]))
