"""The penalised fit against dense arithmetic and general-purpose libraries."""

import numpy as np
import pytest
from scipy.optimize import minimize
from sklearn.linear_model import PoissonRegressor

from odograph.encoding.bases import cyclic_basis, open_basis
from odograph.encoding.design import prepare_session
from odograph.encoding.evaluate import fit_whole
from odograph.encoding.fit import fit_model
from odograph.encoding.layout import from_coordinates, to_coordinates
from odograph.encoding.shared import workspace
from odograph.encoding.spikes import bin_spikes
from odograph.settings.encoding import EncodingSettings, TermSettings

FULL = ("position", "head_direction", "speed")


def dense_rows(space):
    """The model's design matrix in its coordinates, (n_rows, n_coordinates), and exposure."""
    table = space.layout.table
    blocks = [np.ones((len(table.seconds), 1))]
    for t, term in enumerate(space.terms):
        blocks.append((term.basis.dense() @ term.coordinates.matrix())[table.cells[t]])
    return np.hstack(blocks), table.seconds


@pytest.mark.parametrize("model", [("head_direction",), ("position", "speed"), FULL])
def test_derivatives_are_those_of_the_dense_design_matrix(design, model):
    space = workspace(design, model)
    X, seconds = dense_rows(space)
    rng = np.random.default_rng(1)
    beta = rng.normal(0, 0.05, space.layout.n_coordinates)
    use = (rng.random(design.folds.n_groups) > 0.3).astype(float)
    total = space.expected(beta, use)
    gradient, information = space.derivatives(total)
    mu = seconds * use[space.layout.table.group] * np.exp(X @ beta)
    assert total == pytest.approx(mu.sum(), rel=1e-12)
    np.testing.assert_allclose(space.mu, mu, rtol=1e-10)
    np.testing.assert_allclose(gradient, X.T @ mu, rtol=1e-9, atol=1e-7)
    np.testing.assert_allclose(information, (X * mu[:, None]).T @ X, rtol=1e-8, atol=1e-6)


def test_coordinates_go_there_and_back(design):
    for term in design.terms:
        values = np.random.default_rng(2).normal(size=term.coordinates.size)
        splines = from_coordinates(term.coordinates, values)
        np.testing.assert_allclose(splines, term.coordinates.matrix() @ values, atol=1e-12)
        other = np.random.default_rng(3).normal(size=(term.basis.size, 3))
        np.testing.assert_allclose(
            to_coordinates(term.coordinates, other), term.coordinates.matrix().T @ other, atol=1e-12
        )


def test_fixed_penalty_optimum_is_that_of_a_general_optimiser(design, simulate):
    # Source: scipy.optimize.minimize (trust-exact) on the dense penalised likelihood.
    space = workspace(design, ("head_direction", "speed"))
    unit = bin_spikes(design, simulate("head_direction+speed"))
    rho = np.array([1.0, 3.0, 2.0])
    spikes = space.project(np.concatenate([unit.per_cell(t) for t in space.terms]), unit.n_spikes)
    fit = fit_model(space, spikes, np.ones(design.folds.n_groups), fixed_log_strengths=rho, tolerance=1e-12)
    X, seconds = dense_rows(space)
    ridge = np.exp(rho) @ space.layout.spectra

    def value(b):
        return np.sum(seconds * np.exp(X @ b)) - spikes @ b + b @ (ridge * b) / 2

    def slope(b):
        return X.T @ (seconds * np.exp(X @ b)) - spikes + ridge * b

    def curvature(b):
        return (X * (seconds * np.exp(X @ b))[:, None]).T @ X + np.diag(ridge)

    start = np.zeros(len(spikes))
    start[0] = np.log(unit.n_spikes / seconds.sum())
    best = minimize(value, start, jac=slope, hess=curvature, method="trust-exact", options={"gtol": 1e-6})
    np.testing.assert_allclose(fit.coefficients, best.x, atol=1e-6)
    assert fit.converged


def test_ridge_on_categories_is_scikit_learns(table, simulate):
    # Source: sklearn.linear_model.PoissonRegressor; rate as target, exposure as weight.
    state = np.floor(table["x_m"] * 5)
    settings = EncodingSettings(
        terms=[TermSettings(name="state", kind="category", columns=["state"])], drift=False
    )
    design = prepare_session(table | {"state": state}, settings)
    space = workspace(design, ("state",))
    unit = bin_spikes(design, simulate("position"))
    (term,) = design.terms
    counts, seconds = unit.per_cell(term), np.bincount(term.cell) * design.bin_s
    fit = fit_model(
        space,
        space.project(counts, unit.n_spikes),
        np.ones(design.folds.n_groups),
        fixed_log_strengths=np.log([3.0]),
        tolerance=1e-14,
    )
    model = PoissonRegressor(alpha=3.0 / seconds.sum(), tol=1e-12, max_iter=10000, solver="newton-cholesky")
    model.fit(np.eye(len(counts)), counts / seconds, sample_weight=seconds)
    np.testing.assert_allclose(fit.coefficients, np.r_[model.intercept_, model.coef_], atol=1e-6)


