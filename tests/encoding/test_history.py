"""Spike history: formulas, a simulated unit of known filter, general libraries, held-out time."""

import numpy as np
import pytest
from pydantic import ValidationError
from scipy.optimize import minimize
from sklearn.linear_model import PoissonRegressor

from odograph.encoding.analyse import analyse_unit, prepare_session
from odograph.encoding.evaluate import fit_whole
from odograph.encoding.fit import fit_model
from odograph.encoding.history import fitted_filter, raised_cosines, recent_spikes, with_history
from odograph.encoding.shared import workspace
from odograph.encoding.spikes import bin_spikes
from odograph.errors import InputError
from odograph.settings.encoding import EncodingSettings

WITH = EncodingSettings(history_s=0.3)
LAGS = 15


@pytest.fixture(scope="module")
def long_design(table):
    return prepare_session(table, WITH)


def table_of(design):
    """The behaviour table that a design came from."""
    return {
        "time_s": (design.edges_s[:-1] + design.edges_s[1:]) / 2,
        "valid": design.valid,
        **design.columns,
    }


def self_exciting(design, log_filter, rate_hz, seed):
    """Spike times of a unit whose every spike adds `log_filter`, by lag in bins, to its later log rate."""
    rng, n = np.random.default_rng(seed), len(design.valid)
    log_rate = np.full(n + len(log_filter), np.log(rate_hz * design.bin_s))
    counts = np.zeros(n, dtype=int)
    for i in range(n):
        counts[i] = rng.poisson(np.exp(log_rate[i]))
        if counts[i]:
            log_rate[i + 1 : i + 1 + len(log_filter)] += counts[i] * log_filter
    return np.repeat(design.edges_s[:-1] + design.bin_s / 2, counts)


def test_functions_by_their_formula():
    # Pillow et al. 2008: with t in bins and c one bin; a such that the last function is half at the last lag.
    found = raised_cosines(LAGS, 4)
    a = 2 * np.pi / (np.log(16) - np.log(2))
    for t in (1, 4, 15):
        for j in range(4):
            angle = a * np.log((t + 1) / 2) - j * np.pi / 2
            expected = (1 + np.cos(angle)) / 2 if abs(angle) < np.pi else 0.0
            assert found[t - 1, j] == pytest.approx(expected, abs=1e-12)
    assert found[0, 0] == 1 and found[-1, -1] == pytest.approx(0.5)


def test_sums_are_a_convolution_with_the_past():
    rng = np.random.default_rng(0)
    counts, functions = rng.poisson(0.2, 400).astype(float), rng.random((7, 3))
    found = recent_spikes(counts, functions)
    for j in range(3):
        np.testing.assert_allclose(found[1:, j], np.convolve(counts, functions[:, j])[:399], atol=1e-12)
    assert np.all(found[0] == 0)


@pytest.mark.parametrize("shape", ["refractory", "bursting"])
def test_a_known_filter_is_recovered(long_design, shape):
    weights = {"refractory": [-2.0, -0.5, 0.0, 0.0], "bursting": [0.5, 0.0, -0.8, 0.0]}[shape]
    truth = raised_cosines(LAGS, 4) @ weights
    inside = []
    for seed in range(12):
        times = self_exciting(long_design, truth, 8.0, seed)
        design = with_history(long_design, times)
        space = workspace(design, ())
        found = fitted_filter(design, space.layout, fit_whole(space, design, bin_spikes(design, times)))
        np.testing.assert_allclose(found.lag_s, 0.02 * np.arange(1, LAGS + 1))
        np.testing.assert_allclose(np.log(found.gain), truth, atol=0.35)
        inside.append((found.gain_low <= np.exp(truth)) & (np.exp(truth) <= found.gain_high))
    # 95 % bands, 12 units: lags of a unit go together, so their share varies as that of 12 to 48 draws would.
    assert np.mean(inside) >= 0.85


@pytest.mark.parametrize("n_functions", [2, 4, 6])
@pytest.mark.parametrize("model", [(), ("head_direction",), ("position", "speed")])
def test_information_is_that_of_the_design_matrix(table, simulate, n_functions, model):
    """X'WX and X'mu by the plain matrix product over bins; the kernels take several ways."""
    design = prepare_session(table, EncodingSettings(history_s=0.3, history_functions=n_functions))
    design = with_history(design, simulate("position", 1))
    space = workspace(design, model)
    beta = np.random.default_rng(1).normal(0, 0.1, space.layout.n_coordinates)
    use = (np.arange(design.folds.n_groups) % 3 > 0).astype(float)
    gradient, information = space.derivatives(space.expected(beta, use))
    X = np.hstack([np.ones((design.n_bins, 1)), *(term.functions[term.cell] for term in space.terms)])
    mu = design.bin_s * np.exp(X @ beta) * use[design.folds.group]
    np.testing.assert_allclose(gradient, X.T @ mu, rtol=1e-8, atol=1e-8 * mu.sum())
    np.testing.assert_allclose(information, X.T @ (mu[:, None] * X), rtol=1e-8, atol=1e-8 * mu.sum())


