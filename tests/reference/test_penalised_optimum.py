"""The optimum of real terms under fixed penalties: scikit-learn and glum on the dense matrix."""

from pathlib import Path

import glum
import numpy as np
import pytest
from sklearn.linear_model import PoissonRegressor

from odograph.encoding.terms import make_term
from odograph.settings.encoding import TermSettings

ARENA = np.genfromtxt(Path(__file__).parent / "data" / "arena_counts.csv", delimiter=",", names=True)
TIME = np.arange(600.0)
SETTINGS = {
    "arena": TermSettings(name="arena", kind="plane", columns=["x", "y"], basis_size=7, cells=20),
    "direction": TermSettings(name="direction", kind="circle", columns=["hd"], basis_size=9, cells=40),
    "east": TermSettings(name="east", kind="line", columns=["x"], basis_size=8, cells=30, penalty_order=1),
    "time": TermSettings(name="time", kind="line", columns=["t"], basis_size=6, cells=25),
    "state": TermSettings(name="state", kind="category", columns=["s"]),
}


def terms_of(*names):
    values = {"x": ARENA["x"], "y": ARENA["y"], "hd": ARENA["hd"], "t": TIME, "s": TIME * 7 % 4}
    return [make_term(SETTINGS[name], [values[c] for c in SETTINGS[name].columns]) for name in names]


def dense(found, engine_matrix):
    """The engine's matrix and the rows' times, counts and penalty, in the order of its table."""
    order = np.argsort(found.space.terms[0].cell, kind="stable")
    ridge = np.exp(found.fit.log_strengths) @ found.space.layout.spectra
    return engine_matrix(found.space), ARENA["occ"][order], ARENA["count"][order], ridge


@pytest.mark.parametrize("rho", [[0.0, 2.0, -1.0], [5.0, -3.0, 3.0]])
def test_scikit_learns_optimum(solve, engine_matrix, rho):
    # Every coordinate is penalised here, so that dividing its column by the root of its penalty makes a ridge
    # of one; scikit-learn's loss is the weighted mean, so alpha is one over all exposure.
    found = solve(terms_of("direction", "east", "state"), ARENA["occ"], ARENA["count"], rho)
    X, seconds, counts, ridge = dense(found, engine_matrix)
    assert np.all(ridge[1:] > 0)
    columns = X[:, 1:] / np.sqrt(ridge[1:])
    theirs = PoissonRegressor(alpha=1 / seconds.sum(), tol=1e-13, solver="newton-cholesky", max_iter=1000)
    theirs.fit(columns, counts / seconds, sample_weight=seconds)
    ours = np.r_[found.fit.coefficients[0], found.fit.coefficients[1:] * np.sqrt(ridge[1:])]
    np.testing.assert_allclose(ours, np.r_[theirs.intercept_, theirs.coef_], atol=1e-6)


@pytest.mark.parametrize("rho", [[0.0, 1.0, 2.0, 1.5, 0.5], [3.0, -2.0, -1.0, 5.0, 2.0]])
def test_glums_optimum(solve, engine_matrix, rho):
    # glum takes the matrix of the penalty, over rows: straight lines and the plane's 1, x, y, xy go free.
    found = solve(terms_of("arena", "direction", "time", "state"), ARENA["occ"], ARENA["count"], rho)
    X, seconds, counts, ridge = dense(found, engine_matrix)
    theirs = glum.GeneralizedLinearRegressor(
        family="poisson", alpha=1.0, l1_ratio=0.0, P2=np.diag(ridge) / len(X), fit_intercept=False,
        solver="irls-ls", gradient_tol=1e-12, max_iter=1000,
    ).fit(X, counts, offset=np.log(seconds))  # fmt: skip
    np.testing.assert_allclose(found.fit.coefficients, theirs.coef_, atol=1e-6)
