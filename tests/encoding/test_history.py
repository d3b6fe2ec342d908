"""Spike history: formulas, a simulated unit of known filter, scikit-learn, what held-out time may touch."""

import numpy as np
import pytest
from pydantic import ValidationError
from sklearn.linear_model import PoissonRegressor

from odograph.encoding import history
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
    times = self_exciting(long_design, truth, 8.0, 3)
    design = with_history(long_design, times)
    space = workspace(design, ())
    found = fitted_filter(design, space.layout, fit_whole(space, design, bin_spikes(design, times)))
    np.testing.assert_allclose(found.lag_s, 0.02 * np.arange(1, LAGS + 1))
    assert np.mean((found.low <= np.exp(truth)) & (np.exp(truth) <= found.high)) >= 0.8
    np.testing.assert_allclose(np.log(found.gain), truth, atol=0.35)


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


def test_spikes_of_masked_time_are_remembered(table):
    masked = {**table, "valid": np.arange(len(table["time_s"])) % 500 > 20}
    design = prepare_session(masked, WITH)
    spike = design.edges_s[np.flatnonzero(~design.valid)[20]] + 0.01  # the last masked bin of a gap
    after = with_history(design, np.array([spike])).nuisance[-1]
    first = np.searchsorted(design.edges_s[:-1][design.valid], spike)
    assert after.functions[after.cell[first], 0] > 0
    assert after.functions[after.cell[first + LAGS + 1]] == pytest.approx(np.zeros(4))


def test_held_out_spikes_reach_no_training_row(long_design):
    """All spikes of a held-out block are moved; the history of bins that train without it stays."""
    rng = np.random.default_rng(8)
    times = np.sort(rng.uniform(long_design.edges_s[0], long_design.edges_s[-1], 4000))
    folds = long_design.folds
    held = np.flatnonzero(folds.held_out(4)[folds.group])
    all_bins = np.flatnonzero(long_design.valid)[held]
    inside = np.isin(np.searchsorted(long_design.edges_s, times, side="right") - 1, all_bins)
    terms = [with_history(long_design, t).nuisance[-1] for t in (times, times[~inside])]
    sums = [t.functions[t.cell] for t in terms]
    trains = folds.training(4)[folds.group]
    near = sums[0].max() / 4095  # bins of one cell differ by this at most
    np.testing.assert_allclose(sums[0][trains], sums[1][trains], rtol=0, atol=2 * near)
    assert np.abs(sums[0][held] - sums[1][held]).max() > 0.5


def test_many_different_pasts_share_cells_without_harm(long_design, monkeypatch):
    """A unit of 60 Hz: at most LARGEST_CELLS cells, filter within 0.5 % of the one that shares less."""
    times = self_exciting(long_design, raised_cosines(LAGS, 4) @ [-1.0, 0.05, 0.0, 0.0], 60.0, 1)
    unit, filters, n_cells = bin_spikes(long_design, times), [], []
    for most in (history.LARGEST_CELLS, 60_000):
        monkeypatch.setattr(history, "LARGEST_CELLS", most)
        design = with_history(long_design, times)
        space = workspace(design, ())
        n_cells.append(design.nuisance[-1].n_cells)
        filters.append(fitted_filter(design, space.layout, fit_whole(space, design, unit)))
    assert n_cells[0] <= 4096 < n_cells[1]
    np.testing.assert_allclose(filters[0].gain, filters[1].gain, rtol=5e-3)


def test_a_unit_is_analysed_with_its_history(long_design):
    times = self_exciting(long_design, raised_cosines(LAGS, 4) @ [-2.0, 0.0, 0.0, 0.0], 6.0, 9)
    found = analyse_unit(long_design, times, None, WITH)
    assert found.row["status"] == "fitted"
    assert found.curves["history_gain"][0] < 0.4
    plain = EncodingSettings()
    without = analyse_unit(prepare_session(table_of(long_design), plain), times, None, plain)
    assert "history_gain" not in without.curves
    assert abs(found.row["residual_correlation_peak"]) < abs(without.row["residual_correlation_peak"])


def test_a_reach_beyond_the_guard_is_refused():
    with pytest.raises(ValidationError, match="raise guard_s as well"):
        EncodingSettings(history_s=0.8)
    assert EncodingSettings(history_s=0.8, guard_s=0.8).history_s == 0.8


def test_a_reach_of_too_few_bins_is_refused(table):
    settings = EncodingSettings(history_s=0.04)
    with pytest.raises(InputError, match="holds 2 bins"):
        with_history(prepare_session(table, settings), np.array([1.0]))
