"""Goodness of fit: a worked example, scipy's test, simulated units of known rate, direct loops."""

from types import SimpleNamespace

import numpy as np
import pytest
from scipy import stats

from odograph.encoding import evaluate as evaluate_module
from odograph.encoding.analyse import analyse_unit
from odograph.encoding.evaluate import evaluate, fold_spikes
from odograph.encoding.fit import fit_model
from odograph.encoding.goodness import (
    STRETCH,
    held_out_counts,
    judge,
    lagged_products,
    rescaled_intervals,
    rescaling_test,
    residual_autocorrelation,
)
from odograph.encoding.shared import workspace
from odograph.encoding.spikes import bin_spikes

BIN_S = 0.02


def test_intervals_in_expected_spikes():
    # By hand: bins expect 0.5, 1 and 2 spikes; one spike half into the first, two in the third
    found = rescaled_intervals(np.array([0.5, 1.0, 2.0]), np.array([0, 2, 2]), np.array([0.5, 0.25, 1.0]))
    np.testing.assert_allclose(found, [0.25, 1.75, 1.5])


def test_masked_time_stands_still():
    """By hand: bins of 1 s expect 1, 2, -, -, 4 and 8 spikes; two spikes are masked, two coincide."""
    session = SimpleNamespace(
        edges_s=np.arange(7.0), bin_s=1.0, valid=np.array([1, 1, 0, 0, 1, 1], dtype=bool), n_bins=4
    )
    unit = bin_spikes(session, np.array([4.5, 0.5, 2.5, 1.25, 5.75, 4.5, 3.9]))
    np.testing.assert_array_equal(unit.bins, [0, 1, 2, 2, 3])
    np.testing.assert_array_equal(unit.within, [0.5, 0.25, 0.5, 0.5, 0.75])
    found = rescaled_intervals(np.array([1.0, 2.0, 4.0, 8.0]), unit.bins, unit.within)
    np.testing.assert_allclose(found, [0.5, 1.0, 3.5, 0.0, 8.0])


def test_a_statistic_by_hand():
    """Intervals of ln 2 and ln 4 are 1/2 and 3/4 as uniforms; before the first, the distribution is 0."""
    assert rescaling_test(np.log([2.0, 4.0])).statistic == pytest.approx(0.5)


@pytest.mark.parametrize("n", [20, 100, 3000])
@pytest.mark.parametrize("shape", [0.7, 0.95, 1.0, 1.05, 1.4])
def test_statistic_and_p_are_those_of_scipy(n, shape):
    intervals = np.random.default_rng(n).gamma(shape, size=n)
    ours, theirs = rescaling_test(intervals), stats.kstest(intervals, "expon", method="exact")
    assert ours.n_intervals == n
    assert ours.statistic == pytest.approx(theirs.statistic, abs=1e-12)
    assert ours.p == pytest.approx(theirs.pvalue, abs=1e-3)


def test_no_spikes_give_no_statistic():
    found = rescaling_test(np.empty(0))
    assert np.isnan(found.statistic) and np.isnan(found.p) and found.n_intervals == 0


def poisson(rng, mu):
    """Counts, and the bin and place of every spike, of a Poisson train."""
    counts = rng.poisson(mu)
    bins = np.repeat(np.arange(len(mu)), counts)
    within = rng.random(len(bins))
    order = np.lexsort((within, bins))
    return counts, bins, within[order]


def test_p_is_uniform_for_poisson_units_of_known_rate():
    """300 units; their p against a uniform by scipy's test, whose p is above 1e-3."""
    p = []
    for seed in range(300):
        rng = np.random.default_rng(seed)
        mu = 0.1 * np.exp(np.sin(np.arange(4000) / 37 + seed))
        p.append(rescaling_test(rescaled_intervals(mu, *poisson(rng, mu)[1:])).p)
    assert stats.kstest(p, "uniform").pvalue > 1e-3
    assert 0.02 < np.mean(np.array(p) <= 0.05) < 0.09


