"""Goodness of fit: a worked example, scipy's test, simulated units of known rate, direct loops."""

import numpy as np
import pytest
from scipy import stats

from odograph.encoding.analyse import analyse_unit
from odograph.encoding.evaluate import evaluate, fold_spikes
from odograph.encoding.goodness import (
    held_out_counts,
    judge,
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


@pytest.mark.parametrize("n", [40, 700])
def test_the_statistic_is_that_of_scipy(n):
    intervals = np.random.default_rng(n).gamma(1.1, size=n)
    ours, theirs = rescaling_test(intervals), stats.kstest(intervals, "expon")
    assert ours.n_intervals == n
    assert ours.statistic == pytest.approx(theirs.statistic, abs=1e-12)
    assert ours.p == pytest.approx(theirs.pvalue, abs=0.02)  # Stephens' factor is made for the tail


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
    rng = np.random.default_rng(5)
    valid = rng.random(300) > 0.2
    mu = rng.gamma(2, 0.2, valid.sum())
    counts = rng.poisson(mu)
    found = residual_autocorrelation(counts, mu, valid, BIN_S)
    places = np.flatnonzero(valid)
    residual = dict(zip(places, counts - mu, strict=True))
    expected = dict(zip(places, mu, strict=True))
    for k in (1, 7, 50):
        pairs = [(i, i + k) for i in residual if i + k in residual]
        spread = np.sqrt(sum(expected[i] for i, _ in pairs) * sum(expected[j] for _, j in pairs))
        product = sum(residual[i] * residual[j] for i, j in pairs)
        variance = sum(expected[i] * expected[j] for i, j in pairs)
        assert found.correlation[k - 1] == pytest.approx(product / spread)
        assert found.band[k - 1] == pytest.approx(1.959964 * np.sqrt(variance) / spread, rel=1e-6)


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


def test_held_out_time_is_predicted_without_its_spikes(design):
    model, fold = ("head_direction",), 3
    space = workspace(design, model)
    times = np.random.default_rng(2).uniform(design.edges_s[0], design.edges_s[-1], 2000)
    unit = bin_spikes(design, times)
    here = design.folds.group % design.folds.n_folds == fold
    fewer = bin_spikes(design, times_outside(design, times, here))
    assert fewer.n_spikes < unit.n_spikes
    found = [
        held_out_counts(space, design, evaluate(space, model, design, u, fold_spikes(design, u)))
        for u in (unit, fewer)
    ]
    np.testing.assert_allclose(found[0][here], found[1][here], rtol=0.01)
    assert found[0].sum() == pytest.approx(unit.n_spikes, rel=0.02)


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