def test_chosen_strengths_are_a_maximum_of_the_working_restricted_likelihood(design, simulate):
    """At the fitted strengths the generalized Fellner-Schall update (Wood & Fasiolo 2017) stands still."""
    space = workspace(design, FULL)
    unit = bin_spikes(design, simulate("position+head_direction+speed"))
    spikes = space.project(np.concatenate([unit.per_cell(t) for t in space.terms]), unit.n_spikes)
    fit = fit_model(space, spikes, np.ones(design.folds.n_groups), tolerance=1e-9)
    spectra, lam = space.layout.spectra, np.exp(fit.log_strengths)
    start = 0
    for term in space.terms:
        for j in range(len(term.coordinates.spectra)):
            row = start + j
            total = (lam[start : start + len(term.coordinates.spectra), None] * term.coordinates.spectra).sum(
                0
            )
            used = total > 0
            ratio = np.sum(term.coordinates.spectra[j][used] / total[used])
            freedom = ratio - np.diag(fit.covariance) @ spectra[row]
            rough = spectra[row] @ fit.coefficients**2
            if np.abs(fit.log_strengths[row]) < 10:
                assert freedom / rough == pytest.approx(1, abs=2e-3)
        start += len(term.coordinates.spectra)


def test_a_fit_does_not_depend_on_where_it_started(table, simulate):
    design = prepare_session(table, EncodingSettings(drift=False))
    space, use = workspace(design, ("position", "head_direction")), np.ones(design.folds.n_groups)
    kinds = ("position+head_direction", "head_direction")
    units = [bin_spikes(design, simulate(kind, seed)) for seed, kind in enumerate(kinds)]
    other = fit_whole(space, design, units[1])
    spikes = space.project(np.concatenate([units[0].per_cell(t) for t in space.terms]), units[0].n_spikes)
    one, again = (fit_model(space, spikes, use, start, tolerance=1e-10) for start in (None, other))
    assert one.converged and again.converged
    assert again.log_likelihood == pytest.approx(one.log_likelihood, abs=1e-3)
    assert again.edf == pytest.approx(one.edf, abs=1e-3)


def test_rates_that_are_zero_in_half_the_arena_stay_finite(design, table):
    """Separation: a unit that fires only where x > 0.5 has no finite unpenalised optimum."""
    rate = np.where(table["x_m"] > 0.5, 8.0, 0.0)
    counts = np.random.default_rng(5).poisson(rate * 0.02)
    unit = bin_spikes(design, np.repeat(table["time_s"], counts))
    fit = fit_whole(workspace(design, ("position", "speed")), design, unit)
    assert fit.converged and np.all(np.isfinite(fit.covariance))
    assert fit.log_likelihood > unit.n_spikes * np.log(unit.n_spikes / (design.n_bins * 0.02)) - unit.n_spikes


def test_iterations_that_run_out_are_reported(design, simulate):
    space = workspace(design, ("position",))
    unit = bin_spikes(design, simulate("position"))
    spikes = space.project(np.concatenate([unit.per_cell(t) for t in space.terms]), unit.n_spikes)
    fit = fit_model(space, spikes, np.ones(design.folds.n_groups), largest_iterations=2)
    assert not fit.converged


def test_discretising_the_covariates_moves_the_fitted_curves_little(table, simulate):
    """Curves of the same penalised model on undiscretised covariates: within 0.5 % (rms), 2 % at most."""
    design = prepare_session(table, EncodingSettings(drift=False))
    space = workspace(design, ("head_direction", "speed"))
    unit = bin_spikes(design, simulate("head_direction+speed"))
    fit = fit_whole(space, design, unit)
    blocks = [np.ones((design.n_bins, 1))]
    for term in space.terms:
        values = table[term.columns[0]]
        exact = (
            cyclic_basis(values, term.basis.size)
            if term.kind == "circle"
            else open_basis(values, *term.spans[0], term.basis.size)
        )
        blocks.append(exact.dense() @ term.coordinates.matrix())
    X, ridge = np.hstack(blocks), np.exp(fit.log_strengths) @ space.layout.spectra
    beta = fit.coefficients.copy()
    for _ in range(30):
        mu = design.bin_s * np.exp(X @ beta)
        score = X.T @ (unit.counts - mu) - ridge * beta
        step = np.linalg.solve((X * mu[:, None]).T @ X + np.diag(ridge), score)
        beta += step
    assert np.abs(step).max() < 1e-9
    difference = X @ (fit.coefficients - beta)
    assert np.sqrt(np.mean(difference**2)) < 0.005
    assert np.quantile(np.abs(difference), 0.999) < 0.02