def test_the_band_holds_95_percent_of_lags_of_poisson_units():
    """100 units x 50 lags of a modulated rate, a third of the time masked."""
    inside = []
    for seed in range(100):
        rng = np.random.default_rng(seed)
        valid = (np.arange(9000) // 30) % 3 > 0
        mu = 0.2 * np.exp(np.sin(np.arange(9000) / 23))[valid]
        found = residual_autocorrelation(poisson(rng, mu)[0], mu, valid, BIN_S)
        inside.append(np.abs(found.correlation) <= found.band)
    assert found.lag_s[0] == pytest.approx(0.02) and found.lag_s[-1] == pytest.approx(1.0)
    assert np.mean(inside) == pytest.approx(0.95, abs=0.01)


def test_autocorrelation_by_a_direct_loop():
    """Lags 1 and 2 are without a pair, lag 3 has few."""
    rng = np.random.default_rng(5)
    places = np.cumsum(rng.integers(3, 6, 90))
    valid = np.zeros(places[-1] + 4, dtype=bool)
    valid[places] = True
    mu = rng.gamma(2, 0.2, len(places))
    counts = rng.poisson(mu)
    found = residual_autocorrelation(counts, mu, valid, BIN_S)
    residual = dict(zip(places, counts - mu, strict=True))
    expected = dict(zip(places, mu, strict=True))
    for k in range(1, 51):
        pairs = [(i, i + k) for i in residual if i + k in residual]
        assert bool(pairs) == (k > 2)
        spread = np.sqrt(sum(expected[i] for i, _ in pairs) * sum(expected[j] for _, j in pairs)) or 1.0
        product = sum(residual[i] * residual[j] for i, j in pairs)
        variance = sum(expected[i] * expected[j] for i, j in pairs)
        assert found.correlation[k - 1] == pytest.approx(product / spread, abs=1e-12)
        # 1.959964: 97.5 % point of the normal distribution, any statistical table
        assert found.band[k - 1] == pytest.approx(1.959964 * np.sqrt(variance) / spread, rel=1e-6, abs=1e-12)


@pytest.mark.parametrize("n", [60, STRETCH - 1, 2 * STRETCH + 77, 50_000])
def test_autocorrelation_without_a_mask_is_that_of_numpy(n):
    """numpy.correlate; for a constant rate the scale is the rate times the number of pairs, nearly."""
    counts = np.random.default_rng(n).poisson(0.3, n)
    found = residual_autocorrelation(counts, np.full(n, 0.3), np.ones(n, dtype=bool), BIN_S)
    products = np.correlate(counts - 0.3, counts - 0.3, "full")[n : n + 50]
    pairs = n - np.arange(1, 51)
    np.testing.assert_allclose(found.correlation, products / (0.3 * pairs), atol=1e-12)
    np.testing.assert_allclose(found.band, 1.959964 / np.sqrt(pairs), rtol=1e-6)


@pytest.mark.parametrize("n_lags", [1, 3, 1000])
def test_lagged_products_over_stretches(n_lags):
    """numpy's dot products; as many lags as bins of 1 ms have, over more than two stretches."""
    a, b = np.random.default_rng(n_lags).normal(size=(2, 2 * STRETCH + 5 * n_lags))
    found = lagged_products(np.array([a, b]), [(0, 1), (1, 0)], n_lags)
    for lag in (1, n_lags // 2 or 1, n_lags):
        np.testing.assert_allclose(found[:, lag - 1], [a[:-lag] @ b[lag:], b[:-lag] @ a[lag:]], atol=1e-9)


def test_the_peak_is_the_largest_absolute_value():
    valid = np.ones(400, dtype=bool)
    counts = np.zeros(400)
    counts[::40] = 1  # every 0.8 s
    peak, lag_s = residual_autocorrelation(counts, np.full(400, 1 / 40), valid, BIN_S).peak
    # By hand: of 360 pairs 9 are of two spikes; r r' sums to 9 - 18 / 40 + 360 / 1600, over 360 / 40
    assert lag_s == pytest.approx(0.8) and peak == pytest.approx((9 - 18 / 40 + 360 / 1600) / 9)


def test_bursts_are_noticed(design):
    """Every spike with a second one 30 ms later: intervals and residuals both say no, at the right lag."""
    rng = np.random.default_rng(1)
    first = np.sort(rng.uniform(design.edges_s[0], design.edges_s[-1], 1500))
    unit = bin_spikes(design, np.concatenate([first, first + 0.03]))
    score = evaluate(workspace(design, ()), (), design, unit, fold_spikes(design, unit))
    rescaling, residuals = judge(workspace(design, ()), design, unit, score)
    assert rescaling.p < 1e-6
    peak, lag_s = residuals.peak
    assert lag_s in (pytest.approx(0.02), pytest.approx(0.04)) and peak > 5 * residuals.band[0]


def test_refractory_units_are_noticed(design):
    """No spike within 60 ms of another: intervals are too regular and residuals correlate negatively."""
    rng = np.random.default_rng(3)
    times = design.edges_s[0] + np.cumsum(0.06 + rng.exponential(0.06, 20_000))
    unit = bin_spikes(design, times)
    score = evaluate(workspace(design, ()), (), design, unit, fold_spikes(design, unit))
    rescaling, residuals = judge(workspace(design, ()), design, unit, score)
    assert rescaling.p < 1e-6
    peak, lag_s = residuals.peak
    assert lag_s == pytest.approx(0.02) and peak < -5 * residuals.band[0]


def test_units_that_the_model_describes_are_rarely_rejected(design, simulate):
    """40 units, fitted; with at most 5 % rejected, more than 5 of 40 has a probability of 0.01 (binomial)."""
    model, p = ("head_direction",), []
    space = workspace(design, model)
    for seed in range(40):
        unit = bin_spikes(design, simulate("head_direction", 100 + seed))
        score = evaluate(space, model, design, unit, fold_spikes(design, unit))
        p.append(judge(space, design, unit, score)[0].p)
    assert np.sum(np.array(p) < 0.05) <= 5


@pytest.mark.parametrize("model", [(), ("head_direction",), ("position", "speed")])
def test_every_bin_is_predicted_by_the_fold_that_held_it_out(design, simulate, model):
    """Against a design matrix; and the Poisson likelihood of bins is what the folds were scored by."""
    space, unit = workspace(design, model), bin_spikes(design, simulate("position+speed", 8))
    tables = fold_spikes(design, unit)
    score = evaluate(space, model, design, unit, tables)
    found = held_out_counts(space, design, score)
    seconds = design.n_bins * design.bin_s
    assert seconds == pytest.approx(tables.held_out_s.sum())
    for fold, coefficients in enumerate(score.fold_coefficients):
        here = design.folds.held_out(fold)[design.folds.group]
        matrix = np.hstack([np.ones((here.sum(), 1)), *(t.functions[t.cell[here]] for t in space.terms)])
        np.testing.assert_allclose(found[here], design.bin_s * np.exp(matrix @ coefficients), rtol=1e-9)
        constant = design.bin_s * tables.n_training[fold] / tables.training_s[fold]
        gain = unit.counts[here] @ np.log(found[here] / constant) - np.sum(found[here] - constant)
        assert gain == pytest.approx(score.fold_gain[fold], abs=1e-6)


def predictions_with_and_without(design, model, times, fold):
    """Expected counts from all spikes, and from those outside a fold's blocks; the bins it holds out."""
    space = workspace(design, model)
    here = design.folds.group % design.folds.n_folds == fold
    units = [bin_spikes(design, t) for t in (times, times_outside(design, times, here))]
    assert units[1].n_spikes < units[0].n_spikes
    scores = [evaluate(space, model, design, unit, fold_spikes(design, unit)) for unit in units]
    return *(held_out_counts(space, design, score) for score in scores), here


@pytest.mark.parametrize("kind", ["flat", "position+head_direction"])
@pytest.mark.parametrize("model", [(), ("head_direction",), ("position", "head_direction", "speed")])
def test_held_out_time_is_predicted_without_its_spikes(design, simulate, monkeypatch, model, kind):
    """From a common start, the same to the last bit; all other bins' prediction changes."""

    def from_the_constant_rate(space, spikes, use, start=None):
        return fit_model(space, spikes, use)

    monkeypatch.setattr(evaluate_module, "fit_model", from_the_constant_rate)
    all_spikes, fewer, here = predictions_with_and_without(design, model, simulate(kind, 2), 3)
    np.testing.assert_array_equal(all_spikes[here], fewer[here])
    assert np.abs(np.log(fewer / all_spikes))[~here].mean() > 0.05


@pytest.mark.parametrize("model", [(), ("head_direction",), ("position", "head_direction", "speed")])
def test_where_folds_start_matters_little(design, simulate, model):
    """They start from the fit to all time, which has seen held-out spikes, and stop at a tolerance."""
    times = simulate("position+head_direction", 2)
    all_spikes, fewer, here = predictions_with_and_without(design, model, times, 3)
    change = np.abs(np.log(fewer / all_spikes))
    assert change[here].max() < 0.01
    assert change[~here].mean() > 0.05
    assert all_spikes.sum() == pytest.approx(len(times), rel=0.02)


def times_outside(design, times, here):
    """Spikes that do not fall in the given valid bins."""
    all_bins = np.flatnonzero(design.valid)[here]
    index = np.searchsorted(design.edges_s, times, side="right") - 1
    return times[~np.isin(index, all_bins)]


def test_a_unit_comes_with_its_goodness(design, simulate, settings):
    found = analyse_unit(design, simulate("position+head_direction", 2), None, settings)
    assert found.row["rescaling_intervals"] == found.row["n_spikes"]
    assert 0 < found.row["rescaling_ks"] < 0.1 and 0 <= found.row["rescaling_ks_p"] <= 1
    assert len(found.curves["residual_lag_s"]) == 50
    few = analyse_unit(design, np.arange(10) + 100.0, None, settings)
    assert few.row["status"] == "too_few_spikes" and np.isnan(few.row["rescaling_ks"])
