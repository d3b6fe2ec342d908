"""Bins, gaps, directions and further signals, against closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from odograph.behaviour.bins import (
    angles_on_bins,
    bin_centres,
    direction_sd,
    in_gaps,
    long_gaps,
    values_on_bins,
    wrapped,
)


def test_bins_are_whole_and_counted_from_zero():
    np.testing.assert_allclose(bin_centres(0.99, 1.1, 0.02), [1.01, 1.03, 1.05, 1.07, 1.09])
    np.testing.assert_allclose(bin_centres(1.0, 1.04, 0.02), [1.01, 1.03])
    assert len(bin_centres(1.001, 1.01, 0.02)) == 0
    # Another start of the tracking leaves the same bins where both have them.
    assert set(bin_centres(5.003, 9.0, 0.02)) < set(bin_centres(0.0, 9.0, 0.02))


@pytest.mark.parametrize(
    ("sd_mm", "apart_mm", "circular_sd_degrees"),
    # Exact: projected normal distribution (Mardia & Jupp 2000).
    [(2.0, 30.0, 5.4264), (2.0, 10.0, 17.0331), (5.0, 10.0, 47.3935)],
)
def test_error_of_direction_of_two_points(sd_mm, apart_mm, circular_sd_degrees):
    found = direction_sd(np.array([apart_mm]), np.array([sd_mm**2]))
    assert np.rad2deg(found[0]) == pytest.approx(circular_sd_degrees, abs=1e-4)


def test_error_of_direction_by_simulation():
    rng = np.random.default_rng(8)
    ahead = np.array([12.0, 0.0]) + 3.0 * np.sqrt(2) * rng.standard_normal((200_000, 2))
    length = np.abs(np.exp(1j * np.arctan2(ahead[:, 1], ahead[:, 0])).mean())
    expected = direction_sd(np.array([12.0]), np.array([9.0]))[0]
    assert np.sqrt(-2 * np.log(length)) == pytest.approx(expected, rel=5e-3)


def test_angles_are_in_one_turn():
    angles = wrapped(np.array([-1e-18, 0.0, 2 * np.pi, -np.pi, 7.0]))
    assert (angles >= 0).all() and (angles < 2 * np.pi).all()
    np.testing.assert_allclose(angles[3:], [np.pi, 7.0 - 2 * np.pi])


def test_gaps_are_found_with_their_open_ends():
    time = np.array([0.0, 0.1, 0.2, 1.0, 1.1])
    believed = np.array([False, True, True, True, True])
    starts, stops = long_gaps(time, believed, 0.3)
    np.testing.assert_array_equal(starts, [-np.inf, 0.2, 1.1])
    np.testing.assert_array_equal(stops, [0.1, 1.0, np.inf])
    at = np.array([0.05, 0.1, 0.15, 0.2, 0.5, 1.0, 1.05, 2.0])
    np.testing.assert_array_equal(in_gaps(at, (starts, stops)), [0, -1, -1, -1, 1, -1, -1, 2])


def test_nothing_believed_is_one_gap():
    gaps = long_gaps(np.arange(5.0), np.zeros(5, bool), 0.3)
    np.testing.assert_array_equal(in_gaps(np.array([-3.0, 2.0, 9.0]), gaps), [0, 0, 0])


def test_angles_take_the_shorter_arc_and_respect_gaps():
    time = np.array([0.0, 0.1, 0.2, 1.0, 1.1])
    angle = np.deg2rad([350.0, 10.0, 30.0, 90.0, np.nan])
    found = np.rad2deg(angles_on_bins(time, angle, np.array([0.05, 0.15, 0.6]), 0.3))
    assert found[0] == pytest.approx(0.0, abs=1e-9) or found[0] == pytest.approx(360.0, abs=1e-9)
    assert found[1] == pytest.approx(20.0)
    assert np.isnan(found[2])


def test_fast_signals_are_averaged_and_slow_ones_interpolated():
    centres = bin_centres(0.0, 1.0, 0.02)
    fast_s = (np.arange(1000) + 0.5) / 1000
    np.testing.assert_allclose(
        values_on_bins(fast_s, 3.0 * fast_s, centres, 0.02, 0.3), 3.0 * centres, atol=1e-9
    )
    slow_s = np.arange(3) * 0.5
    np.testing.assert_allclose(values_on_bins(slow_s, slow_s**1, centres, 0.02, 0.3), centres)
    wave = np.sin(2 * np.pi * 50 * fast_s)
    assert np.abs(values_on_bins(fast_s, wave, centres, 0.02, 0.3)).max() < 1e-9


def test_signals_are_unknown_in_long_gaps_and_when_empty():
    centres = bin_centres(0.0, 1.0, 0.02)
    time = np.arange(100) * 0.01
    values = np.where((time > 0.3) & (time < 0.8), np.nan, 1.0)
    found = values_on_bins(time, values, centres, 0.02, 0.3)
    assert np.isnan(found[(centres > 0.31) & (centres < 0.79)]).all()
    assert np.isfinite(found[centres < 0.3]).all()
    assert np.isnan(values_on_bins(time, np.full(100, np.nan), centres, 0.02, 0.3)).all()
