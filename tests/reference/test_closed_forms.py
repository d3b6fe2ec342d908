"""The engine where the answer is exact: saturated, constant and log-linear models, marginal likelihood."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import dblquad
from scipy.optimize import brentq, root
from scipy.stats import norm, poisson

from odograph.encoding.design import RowTable
from odograph.encoding.fit import fit_model
from odograph.encoding.layout import Workspace, make_layout
from odograph.encoding.terms import make_term
from odograph.settings.encoding import TermSettings

ARENA = np.genfromtxt(Path(__file__).parent / "data" / "arena_counts.csv", delimiter=",", names=True)
INFINITE = 20.0  # log strength: what it leaves of other curves is below the tolerances here


def category(levels):
    return make_term(TermSettings(name="state", kind="category", columns=["state"]), [levels.astype(float)])


def term_of(kind, values, order=2):
    columns = ["a", "b"] if kind == "plane" else ["a"]
    settings = TermSettings(name="t", kind=kind, columns=columns, basis_size=7, cells=20, penalty_order=order)
    return make_term(settings, values)


def test_constant_model():
    """Exact: log rate log(N / T), variance 1 / N, one degree of freedom, log-likelihood N log(N / T) - N."""
    seconds, spikes = np.array([3.0, 5.5, 12.0]), np.array([57.0])
    table = RowTable((), np.empty((0, 3), dtype=np.int32), seconds, np.zeros(3, dtype=np.int32))
    fit = fit_model(Workspace(make_layout(table)), spikes, np.ones(1), tolerance=1e-12)
    np.testing.assert_allclose(fit.coefficients, [np.log(57 / 20.5)], atol=1e-12)
    np.testing.assert_allclose(fit.covariance, [[1 / 57]], rtol=1e-9)
    assert fit.edf == pytest.approx(1)
    assert fit.log_likelihood == pytest.approx(57 * np.log(57 / 20.5) - 57)


def test_saturated_model(solve):
    """Exact: without a penalty a level's rate is its count over its time, with log error 1 / sqrt(count)."""
    counts, seconds = np.array([3.0, 40.0, 11.0, 150.0]), np.array([0.5, 20.0, 3.0, 7.0])
    found = solve([category(np.arange(4))], seconds, counts, [-16.0])
    np.testing.assert_allclose(found.expected, counts, rtol=1e-6)
    np.testing.assert_allclose(found.link_error, counts**-0.5, rtol=1e-6)
    assert found.deviance == pytest.approx(0, abs=1e-8)
    assert found.fit.edf == pytest.approx(4, abs=1e-5)


@pytest.mark.parametrize("strength", [0.3, 30.0, 3000.0])
def test_two_levels_under_a_ridge(solve, strength):
    """Exact: levels +b and -b solve n_1 - T_1 exp(a + b) = strength b, with a from the total."""
    counts, seconds = np.array([30.0, 75.0]), np.array([10.0, 15.0])

    def intercept(b):
        return np.log(counts.sum() / (seconds @ np.exp([b, -b])))

    b = brentq(lambda b: counts[0] - seconds[0] * np.exp(intercept(b) + b) - strength * b, -3, 3, xtol=1e-14)
    found = solve([category(np.arange(2))], seconds, counts, [np.log(strength)])
    np.testing.assert_allclose(found.fit.coefficients, [intercept(b), b, -b], atol=1e-9)


@pytest.mark.parametrize(
    "kind, order, freedom", [("line", 2, 2), ("line", 1, 1), ("circle", 2, 1), ("plane", 2, 4)]
)
def test_an_infinite_penalty_leaves_its_null_space(solve, kind, order, freedom):
    """Exact: unpenalised regression on (1), (1, x) or (1, x, y, xy): its score equations X'(y - mu) = 0."""
    values = [ARENA["x"], ARENA["y"]][: 2 if kind == "plane" else 1]
    term = term_of(kind, [ARENA["hd"]] if kind == "circle" else values, order)
    found = solve([term], ARENA["occ"], ARENA["count"], [INFINITE] * len(term.coordinates.spectra))
    if kind == "plane":
        y, x = np.divmod(term.cell, len(term.axes[0]))
        x, y = term.axes[0][x], term.axes[1][y]
        X = np.column_stack([np.ones(600), x, y, x * y])
    else:
        X = np.column_stack([np.ones(600), term.axes[0][term.cell]])[:, :freedom]
    start = np.r_[np.log(ARENA["count"].sum() / ARENA["occ"].sum()), np.zeros(freedom - 1)]
    exact = root(lambda b: X.T @ (ARENA["count"] - ARENA["occ"] * np.exp(X @ b)), start, tol=1e-13)
    np.testing.assert_allclose(found.expected, ARENA["occ"] * np.exp(X @ exact.x), rtol=1e-5)
    assert found.expected.sum() == pytest.approx(ARENA["count"].sum(), rel=1e-8)
    information = (X * found.expected[:, None]).T @ X
    error = np.sqrt(np.sum((X @ np.linalg.inv(information)) * X, axis=1))
    np.testing.assert_allclose(found.link_error, error, rtol=1e-3)
    assert found.fit.edf == pytest.approx(freedom, abs=1e-4)


def test_rows_that_share_their_cells_may_be_merged_or_split(solve):
    """Exact: counts and times of equal cells are sufficient; a unit of time moves the intercept alone."""
    term = term_of("line", [ARENA["x"]])
    split = solve([term], ARENA["occ"], ARENA["count"], [1.0])
    seconds = np.bincount(term.cell, weights=ARENA["occ"])
    counts = np.bincount(term.cell, weights=ARENA["count"])
    merged = solve([replace(term, cell=np.arange(term.n_cells, dtype=np.int32))], seconds, counts, [1.0])
    np.testing.assert_allclose(merged.fit.coefficients, split.fit.coefficients, atol=1e-9)
    np.testing.assert_allclose(merged.fit.covariance, split.fit.covariance, atol=1e-9)
    minutes = solve([term], ARENA["occ"] / 60, ARENA["count"], [1.0])
    np.testing.assert_allclose(minutes.fit.coefficients[1:], split.fit.coefficients[1:], atol=1e-9)
    assert minutes.fit.coefficients[0] == pytest.approx(split.fit.coefficients[0] + np.log(60), abs=1e-9)


def test_restricted_score_is_the_marginal_likelihood(solve):
    """-V is Laplace's value of the log of the likelihood integrated over intercept and levels.

    With the flat intercept integrated out, the two log rates have a difference of variance 2 / strength and
    else no prior: scipy.integrate.dblquad. Laplace's error is of the order of one over the counts.
    """
    counts, seconds, strength = np.array([9000.0, 14000.0]), np.array([3000.0, 4000.0]), 40.0
    found = solve([category(np.arange(2))], seconds, counts, [np.log(strength)])
    centre, width = np.log(counts / seconds), 8 / np.sqrt(counts)

    def density(second, first):
        both = np.array([first, second])
        likelihood = poisson.logpmf(counts, seconds * np.exp(both)).sum()
        return np.exp(likelihood + norm.logpdf(first - second, scale=np.sqrt(2 / strength)) + offset)

    offset = 0.0
    offset = -np.log(density(centre[1], centre[0]))
    (low, lower), (high, higher) = centre - width, centre + width
    integral, _ = dblquad(density, low, high, lower, higher, epsabs=0, epsrel=1e-6)
    assert found.score == pytest.approx(offset - np.log(integral), abs=2e-5)
