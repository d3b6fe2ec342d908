"""The slow-fast comparison against hand computations: whole halves, thinned halves, too little."""

import numpy as np
import pytest
from scipy.stats import hypergeom

from odograph.encoding.slow_fast import LEAST_SPIKES, compare_halves, running_halves


def bins(seconds_slow, seconds_fast, spikes_slow, spikes_fast):
    """Bins of 1 s, all spikes of a cell and a half in its first bin: (cell, counts, slow, fast)."""
    cell, counts, slow = [], [], []
    for seconds, spikes, is_slow in ((seconds_slow, spikes_slow, True), (seconds_fast, spikes_fast, False)):
        for c, (s, k) in enumerate(zip(seconds, spikes, strict=True)):
            cell += [c] * s
            counts += [k, *[0] * (s - 1)][:s]
            slow += [is_slow] * s
    return np.array(cell), np.array(counts, dtype=float), np.array(slow), ~np.array(slow)


def compare(*parts, repeats=3, seed=1):
    return compare_halves(*bins(*parts), 1.0, repeats=repeats, seed=seed)


def test_halves_alike_in_time_and_number_are_compared_whole():
    """By hand: of four equal cells, spikes in one tell 2 bits, in two 1 bit; the bias is 3 / (2 n ln 2)."""
    found = compare([5] * 4, [5] * 4, [80, 0, 0, 0], [0, 40, 0, 40])
    bias = 3 / (2 * 80 * np.log(2))
    assert found.slow_bits_per_spike == pytest.approx(2 - bias)
    assert found.fast_bits_per_spike == pytest.approx(1 - bias)
    assert (found.matched_seconds, found.matched_spikes) == (20.0, 80.0)


def test_unequal_times_and_rates_by_hand():
    """By hand: times 10, 30 in both halves, 60 and 20 spikes: p = 1/4, 3/4, r / mean = 3, 1/3 (exact)."""
    found = compare([10, 30], [10, 30], [60, 20], [20, 60])
    bias = 1 / (2 * 80 * np.log(2))
    expected = 0.25 * 3 * np.log2(3) + 0.75 / 3 * np.log2(1 / 3)
    assert found.slow_bits_per_spike == pytest.approx(expected - bias)
    assert found.fast_bits_per_spike == pytest.approx(0 - bias)  # rate the same in both cells


def test_cells_that_one_half_never_visits_are_left_out():
    whole = compare([5, 5], [5, 5], [70, 10], [40, 40])
    found = compare([5, 5, 9, 0], [5, 5, 0, 4], [70, 10, 500, 0], [40, 40, 0, 900])
    assert found == whole
    assert found.matched_seconds == 10.0


def test_exchanging_the_halves_exchanges_the_answer():
    one = compare([4, 6], [4, 6], [50, 10], [30, 30])
    other = compare([4, 6], [4, 6], [30, 30], [50, 10])
    assert one.slow_bits_per_spike == pytest.approx(other.fast_bits_per_spike)
    assert one.fast_bits_per_spike == pytest.approx(other.slow_bits_per_spike)


def test_spikes_of_the_longer_half_are_thinned_to_the_common_time():
    """Exact: 2000 spikes in twice the common time leave 1000 on average, with binomial scatter of 22."""
    found = compare([20, 20], [10, 10], [1000, 1000], [4000, 4000], repeats=100)
    assert found.matched_seconds == 20.0
    assert found.matched_spikes == pytest.approx(1000, abs=4 * np.sqrt(2000 / 4 / 100))
    assert found.slow_bits_per_spike == pytest.approx(0, abs=1e-3)


def test_the_busier_half_is_thinned_to_the_number_of_the_other():
    """Exact: 100 of 400 spikes, 300 of them in one of two equal cells: a mean over the hypergeometric."""
    found = compare([5, 5], [5, 5], [300, 100], [50, 50], repeats=4000)
    taken = np.arange(101)
    share = taken / 100
    with np.errstate(divide="ignore", invalid="ignore"):
        bits = 1 + np.nan_to_num(share * np.log2(share)) + np.nan_to_num((1 - share) * np.log2(1 - share))
    chance = hypergeom(400, 300, 100).pmf(taken)
    spread = np.sqrt(chance @ bits**2 - (chance @ bits) ** 2)
    bias = 1 / (2 * 100 * np.log(2))
    assert found.matched_spikes == 100.0
    assert found.slow_bits_per_spike == pytest.approx(chance @ bits - bias, abs=4 * spread / np.sqrt(4000))


@pytest.mark.parametrize("spikes, enough", [(LEAST_SPIKES - 1, False), (LEAST_SPIKES, True)])
def test_a_least_number_of_spikes_is_asked_for(spikes, enough):
    found = compare([5, 5], [5, 5], [100, 100], [spikes, 0])
    assert np.isfinite(found.slow_bits_per_spike) == np.isfinite(found.fast_bits_per_spike) == enough
    assert found.matched_spikes == (LEAST_SPIKES if enough else 0)


def test_halves_that_share_one_cell_are_not_compared():
    found = compare([5, 5, 0], [0, 5, 5], [90, 90, 0], [0, 90, 90])
    assert np.isnan(found.slow_bits_per_spike) and found.matched_seconds == 0


def test_draws_follow_the_seed():
    parts = ([9, 6], [5, 8], [70, 90], [200, 60])
    assert compare(*parts, seed=4) == compare(*parts, seed=4)
    assert compare(*parts, seed=4) != compare(*parts, seed=5)


def test_running_halves_by_hand():
    # Running above 2: 3, 4, 4, 9; median 4, which belongs to the slow half.
    slow, fast, cut = running_halves(np.array([2.0, 9.0, 4.0, 0.0, 3.0, 4.0]), 2.0)
    assert cut == 4.0
    np.testing.assert_array_equal(np.flatnonzero(slow), [2, 4, 5])
    np.testing.assert_array_equal(np.flatnonzero(fast), [1])


def test_an_animal_that_never_ran_has_no_halves():
    slow, fast, cut = running_halves(np.array([0.5, 1.0]), 2.0)
    assert not slow.any() and not fast.any() and np.isnan(cut)
