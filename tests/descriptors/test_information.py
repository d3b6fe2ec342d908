"""Spatial information against closed forms and two general-purpose libraries.

The definition is that of Skaggs et al. 1993 and 1996; the closed forms follow from it by integration.
"""

import numpy as np
import pytest
from scipy import special, stats

from odograph.descriptors.information import (
    information_bias_bits,
    information_bits_per_second,
    information_bits_per_spike,
    mean_rate,
    sparsity,
)


@pytest.mark.parametrize("fraction, bits", [(0.5, 1.0), (0.25, 2.0), (0.1, np.log2(10))])
def test_firing_in_a_fraction_of_the_time(fraction, bits):
    """Exact: log2(1 / f) bits per spike, sparsity f."""
    rate = np.where(np.arange(1000) < 1000 * fraction, 7.0, 0.0)
    assert information_bits_per_spike(np.ones(1000), rate) == pytest.approx(bits, abs=1e-12)
    assert sparsity(np.ones(1000), rate) == pytest.approx(fraction, abs=1e-12)


def test_unequal_occupancy_by_hand():
    """Exact: all spikes in a bin with an eighth of the time: 3 bits per spike, at 1 Hz 3 bits per second."""
    seconds, rate = np.array([40.0, 20.0, 10.0, 10.0]), np.array([0.0, 0.0, 8.0, 0.0])
    assert information_bits_per_spike(seconds, rate) == pytest.approx(3, abs=1e-12)
    assert information_bits_per_second(seconds, rate) == pytest.approx(3, abs=1e-12)
    assert sparsity(seconds, rate) == pytest.approx(0.125, abs=1e-12)
    assert mean_rate(seconds, rate) == pytest.approx(1, abs=1e-12)


def test_four_equal_bins_by_hand():
    """Exact: rates 1, 2, 3, 4: .1 log2 .4 + .2 log2 .8 + .3 log2 1.2 + .4 log2 1.6."""
    rate = np.array([[1.0, 2.0], [3.0, 4.0]])
    assert information_bits_per_spike(np.ones((2, 2)), rate) == pytest.approx(0.153560655329, abs=1e-12)
    assert sparsity(np.ones((2, 2)), rate) == pytest.approx(6.25 / 7.5, abs=1e-12)


@pytest.mark.parametrize("depth", [0.2, 0.5, 0.9, 1.0])
def test_cosine_tuning(depth):
    """Exact: [ln((1 + q) / 2) + 1 - q] / ln 2 with q = sqrt(1 - m^2); sparsity 1 / (1 + m^2 / 2)."""
    angle = np.arange(20000) * 2 * np.pi / 20000
    rate, q = 1 + depth * np.cos(angle), np.sqrt(1 - depth**2)
    expected = (np.log((1 + q) / 2) + 1 - q) / np.log(2)
    assert information_bits_per_spike(np.ones(20000), rate) == pytest.approx(expected, abs=1e-7)
    assert sparsity(np.ones(20000), rate) == pytest.approx(1 / (1 + depth**2 / 2), abs=1e-9)


@pytest.mark.parametrize(
    "kappa, bits", [(0.5, 0.0861290196), (1, 0.3036521150), (2, 0.8245806814), (5, 1.6767490974)]
)
def test_von_mises_tuning(kappa, bits):
    """Exact: [kappa A(kappa) - ln I0(kappa)] / ln 2, sparsity I0(kappa)^2 / I0(2 kappa), A = I1 / I0."""
    rate = np.exp(kappa * np.cos(np.arange(20000) * 2 * np.pi / 20000))
    assert information_bits_per_spike(np.ones(20000), rate) == pytest.approx(bits, abs=1e-9)
    assert sparsity(np.ones(20000), rate) == pytest.approx(
        special.i0(kappa) ** 2 / special.i0(2 * kappa), abs=1e-9
    )


def test_exponentially_distributed_rates():
    """Exact: (1 - Euler's gamma) / ln 2 bits, sparsity one half."""
    n = 200_000
    rate = -np.log((np.arange(n) + 0.5) / n)
    assert information_bits_per_spike(np.ones(n), rate) == pytest.approx(
        (1 - np.euler_gamma) / np.log(2), abs=2e-4
    )
    assert sparsity(np.ones(n), rate) == pytest.approx(0.5, abs=2e-4)


def test_gaussian_field_in_a_square():
    """Exact up to the tails: log2(area / (2 pi s^2)) - 1 / ln 2 bits, sparsity 4 pi s^2 / area."""
    centre = (np.arange(400) + 0.5) / 400 - 0.5
    rate = np.exp(-(centre[:, None] ** 2 + centre**2) / (2 * 0.1**2))
    seconds = np.ones(rate.shape)
    assert information_bits_per_spike(seconds, rate) == pytest.approx(2.549665, abs=1e-3)
    assert sparsity(seconds, rate) == pytest.approx(0.04 * np.pi, abs=1e-3)


def test_unsmoothed_information_is_scipys_g_statistic_and_relative_entropy():
    seconds, spikes = np.array([10.0, 20.0, 30.0, 40.0]), np.array([5.0, 3.0, 9.0, 23.0])
    found = information_bits_per_spike(seconds, spikes / seconds)
    share = seconds / seconds.sum()
    g = stats.power_divergence(spikes, spikes.sum() * share, lambda_="log-likelihood").statistic
    assert found == pytest.approx(g / (2 * spikes.sum() * np.log(2)), abs=1e-12)
    assert found == pytest.approx(stats.entropy(spikes / spikes.sum(), share, base=2), abs=1e-12)
    assert sparsity(seconds, spikes / seconds) == pytest.approx(0.847682119, abs=1e-9)


def test_bias_of_a_flat_cell():
    """First-order bias, seen in 2000 multinomial draws; the next term here adds about 1 %."""
    spikes = np.random.default_rng(5).multinomial(2000, np.full(100, 0.01), size=2000)
    mean = np.mean([information_bits_per_spike(np.ones(100), row) for row in spikes])
    assert mean / information_bias_bits(100, 2000) == pytest.approx(1.0, abs=0.03)


def test_invariances():
    rng = np.random.default_rng(1)
    seconds, rate = rng.exponential(1, 50), rng.exponential(1, 50)
    order = rng.permutation(50)
    halves = np.repeat(seconds, 2) / 2, np.repeat(rate, 2)
    unvisited = np.append(seconds, [0.0, 3.0]), np.append(rate, [9.0, np.nan])
    for measure in (information_bits_per_spike, sparsity):
        expected = measure(seconds, rate)
        for changed in ((7 * seconds, 3 * rate), (seconds[order], rate[order]), halves, unvisited):
            assert measure(*changed) == pytest.approx(expected, rel=1e-12)


def test_silent_and_unvisited_maps_have_no_information_value():
    for measure in (information_bits_per_spike, sparsity):
        assert np.isnan(measure(np.ones(4), np.zeros(4)))
        assert np.isnan(measure(np.zeros(4), np.ones(4)))
    assert information_bits_per_second(np.ones(4), np.zeros(4)) == 0
    assert np.isnan(information_bits_per_second(np.zeros(4), np.ones(4)))
    assert np.isnan(information_bias_bits(100, 0))


@pytest.mark.parametrize(
    "seconds, rate",
    [([1, 1], [1]), ([1, -1], [1, 1]), ([1, 1], [1, -1]), ([1, 1], [1, np.inf]), ([np.inf], [1])],
)
def test_contradictory_input_is_refused(seconds, rate):
    with pytest.raises(ValueError):
        information_bits_per_spike(seconds, rate)
