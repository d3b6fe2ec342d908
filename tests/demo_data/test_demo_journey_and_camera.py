"""The simulated journey and what the camera makes of it, against geometry and closed forms."""

from __future__ import annotations

import math
from types import SimpleNamespace

import numpy as np
import pytest
from simulate_camera import POINTS_APART_M, STAMP_NOISE_S
from simulate_journey import STEP_S
from study_plan import ARENA_SIDE_M, FRAME_INTERVAL_S, SAMPLE_RATE_HZ, STUDY, generator, plans


def test_journey_stays_in_the_arena_and_covers_it(session):
    journey = session.journey
    for column in (journey.x_m, journey.y_m):
        assert column.min() > 0 and column.max() < ARENA_SIDE_M
    seconds, _, _ = np.histogram2d(
        journey.x_m, journey.y_m, bins=11, range=[[0, ARENA_SIDE_M], [0, ARENA_SIDE_M]]
    )
    assert np.mean(seconds * STEP_S > 0.5) > 0.95


def test_speed_is_the_path_derivative_and_has_runs_and_pauses(session):
    journey = session.journey
    # Central differences over two steps: the definition of speed, computed another way.
    step_cm = 100 * np.hypot(journey.x_m[2:] - journey.x_m[:-2], journey.y_m[2:] - journey.y_m[:-2])
    assert np.abs(step_cm / (2 * STEP_S) - journey.speed_cm_s[1:-1]).max() < 0.02
    assert journey.speed_cm_s.max() <= 60.0
    assert np.mean(journey.speed_cm_s < 5) > 0.08
    assert np.mean(journey.speed_cm_s > 20) > 0.2


def test_head_leads_the_body_but_is_not_tied_to_it(session):
    journey = session.journey
    running = journey.speed_cm_s > 10
    heading = np.arctan2(np.gradient(journey.y_m), np.gradient(journey.x_m))
    between = np.angle(np.exp(1j * (journey.head_direction_rad - heading)))[running]
    assert np.abs(between.mean()) < 0.05
    assert 0.2 < between.std() < 0.7


def _exposures_by_stamp(session):
    """Frame stamps put on the recording clock by the plan's clock, and the pulse nearest to each."""
    plan, camera = session.plan, session.camera
    predicted = (1 + plan.drift_ppm * 1e-6) * (camera.frame_time_s - plan.camera_ahead_s)
    after = np.clip(np.searchsorted(camera.pulse_time_s, predicted), 1, camera.pulse_time_s.size - 1)
    before = after - 1
    nearer = np.where(
        np.abs(camera.pulse_time_s[before] - predicted) < np.abs(camera.pulse_time_s[after] - predicted),
        before,
        after,
    )
    return predicted, camera.pulse_time_s[nearer]


def test_camera_clock_is_the_straight_line_of_the_plan(session):
    """Slope by least squares; its standard error sigma / (D sqrt(N(N^2-1)/12)) is exact for even spacing."""
    predicted, pulses = _exposures_by_stamp(session)
    matched = np.abs(pulses - predicted) < 0.001
    assert matched.mean() > 0.999
    stamps = session.camera.frame_time_s[matched]
    slope, _ = np.polyfit(stamps - stamps.mean(), pulses[matched], 1)
    n, noise_s = matched.sum(), np.hypot(STAMP_NOISE_S, STAMP_NOISE_S)
    error = noise_s / (FRAME_INTERVAL_S * np.sqrt(n * (n**2 - 1) / 12))
    assert abs((slope - 1) - session.plan.drift_ppm * 1e-6) < 5 * error
    residual = pulses[matched] - predicted[matched]
    assert residual.std() == pytest.approx(noise_s, rel=0.15)


