"""Handbook Poisson regressions through the engine: each row a cell, each column of X a coordinate.

Sources, by test: A. J. Dobson, An Introduction to Generalized Linear Models (1990, p. 93, as printed in the
help page of R's glm; 2nd ed. 2002, tables 9.1 to 9.3, data of Doll & Hill 1966); further digits by R 4.2.2's
glm. Penalised optima: scikit-learn and glum on the same rows.
"""

import glum
import numpy as np
import pytest
from scipy.special import gammaln, xlogy
from sklearn.linear_model import PoissonRegressor

from odograph.encoding.bases import Coordinates, SparseBasis
from odograph.encoding.design import RowTable
from odograph.encoding.fit import fit_model
from odograph.encoding.layout import Workspace, make_layout
from odograph.encoding.terms import Term

NO_PENALTY = -40.0  # log strength

AGE = np.tile(np.arange(1.0, 6.0), 2)
SMOKES = np.repeat([0.0, 1.0], 5)
PERSON_YEARS = np.array([18790, 10673, 5710, 2585, 1462, 52407, 43248, 28612, 12663, 5317], dtype=float)
DEATHS = np.array([2, 12, 28, 28, 31, 32, 104, 206, 186, 102], dtype=float)


def regression(X, exposure):
    """A model whose columns are given, a ridge over all of them, the intercept free."""
    n, k = X.shape
    basis = SparseBasis(np.tile(np.arange(k, dtype=np.int32), (n, 1)), X.astype(float), k)
    ridge = Coordinates((np.eye(k),), np.ones((1, k)), drops_constant=False)
    cell = np.arange(n, dtype=np.int32)
    term = Term("x", "line", ("x",), basis, ridge, cell, (cell.astype(float),), ((0.0, 1.0),))
    return Workspace(make_layout(RowTable((term,), cell[None], exposure, np.zeros(n, dtype=np.int32))))


def fit_rows(X, counts, exposure, log_strength):
    space = regression(X, exposure)
    sums = space.project(counts, counts.sum())
    fit = fit_model(space, sums, np.ones(1), tolerance=1e-14, fixed_log_strengths=[log_strength])
    space.expected(fit.coefficients, np.ones(1))
    return fit, space.mu.copy()


def deviance(counts, mu):
    return 2 * np.sum(xlogy(counts, counts / mu) - (counts - mu))


def test_two_factors():
    # Dobson 1990, p. 93.
    counts = np.array([18, 17, 15, 20, 10, 20, 25, 13, 12], dtype=float)
    outcome, treatment = np.tile([1, 2, 3], 3), np.repeat([1, 2, 3], 3)
    X = np.column_stack([outcome == 2, outcome == 3, treatment == 2, treatment == 3])
    fit, mu = fit_rows(X, counts, np.ones(9), NO_PENALTY)
    np.testing.assert_allclose(fit.coefficients, [3.044522, -0.454255, -0.292987, 0, 0], atol=1e-6)
    error = np.sqrt(np.diag(fit.covariance))
    np.testing.assert_allclose(error, [0.170899, 0.202171, 0.192742, 0.2, 0.2], atol=1e-6)
    assert deviance(counts, mu) == pytest.approx(5.12914, abs=1e-5)
    assert fit.edf == pytest.approx(5, abs=1e-9)
    log_likelihood = np.sum(xlogy(counts, mu) - mu - gammaln(counts + 1))
    assert log_likelihood == pytest.approx(-23.38066, abs=1e-5)


def test_rates_over_person_years():
    # Dobson 2002, tables 9.1 to 9.3: the case of spikes over occupancy.
    X = np.column_stack([AGE, AGE**2, SMOKES, SMOKES * AGE])
    fit, mu = fit_rows(X, DEATHS, PERSON_YEARS, NO_PENALTY)
    expected = [-10.7917625473, 2.3764783240, -0.1976765428, 1.4409718798, -0.3075480857]
    np.testing.assert_allclose(fit.coefficients, expected, atol=1e-6)
    error = [0.45007723, 0.20794860, 0.02736742, 0.37219886, 0.09704114]
    np.testing.assert_allclose(np.sqrt(np.diag(fit.covariance)), error, atol=1e-6)
    assert deviance(DEATHS, mu) == pytest.approx(1.635370, abs=1e-6)
    np.testing.assert_allclose(mu[[0, 4, 9]], [3.414801366, 31.071038356, 102.576767292], rtol=1e-7)
    log_likelihood = np.sum(xlogy(DEATHS, mu) - mu - gammaln(DEATHS + 1))
    assert log_likelihood == pytest.approx(-28.351655, abs=1e-6)


def ridge_case():
    age = AGE / 5
    X = np.column_stack([age, age**2, SMOKES, SMOKES * age])
    return X, PERSON_YEARS / 1e4, 3.0


def test_ridge_is_that_of_published_libraries():
    # Values that scikit-learn, glum and statsmodels agreed on to 1e-7 on the same data.
    X, exposure, strength = ridge_case()
    fit, mu = fit_rows(X, DEATHS, exposure, np.log(strength))
    expected = [1.414546607, 3.545531270, 0.200037655, 0.278757184, 0.189309005]
    np.testing.assert_allclose(fit.coefficients, expected, atol=1e-7)
    assert deviance(DEATHS, mu) == pytest.approx(79.67274539, abs=1e-6)


def test_ridge_is_scikit_learns():
    # Rate as target and exposure as weight; the mean weighted loss, so alpha is strength over all exposure.
    X, exposure, strength = ridge_case()
    fit, _ = fit_rows(X, DEATHS, exposure, np.log(strength))
    alpha = strength / exposure.sum()
    theirs = PoissonRegressor(alpha=alpha, tol=1e-12, solver="newton-cholesky")
    theirs.fit(X, DEATHS / exposure, sample_weight=exposure)
    np.testing.assert_allclose(fit.coefficients, [theirs.intercept_, *theirs.coef_], atol=1e-6)


def test_penalised_optimum_is_glums():
    rng = np.random.default_rng(3)
    n, k = 200, 6
    X, exposure = rng.normal(size=(n, k)), rng.uniform(0.5, 2, n)
    counts = rng.poisson(exposure * np.exp(0.4 * X[:, 0] - 0.3 * X[:, 1])).astype(float)
    fit, _ = fit_rows(X, counts, exposure, np.log(7.0))
    whole = np.column_stack([np.ones(n), X])
    penalty = 7.0 * np.diag([0.0, *np.ones(k)]) / n
    theirs = glum.GeneralizedLinearRegressor(
        family="poisson", alpha=1.0, l1_ratio=0.0, P2=penalty, fit_intercept=False,
        solver="irls-ls", gradient_tol=1e-12,
    ).fit(whole, counts, offset=np.log(exposure))  # fmt: skip
    np.testing.assert_allclose(fit.coefficients, theirs.coef_, atol=1e-6)