def test_the_fit_is_that_of_a_ridge_regression(long_design):
    """scikit-learn's PoissonRegressor on the bins themselves, columns scaled so that its ridge is ours."""
    times = self_exciting(long_design, raised_cosines(LAGS, 4) @ [-1.5, 0.5, 0.0, 0.0], 6.0, 5)
    bare = prepare_session(table_of(long_design), EncodingSettings(history_s=0.3, drift=False))
    design = with_history(bare, times)
    unit, space = bin_spikes(design, times), workspace(design, ())
    strength = 3.0
    sums = space.project(np.concatenate([unit.per_cell(t) for t in space.terms]), unit.n_spikes)
    fit = fit_model(
        space, sums, np.ones(design.folds.n_groups), tolerance=1e-10, fixed_log_strengths=[np.log(strength)]
    )
    X = design.nuisance[0].functions[design.nuisance[0].cell]
    # PoissonRegressor minimises the mean of (mu - y log mu) + alpha |b|^2 / 2.
    theirs = PoissonRegressor(alpha=strength / len(X), tol=1e-10, solver="newton-cholesky").fit(
        X, unit.counts
    )
    np.testing.assert_allclose(fit.coefficients[1:], theirs.coef_, atol=1e-6)


def test_the_fit_with_all_terms_is_scipys(table, simulate):
    """SciPy's trust-region Newton on the same penalised likelihood, written out over bins."""
    design = prepare_session(table, EncodingSettings(history_s=0.3))
    times = simulate("head_direction+speed", 4)
    design, unit = with_history(design, times), bin_spikes(design, times)
    space = workspace(design, ("head_direction", "speed"))
    fit = fit_whole(space, design, unit)
    fit = fit_model(
        space,
        space.project(np.concatenate([unit.per_cell(t) for t in space.terms]), unit.n_spikes),
        np.ones(design.folds.n_groups),
        tolerance=1e-12,
        fixed_log_strengths=fit.log_strengths,
    )
    X = np.hstack([np.ones((design.n_bins, 1)), *(term.functions[term.cell] for term in space.terms)])
    ridge = np.exp(fit.log_strengths) @ space.layout.spectra

    def expected(b):
        return design.bin_s * np.exp(X @ b)

    start = np.zeros(X.shape[1])
    start[0] = np.log(unit.n_spikes / (design.n_bins * design.bin_s))
    theirs = minimize(
        lambda b: expected(b).sum() - unit.counts @ (X @ b) + ridge @ b**2 / 2,
        start,
        jac=lambda b: X.T @ (expected(b) - unit.counts) + ridge * b,
        hess=lambda b: X.T @ (expected(b)[:, None] * X) + np.diag(ridge),
        method="trust-exact",
        options={"gtol": 1e-8},
    )
    np.testing.assert_allclose(X @ fit.coefficients, X @ theirs.x, atol=1e-6)


def test_rounding_of_sums_does_not_move_the_filter(long_design):
    """A unit of 60 Hz, fitted by SciPy on sums that are not rounded: less than 0.5 % apart."""
    times = self_exciting(long_design, raised_cosines(LAGS, 4) @ [-1.0, 0.05, 0.0, 0.0], 60.0, 1)
    bare = prepare_session(table_of(long_design), EncodingSettings(history_s=0.3, drift=False))
    design = with_history(bare, times)
    unit, space = bin_spikes(design, times), workspace(design, ())
    fit = fit_whole(space, design, unit)
    counts, _ = np.histogram(times, design.edges_s)
    X = np.column_stack([np.ones(design.n_bins), recent_spikes(counts.astype(float), design.history)])
    np.testing.assert_allclose(X[:, 1:], design.nuisance[-1].functions[design.nuisance[-1].cell], atol=5e-4)
    ridge = np.exp(fit.log_strengths[0]) * np.array([0.0, 1, 1, 1, 1])
    b = fit.coefficients.copy()
    for _ in range(8):  # Newton's method, from the rounded optimum
        mu = design.bin_s * np.exp(X @ b)
        b += np.linalg.solve(X.T @ (mu[:, None] * X) + np.diag(ridge), X.T @ (counts - mu) - ridge * b)
    found = fitted_filter(design, space.layout, fit)
    np.testing.assert_allclose(found.gain, np.exp(design.history @ b[1:]), rtol=5e-3)


