"""The simulated spike trains against what they are said to be."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from simulate_tuning import head_direction_gain, position_gain, sharpening, speed_gain
from simulate_units import (
    DECK,
    REFRACTORY_S,
    SPIKES_PER_BURST,
    event_rate,
    simulate_spikes,
    tuning_of,
    unit_truths,
)
from study_plan import ARENA_SIDE_M, SAMPLE_RATE_HZ, STUDY, generator, plans


def _rescaled_intervals(truth, journey, events):
    """Integral of the rate between events, (k,); exponential of mean 1 for a Poisson process of that rate.

    The time-rescaling theorem: Brown et al. 2002, Neural Computation 14:325.
    """
    grid = np.arange(0, journey.time_s[-1], 0.002)
    integral = np.concatenate([[0], np.cumsum(event_rate(truth, journey)(grid)[:-1] * 0.002)])
    return np.diff(np.interp(events, grid, integral))


def test_spike_trains_are_poisson_with_the_true_rate(session):
    """Kolmogorov-Smirnov p-values of all plain units, Bonferroni over them (tables of scipy)."""
    p_values = [
        stats.kstest(_rescaled_intervals(truth, session.journey, spikes), "expon").pvalue
        for truth, spikes in zip(session.truths, session.spike_times_s, strict=True)
        if not truth.burst and truth.mean_rate_hz < 3
    ]
    assert len(p_values) >= 8
    assert min(p_values) > 0.01 / len(p_values)


def test_a_wrong_rate_is_noticed(session):
    """The same test refuses a constant rate for the units that are tuned to position."""
    for truth, spikes in zip(session.truths, session.spike_times_s, strict=True):
        if truth.position and spikes.size > 1000:
            flat = np.diff(spikes) * spikes.size / session.journey.time_s[-1]
            assert stats.kstest(flat, "expon").pvalue < 0.001, truth.kind


def test_mean_rates_are_those_of_the_truth(session):
    """Counts of a Poisson process have the variance of their mean; the refractory period costs a little."""
    for truth, spikes in zip(session.truths, session.spike_times_s, strict=True):
        expected = truth.mean_rate_hz * session.plan.duration_s
        spread = np.sqrt(expected * (2 * SPIKES_PER_BURST if truth.burst else 1))
        assert abs(spikes.size - expected) < 4.5 * spread + 0.06 * expected, truth.kind


def test_spikes_are_ascending_on_the_sample_grid_and_refractory(session):
    for spikes in session.spike_times_s:
        samples = spikes * SAMPLE_RATE_HZ
        assert np.abs(samples - np.round(samples)).max() < 1e-6
        assert np.diff(spikes).min() >= REFRACTORY_S - 1e-9
        assert spikes[0] > 0 and spikes[-1] < session.plan.duration_s


def test_only_bursting_units_burst(session):
    for truth, spikes in zip(session.truths, session.spike_times_s, strict=True):
        short = np.mean(np.diff(spikes) < 0.010)
        assert (short > 0.4) == truth.burst, truth.kind


def test_drifting_units_drift(session):
    """Counts of ten equal parts of the session, chi-square against equal rates, untuned units only."""
    for truth, spikes in zip(session.truths, session.spike_times_s, strict=True):
        if truth.position or truth.head_direction or truth.speed or truth.burst:
            continue
        counts, _ = np.histogram(spikes, bins=10, range=(0, session.plan.duration_s))
        assert (stats.chisquare(counts).pvalue < 1e-4) == truth.drift, truth.kind


@pytest.mark.parametrize("number", range(5))
def test_periodic_fields_lie_on_a_hexagonal_lattice(number):
    """The six nearest peaks are equally far and 60 degrees apart (geometry of the lattice)."""
    gain = position_gain("periodic", ARENA_SIDE_M, generator("lattice", number))
    grid = np.linspace(-1, 2, 601)
    x, y = np.meshgrid(grid, grid)
    rate = gain(x, y)
    peak = (
        (rate[1:-1, 1:-1] > rate[:-2, 1:-1])
        & (rate[1:-1, 1:-1] > rate[2:, 1:-1])
        & (rate[1:-1, 1:-1] > rate[1:-1, :-2])
        & (rate[1:-1, 1:-1] > rate[1:-1, 2:])
        & (rate[1:-1, 1:-1] > 0.9)
    )
    peaks = np.column_stack([x[1:-1, 1:-1][peak], y[1:-1, 1:-1][peak]])
    centre = peaks[np.argmin(np.hypot(*(peaks - 0.5).T))]
    around = peaks - centre
    six = around[np.argsort(np.hypot(*around.T))[1:7]]
    distance = np.hypot(*six.T)
    assert distance.max() / distance.min() < 1.06
    assert 0.33 < distance.mean() < 0.49
    angles = np.sort(np.degrees(np.arctan2(six[:, 1], six[:, 0])))
    assert np.abs(np.diff(angles) - 60).max() < 4


@pytest.mark.parametrize("shape", ["single_field", "periodic", "wall", "irregular"])
def test_position_gains_lie_between_zero_and_one(shape):
    grid = np.linspace(0, ARENA_SIDE_M, 60)
    for number in range(10):
        gain = position_gain(shape, ARENA_SIDE_M, generator("gain", shape, number))(*np.meshgrid(grid, grid))
        assert gain.min() > 0 and gain.max() <= 1
        assert gain.max() / gain.mean() > 1.5


def test_speed_gains_have_the_shape_of_their_name():
    speed = np.linspace(0, 60, 121)
    for number in range(10):
        rising, falling, middle = (
            speed_gain(shape, generator("speed", shape, number))(speed)
            for shape in ("rising", "falling", "non_monotonic")
        )
        assert np.all(np.diff(rising) > 0)
        assert np.all(np.diff(falling) < 0)
        assert 10 < speed[np.argmax(middle)] < 20
        for gain in (rising, falling, middle):
            assert gain.max() / gain.min() > 2 and gain.max() <= 1


def test_head_direction_gain_has_one_peak_and_closes():
    angle = np.linspace(0, 2 * np.pi, 721)
    for number in range(10):
        gain = head_direction_gain(generator("direction", number))(angle)
        assert gain[0] == pytest.approx(gain[-1], rel=1e-9)
        around = np.diff(np.roll(gain[:-1], -int(np.argmax(gain[:-1]))))
        assert np.sum(np.diff(np.sign(around)) != 0) == 1


def test_sharpening_leaves_the_rate_at_each_speed_as_it_was(session):
    """Rates averaged within bands of speed: equal with sharpening and without, by construction."""
    journey = session.journey
    truth = next(truth for truth in session.truths if truth.kind == "single_field_sharpens")
    gain = tuning_of(truth).position(journey.x_m, journey.y_m)
    rate = event_rate(truth, journey)(journey.time_s)
    bands = np.quantile(journey.speed_cm_s, np.linspace(0, 1, 7))
    band = np.clip(np.searchsorted(bands, journey.speed_cm_s, side="right") - 1, 0, 5)
    ratio = np.array([rate[band == k].mean() / gain[band == k].mean() for k in range(6)])
    assert np.abs(ratio / ratio.mean() - 1).max() < 0.05
    contrast = [rate[band == k].max() / rate[band == k].mean() for k in (0, 5)]
    assert contrast[1] > 2 * contrast[0]
    assert sharpening(np.array([40.0])) > 3 * sharpening(np.array([0.0]))


def test_every_kind_of_unit_is_in_the_study():
    truths = [truth for plan in STUDY for truth in unit_truths(plan)]
    assert len(truths) == sum(plan.units for plan in STUDY) == 174
    kinds = {truth.kind for truth in truths}
    assert len(kinds) == len(set(DECK))
    for wanted in ("position", "head_direction", "speed", "sharpens", "drift", "burst"):
        assert sum(getattr(truth, wanted) for truth in truths) >= 10, wanted
    for plan in STUDY:
        identifiers = [truth.unit for truth in unit_truths(plan)]
        assert 20 <= len(identifiers) == len(set(identifiers)) <= 40
        assert 15 <= plan.minutes <= 20


def test_simulation_repeats_itself(session):
    truth, spikes = session.truths[5], session.spike_times_s[5]
    assert np.array_equal(simulate_spikes(truth, session.journey), spikes)


def test_wrong_requests_are_refused_with_the_names_to_use():
    with pytest.raises(ValueError, match=r"no session bramble_1.*bracken_1"):
        plans(["bramble_1"])
    with pytest.raises(ValueError, match=r"0\.5 to 240"):
        plans(minutes=0.1)
    with pytest.raises(ValueError, match="1 to 2000"):
        plans(units=0)