def test_both_clocks_see_the_same_jitter(session):
    predicted, pulses = _exposures_by_stamp(session)
    neighbours = (np.diff(session.camera.frame_time_s) < 1.5 * FRAME_INTERVAL_S) & (
        np.abs(np.diff(pulses - predicted)) < 0.001
    )
    jitter = np.diff(predicted)[neighbours], np.diff(pulses)[neighbours]
    assert np.corrcoef(*jitter)[0, 1] > 0.99
    assert 1e-4 < jitter[0].std() < 1e-3


def test_faults_are_there_in_the_planned_measure(session):
    camera, plan = session.camera, session.plan
    assert camera.swapped.mean() == pytest.approx(plan.swapped, rel=0.6)
    assert camera.lost.mean() == pytest.approx(1.6 * plan.lost, rel=0.6)
    assert camera.reflected.mean() == pytest.approx(plan.reflected, rel=0.6)
    assert np.array_equal(camera.lost, np.isnan(camera.front_m[:, 0]) | np.isnan(camera.back_m[:, 0]))
    assert camera.missed_pulses > 0 and camera.stray_pulses > 0
    missing = np.round(np.diff(camera.frame_time_s) / FRAME_INTERVAL_S).astype(int) - 1
    assert missing.sum() == camera.dropped_frames > 0


def test_sound_points_give_the_head_back(session):
    """Midpoint and direction of the two lights: common practice, no source."""
    camera, plan = session.camera, session.plan
    time_s = (1 + plan.drift_ppm * 1e-6) * (camera.frame_time_s - plan.camera_ahead_s)
    x, y, angle, _ = session.journey.at(time_s)
    sound = ~(camera.swapped | camera.lost | camera.reflected)
    middle = (camera.front_m + camera.back_m) / 2
    off = np.hypot(middle[:, 0] - x, middle[:, 1] - y)[sound]
    assert np.quantile(off, 0.99) < 0.004
    across = camera.front_m - camera.back_m
    turned = np.angle(np.exp(1j * (np.arctan2(across[:, 1], across[:, 0]) - angle)))
    assert np.abs(turned[sound]).mean() < np.radians(3)
    whole = camera.swapped & ~camera.lost & ~camera.reflected
    assert np.abs(turned[whole]).min() > np.radians(150)
    assert np.hypot(*across[sound].T).mean() == pytest.approx(POINTS_APART_M, rel=0.01)


def test_one_session_has_a_clock_that_leaps():
    from make_recordings import simulate_session

    leaping = [plan.session for plan in STUDY if plan.clock_jump_s]
    assert len(leaping) == 1
    (plan,) = plans(leaping, minutes=2, units=1)
    session = simulate_session(plan)
    predicted, _ = _exposures_by_stamp(session)
    ahead = predicted - np.arange(predicted.size) * FRAME_INTERVAL_S
    when = predicted[np.argmax(np.diff(ahead))]
    assert when == pytest.approx(session.camera.jump_time_s, abs=0.05)
    assert np.all(np.diff(session.camera.frame_time_s) > 0)


def test_times_are_on_the_grids_of_their_clocks(session):
    samples = session.camera.pulse_time_s * SAMPLE_RATE_HZ
    assert np.abs(samples - np.round(samples)).max() < 1e-6
    microseconds = session.camera.frame_time_s * 1e6
    assert np.abs(microseconds - np.round(microseconds)).max() < 1e-3


def test_last_bits_of_a_processor_do_not_grow_into_another_journey(monkeypatch):
    """Sines, cosines and bearings one unit in the last place off, as another C library may give them."""
    import simulate_journey

    def journey():
        return simulate_journey.simulate_journey(300.0, ARENA_SIDE_M, generator("last bits"))

    expected = journey()
    nudged = SimpleNamespace(**vars(math))
    for name in ("sin", "cos", "atan2"):
        function = getattr(math, name)
        setattr(nudged, name, lambda *a, function=function: math.nextafter(function(*a), math.inf))
    monkeypatch.setattr(simulate_journey, "math", nudged)
    again = journey()
    for column in ("x_m", "y_m", "head_direction_rad", "speed_cm_s"):
        assert np.array_equal(getattr(expected, column), getattr(again, column))