def test_spikes_of_masked_time_are_remembered_and_those_of_unobserved_time_are_not(table):
    masked = {**table, "valid": np.arange(len(table["time_s"])) % 500 > 20}
    design = prepare_session(masked, WITH)
    last = np.flatnonzero(~design.valid)[20]  # the last masked bin of the first gap
    spike = np.array([design.edges_s[last] + 0.01])
    after = with_history(design, spike).nuisance[-1]
    first = np.searchsorted(np.flatnonzero(design.valid), last)
    np.testing.assert_allclose(after.functions[after.cell[first]], raised_cosines(LAGS, 4)[0], atol=1e-3)
    assert np.all(after.functions[after.cell[first + LAGS]] == 0)
    observed = np.arange(len(design.valid)) != last
    nothing = with_history(design, spike, observed).nuisance[-1]
    assert np.all(nothing.functions == 0)


@pytest.mark.parametrize(("reach_s", "guard_s"), [(0.3, 0.5), (0.5, 0.5)])
def test_held_out_spikes_reach_no_training_row(table, reach_s, guard_s):
    """Without the spikes of held-out blocks, the history of bins that train is the same to the last bit."""
    design = prepare_session(table, EncodingSettings(history_s=reach_s, guard_s=guard_s))
    rng = np.random.default_rng(8)
    times = np.sort(rng.uniform(design.edges_s[0], design.edges_s[-1], 20_000))
    bins = np.searchsorted(design.edges_s, times, side="right") - 1
    for fold in (0, 4, 9):
        inside = design.folds.held_out(fold)[design.folds.group][bins]  # all bins of this session are valid
        terms = [with_history(design, t).nuisance[-1] for t in (times, times[~inside])]
        sums = [t.functions[t.cell] for t in terms]
        trains = design.folds.training(fold)[design.folds.group]
        np.testing.assert_array_equal(sums[0][trains], sums[1][trains])
        assert np.abs(sums[0][~trains] - sums[1][~trains]).max() > 0.5


def test_blocks_shorter_than_the_history_asks_are_refused(table):
    short = {name: values[:2000] for name, values in table.items()}  # 40 s in 50 blocks of 0.8 s
    prepare_session(short, EncodingSettings())
    with pytest.raises(InputError, match=r"(?s)lasts 0.78 s.*more than 0.8 s.*blocks_per_fold"):
        prepare_session(short, EncodingSettings(history_s=0.4))


def test_a_unit_does_not_depend_on_those_analysed_before(table, long_design, simulate):
    alone = analyse_unit(prepare_session(table, WITH), simulate("speed", 6), None, WITH)
    analyse_unit(long_design, simulate("position", 7), None, WITH)
    after = analyse_unit(long_design, simulate("speed", 6), None, WITH)
    assert repr(alone.row) == repr(after.row) and repr(alone.scores) == repr(after.scores)
    for name, curve in alone.curves.items():
        np.testing.assert_array_equal(curve, after.curves[name])


def test_without_a_history_nothing_of_it_is_there(table, design, simulate, settings):
    times = simulate("head_direction", 3)
    other = EncodingSettings(history_functions=6)
    found = analyse_unit(design, times, None, settings)
    same = analyse_unit(prepare_session(table, other), times, None, other)
    assert repr(found.row) == repr(same.row)
    assert [term.name for term in design.nuisance] == ["drift"]
    assert not [name for name in found.curves if name.startswith("history")]


def test_a_unit_is_analysed_with_its_history(long_design):
    times = self_exciting(long_design, raised_cosines(LAGS, 4) @ [-2.0, 0.0, 0.0, 0.0], 6.0, 9)
    found = analyse_unit(long_design, times, None, WITH)
    assert found.row["status"] == "fitted"
    assert found.curves["history_gain"][0] < 0.4
    low, gain, high = (found.curves[f"history_gain{part}"] for part in ("_low", "", "_high"))
    assert np.all((low < gain) & (gain < high)) and len(found.curves["history_lag_s"]) == LAGS
    plain = EncodingSettings()
    without = analyse_unit(prepare_session(table_of(long_design), plain), times, None, plain)
    assert "history_gain" not in without.curves
    assert abs(found.row["residual_correlation_peak"]) < abs(without.row["residual_correlation_peak"])


def test_a_reach_beyond_the_guard_is_refused():
    with pytest.raises(ValidationError, match="raise guard_s as well"):
        EncodingSettings(history_s=0.8)
    assert EncodingSettings(history_s=0.8, guard_s=0.8).history_s == 0.8


def test_a_reach_of_too_few_bins_is_refused(table):
    with pytest.raises(InputError, match=r"(?s)0.0599 s holds 2 bins.*fewer functions"):
        prepare_session(table, EncodingSettings(history_s=0.0599))


@pytest.mark.parametrize("name", ["drift", "history"])
def test_a_term_cannot_take_a_nuisance_terms_name(name):
    with pytest.raises(ValidationError, match=f"must not be called {name}"):
        EncodingSettings(terms=[{"name": name, "kind": "line", "columns": ["speed_cm_s"]}])
