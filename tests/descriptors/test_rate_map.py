"""Rate maps against numpy's histograms, statsmodels' kernel regression and exact properties."""

import numpy as np
import pytest
from statsmodels.nonparametric.kernel_regression import KernelReg

from odograph.descriptors.rate_map import (
    circular_rate,
    line_rate,
    occupancy_circle,
    occupancy_line,
    occupancy_map,
    smoothed_rate,
)


@pytest.fixture
def rng():
    return np.random.default_rng(20)


def test_occupancy_map_equals_numpy_histogram(rng):
    x, y, weights = rng.uniform(-0.1, 1.3, 5000), rng.uniform(-0.1, 0.9, 5000), rng.uniform(0, 1, 5000)
    x_edges, y_edges = np.linspace(0, 1.2, 31), np.array([0.0, 0.1, 0.15, 0.4, 0.8])
    expected = np.histogram2d(y, x, bins=[y_edges, x_edges], weights=weights)[0]
    np.testing.assert_allclose(
        occupancy_map(x, y, weights, x_edges, y_edges), expected, rtol=1e-12, atol=1e-12
    )


def test_occupancy_map_rows_are_y_and_the_upper_walls_belong_to_the_last_bins():
    edges = np.array([0.0, 0.5, 1.0])
    one = occupancy_map(np.array([1.0, 0.1, np.nan]), np.array([0.2, 1.0, 0.2]), 0.02, edges, edges)
    np.testing.assert_allclose(one, [[0, 0.02], [0.02, 0]])


def test_occupancy_line_equals_numpy_histogram(rng):
    values, weights = rng.normal(10, 8, 3000), rng.uniform(0, 1, 3000)
    edges = np.linspace(0, 30, 16)
    expected = np.histogram(values, edges, weights=weights)[0]
    np.testing.assert_allclose(occupancy_line(values, weights, edges), expected, rtol=1e-12)


def test_occupancy_circle_takes_any_winding(rng):
    angle = rng.uniform(0, 2 * np.pi, 4000)
    expected = np.histogram(angle, 36, range=(0, 2 * np.pi))[0] * 0.02
    turns = rng.integers(-3, 4, 4000)
    np.testing.assert_allclose(occupancy_circle(angle, 0.02, 36), expected)
    near_edge = np.abs(np.mod(angle, 2 * np.pi / 36)) < 1e-9
    assert not near_edge.any()  # else rounding of the added turns could move a sample to the next bin
    np.testing.assert_allclose(occupancy_circle(angle + 2 * np.pi * turns, 0.02, 36), expected)


def test_occupancy_circle_at_the_seam():
    counts = occupancy_circle(np.array([0.0, -1e-18, 2 * np.pi, np.nan, -0.01]), 1.0, 4)
    np.testing.assert_array_equal(counts, [3, 0, 0, 1])


def test_unsmoothed_rate_is_spikes_over_seconds():
    rate = smoothed_rate(np.array([[4.0, 0.0], [3.0, 1.0]]), np.array([[2.0, 1.0], [0.0, 4.0]]), 0)
    np.testing.assert_array_equal(rate, [[2.0, 0.0], [np.nan, 0.25]])


def test_constant_rate_stays_constant_at_walls_and_holes(rng):
    seconds = rng.exponential(1.0, (20, 25))
    seconds[5:9, 3:12] = 0
    rate = smoothed_rate(3.5 * seconds, seconds, 1.7)
    assert np.array_equal(np.isnan(rate), seconds == 0)
    np.testing.assert_allclose(rate[seconds > 0], 3.5, rtol=1e-12)


def test_smoothed_map_equals_the_written_out_kernel_sum(rng):
    seconds = rng.exponential(1.0, (9, 7))
    seconds[2, 3] = 0
    spikes = np.where(seconds > 0, rng.poisson(4.0, seconds.shape), 0)
    rows, columns = np.indices(seconds.shape)
    expected = np.full(seconds.shape, np.nan)
    for i, j in zip(*np.nonzero(seconds), strict=True):
        kernel = np.exp(-((rows - i) ** 2 + (columns - j) ** 2) / (2 * 1.3**2))
        expected[i, j] = np.sum(kernel * spikes) / np.sum(kernel * seconds)
    np.testing.assert_allclose(smoothed_rate(spikes, seconds, 1.3), expected, rtol=1e-7)


@pytest.mark.filterwarnings("ignore::FutureWarning")
def test_line_rate_is_the_local_constant_regression_of_statsmodels(rng):
    """With one second in every bin the estimator is Nadaraya-Watson's, which statsmodels computes ("lc")."""
    spikes, position = rng.poisson(5.0, 60).astype(float), np.arange(60.0)
    expected = KernelReg(spikes, position, "c", reg_type="lc", bw=[2.5]).fit()[0]
    np.testing.assert_allclose(line_rate(spikes, np.ones(60), 2.5), expected, rtol=1e-7)


@pytest.mark.parametrize("sigma_bins", [1.0, 2.5, 12.0])
def test_circular_rate_is_a_circular_convolution(rng, sigma_bins):
    """numpy's FFT convolves circularly; the kernel is the Gaussian wrapped round the circle."""
    n = 30
    spikes, seconds = rng.poisson(5.0, n).astype(float), rng.uniform(0.5, 2.0, n)
    steps = np.arange(n)[:, None] + n * np.arange(-12, 13)
    kernel = np.exp(-(steps**2) / (2 * sigma_bins**2)).sum(1)
    smooth = [np.fft.irfft(np.fft.rfft(a) * np.fft.rfft(kernel), n) for a in (spikes, seconds)]
    np.testing.assert_allclose(circular_rate(spikes, seconds, sigma_bins), smooth[0] / smooth[1], rtol=1e-6)


def test_circular_rate_turns_with_its_input(rng):
    spikes, seconds = rng.poisson(5.0, 24).astype(float), rng.uniform(0.5, 2.0, 24)
    turned = circular_rate(np.roll(spikes, 7), np.roll(seconds, 7), 2.0)
    np.testing.assert_allclose(turned, np.roll(circular_rate(spikes, seconds, 2.0), 7), rtol=1e-12)


def test_bins_visited_too_briefly_are_unvisited_and_lend_nothing():
    rate = line_rate(np.array([1.0, 50.0, 1.0]), np.array([1.0, 0.02, 1.0]), 1.0, min_seconds=0.05)
    np.testing.assert_allclose(rate, [1.0, np.nan, 1.0], rtol=1e-12)


@pytest.mark.parametrize(
    "call",
    [
        lambda: smoothed_rate(np.ones((2, 2)), np.ones((2, 3)), 1),
        lambda: smoothed_rate(np.ones((2, 2)), -np.ones((2, 2)), 1),
        lambda: smoothed_rate(np.ones((2, 2)), np.full((2, 2), np.nan), 1),
        lambda: smoothed_rate(np.ones((2, 2)), np.ones((2, 2)), -1),
        lambda: occupancy_line(np.ones(3), 1.0, np.array([0.0, 0.0, 1.0])),
        lambda: occupancy_line(np.ones(3), np.ones(2), np.array([0.0, 1.0])),
        lambda: occupancy_map(np.ones(3), np.ones(2), 1.0, np.array([0.0, 1.0]), np.array([0.0, 1.0])),
    ],
)
def test_contradictory_input_is_refused(call):
    with pytest.raises(ValueError):
        call()
