"""Behaviour on the bins against the true course of a simulated animal."""

from __future__ import annotations

import json

import numpy as np
import pytest

from odograph.behaviour.audit import audit_document
from odograph.behaviour.derive import derive_behaviour
from odograph.errors import InputError
from odograph.recording.model import Covariate, Direction, Intervals, Track
from odograph.settings.behaviour import BehaviourSettings

SETTINGS = BehaviourSettings()
CLOCK = (1 + 60e-6, 7.3)


def derive(animal, settings=SETTINGS, **given):
    """Derive with the usual clock; keyword arguments replace the rest."""
    parts = {
        "tracks": animal.tracks(),
        "direction": None,
        "covariates": (),
        "clock": CLOCK,
        "span_s": None,
        "invalid": None,
        "arena": None,
    } | given
    return derive_behaviour(**parts, settings=settings)


def truth_at(animal, time_s):
    """True x, y (m), direction (rad) and speed (cm/s) at recording times."""
    camera_s = (time_s - CLOCK[1]) / CLOCK[0]
    columns = (*animal.centre_m.T, animal.angle_rad, 100 * animal.speed_m_s)
    return [np.interp(camera_s, animal.time_s, column) for column in columns]


def turned(angle, truth):
    return np.angle(np.exp(1j * (angle - truth)))


def found(behaviour, level):
    return " ".join(item["found"] for item in behaviour.findings if item["level"] == level)


def test_position_direction_and_speed_are_recovered(animal):
    behaviour = derive(animal)
    x, y, angle, speed = truth_at(animal, behaviour.time_s)
    assert behaviour.valid.all()
    assert behaviour.verdict == "pass"
    assert len(behaviour.time_s) == pytest.approx(120 / 0.02, abs=2)
    error = np.concatenate([behaviour.x_m - x, behaviour.y_m - y])
    # Two points of 1 mm noise each: their mean has 0.71 mm, and smoothing makes it less.
    assert np.sqrt(np.mean(error**2)) < 0.45e-3
    assert np.sqrt(np.mean(turned(behaviour.head_direction_rad, angle) ** 2)) < np.deg2rad(1.5)
    assert np.sqrt(np.mean((behaviour.speed_cm_s - speed) ** 2)) < 1.0
    assert (behaviour.head_direction_rad >= 0).all() and (behaviour.head_direction_rad < 2 * np.pi).all()


def test_the_stated_uncertainty_is_the_real_one(animal):
    behaviour = derive(animal)
    x, y, angle, _ = truth_at(animal, behaviour.time_s)
    error = np.concatenate([behaviour.x_m - x, behaviour.y_m - y])
    scores = error / np.tile(behaviour.position_sd_m, 2)
    assert np.sqrt(np.mean(scores**2)) == pytest.approx(1.0, abs=0.15)
    scores = turned(behaviour.head_direction_rad, angle) / behaviour.direction_sd_rad
    assert np.sqrt(np.mean(scores**2)) == pytest.approx(1.0, abs=0.15)


@pytest.mark.parametrize("noise_m", [0.0005, 0.003])
def test_the_noise_is_estimated_from_the_data(build_animal, noise_m):
    behaviour = derive(build_animal(noise=noise_m))
    assert behaviour.motion.position_noise_m == pytest.approx(noise_m, rel=0.1)


def test_given_noise_and_acceleration_are_used(animal):
    settings = BehaviourSettings(position_noise_m=0.004, acceleration_m_s2=3.0)
    motion = derive(animal, settings).motion
    assert (motion.position_noise_m, motion.acceleration_m_s2) == (0.004, 3.0)


@pytest.mark.parametrize("interval", [1 / 120, 1 / 30])
def test_other_frame_rates_give_the_same_course(build_animal, interval):
    animal = build_animal(interval=interval, seconds=90)
    behaviour = derive(animal)
    x, y, angle, speed = truth_at(animal, behaviour.time_s)
    assert behaviour.valid.mean() > 0.999
    assert np.percentile(np.hypot(behaviour.x_m - x, behaviour.y_m - y), 99) < 2.5e-3
    assert np.sqrt(np.mean((behaviour.speed_cm_s - speed) ** 2)) < 2.0
    assert np.sqrt(np.mean(turned(behaviour.head_direction_rad, angle) ** 2)) < np.deg2rad(3)


def test_a_still_animal_is_nearly_still(build_animal):
    # Central differences of noise s at step h give a still point the mean speed sqrt(pi/2) s / (sqrt(2) h)
    # (closed form, Rayleigh): 3.1 cm/s for the mean of two points of 1 mm at 50 Hz. Smoothing does better.
    animal = build_animal(rest_s=(40.0, 60.0))
    behaviour = derive(animal)
    inside = (behaviour.time_s > 42 + CLOCK[1]) & (behaviour.time_s < 58 + CLOCK[1])
    central = 100 * np.sqrt(np.pi / 2) * (0.001 / np.sqrt(2)) / (np.sqrt(2) * 0.02)
    assert central == pytest.approx(3.13, abs=0.01)
    assert 0 < behaviour.speed_cm_s[inside].mean() < 0.3 * central


def test_faults_are_survived_and_audited(animal, arena):
    rng = np.random.default_rng(6)
    n = len(animal.time_s)
    truth = np.zeros(n, bool)
    truth[1000:1150] = True
    animal.exchange(truth)
    animal.front_m[2000:2010] = np.nan
    animal.back_m[2500:2560] = np.nan
    animal.front_m[rng.choice(np.arange(3000, 5000), 20, replace=False)] = [0.5, -0.3]
    animal.back_m[5200:5206] += [0.15, 0.1]
    behaviour = derive(animal, arena=arena)
    x, y, angle, _ = truth_at(animal, behaviour.time_s)
    ok = behaviour.valid
    assert np.hypot(behaviour.x_m - x, behaviour.y_m - y)[ok].max() < 0.01
    assert np.abs(turned(behaviour.head_direction_rad, angle))[ok].max() < np.deg2rad(25)
    assert behaviour.exchanged_frames == 150
    assert set(behaviour.reason) == {"", "lost"}
    assert (~ok).sum() == pytest.approx(60, abs=2)
    assert np.isnan(behaviour.x_m[~ok]).all()
    sums = {
        (row["reason"], row["action"]): row["samples"] for row in audit_document("s", behaviour)["reasons"]
    }
    assert sums[("lost", "interpolated")] == 10
    assert sums[("lost", "left_out")] == 60
    assert sums[("outside_arena", "interpolated")] == 20
    assert sums[("jump", "interpolated")] == 6
    assert sums[("swap", "exchanged_back")] == 150


def test_gaps_up_to_the_limit_are_interpolated_and_longer_ones_are_not(animal):
    for n, masked in ((14, False), (17, True)):
        animal.front_m[1000 : 1000 + n] = np.nan
        behaviour = derive(animal)
        assert (~behaviour.valid).any() == masked
    wide = derive(animal, BehaviourSettings(max_gap_s=0.5))
    assert wide.valid.all()
    x, y, _, _ = truth_at(animal, wide.time_s)
    assert np.hypot(wide.x_m - x, wide.y_m - y).max() < 0.01


def test_dropped_frames_are_a_gap(animal):
    kept = np.ones(len(animal.time_s), bool)
    kept[1000:1100] = False
    kept[2000] = False
    tracks = tuple(
        Track(track.name, track.place, track.time_s[kept], track.xy_m[kept]) for track in animal.tracks()
    )
    behaviour = derive(animal, tracks=tracks)
    assert set(behaviour.reason) == {"", "gap"}
    rows = [row for row in behaviour.audit_rows if row["reason"] == "gap"]
    assert [(row["samples"], row["action"]) for row in rows] == [(100, "left_out"), (1, "interpolated")]


def test_points_lost_at_the_start_are_masked(animal):
    animal.front_m[:200] = np.nan
    behaviour = derive(animal)
    assert (behaviour.reason[:199] == "lost").all()
    assert behaviour.valid[201:].all()


def test_the_span_limits_the_bins(animal):
    behaviour = derive(animal, span_s=(20.0, 50.0))
    assert behaviour.time_s[0] == pytest.approx(20.01)
    assert behaviour.time_s[-1] == pytest.approx(49.99)
    whole = derive(animal)
    assert whole.time_s[0] >= CLOCK[1]
    assert set(np.round(behaviour.time_s, 6)) <= set(np.round(whole.time_s, 6))
    with pytest.raises(InputError, match="no whole bin"):
        derive(animal, span_s=(500.0, 600.0))


def test_invalid_times_are_masked_and_kept_in_sight(animal):
    invalid = Intervals("intervals/invalid_times", np.array([30.0, 60.005]), np.array([32.0, 60.015]))
    behaviour = derive(animal, invalid=invalid)
    masked = behaviour.reason == "invalid_time"
    np.testing.assert_array_equal(masked, ~behaviour.valid)
    assert masked.sum() == 101
    assert np.isfinite(behaviour.x_m).all()
    rows = [row for row in behaviour.audit_rows if row["action"] == "masked"]
    assert [row["reason"] for row in rows] == ["invalid_time", "invalid_time"]
    assert rows[0]["start_s"] == pytest.approx(30.0) and rows[0]["stop_s"] == pytest.approx(32.0)


def test_immobility_is_masked_when_asked_for(animal):
    behaviour = derive(animal, BehaviourSettings(min_speed_cm_s=10.0))
    slow = behaviour.speed_cm_s < 10.0
    np.testing.assert_array_equal(behaviour.reason == "immobile", slow)
    assert slow.any() and not slow.all()


def test_one_point_has_position_and_speed_but_no_direction(animal):
    behaviour = derive(animal, tracks=animal.tracks()[:1])
    assert behaviour.valid.all()
    assert np.isnan(behaviour.head_direction_rad).all()
    assert "no head direction" in found(behaviour, "note")
    assert behaviour.verdict == "pass"


def test_one_point_takes_the_direction_series(animal):
    series = Direction("processing/behavior/heading", animal.time_s, np.mod(animal.angle_rad, 2 * np.pi))
    series.angle_rad[1000:1100] = np.nan
    behaviour = derive(animal, tracks=animal.tracks()[:1], direction=series)
    _, _, angle, _ = truth_at(animal, behaviour.time_s)
    ok = behaviour.valid
    assert np.abs(turned(behaviour.head_direction_rad, angle))[ok].max() < 0.01
    assert (~ok).sum() == pytest.approx(100, abs=2)
    assert set(behaviour.reason) == {"", "lost"}


def test_the_source_of_direction_can_be_chosen_and_a_turn_is_noticed(animal):
    series = Direction(
        "processing/behavior/heading", animal.time_s, np.mod(animal.angle_rad + 1.0, 2 * np.pi)
    )
    points = derive(animal, direction=series)
    assert "turned by +57 degrees" in found(points, "warn")
    chosen = derive(animal, BehaviourSettings(head_direction_from="series"), direction=series)
    _, _, angle, _ = truth_at(animal, chosen.time_s)
    assert np.abs(turned(chosen.head_direction_rad, angle + 1.0)).max() < 0.01


@pytest.mark.parametrize(
    ("ahead", "degrees"),
    # atan2 of front minus back, y upwards: exact.
    [((1, 0), 0), ((0, 1), 90), ((-1, 0), 180), ((0, -1), 270), ((1, 1), 45)],
)
def test_direction_counts_counter_clockwise_from_x(ahead, degrees):
    time = np.arange(4000) * 0.02
    rng = np.random.default_rng(7)
    back = np.column_stack([0.5 + 0.3 * np.sin(0.5 * time), 0.5 + 0.3 * np.cos(0.3 * time)])
    front = back + 0.05 * np.array(ahead) / np.hypot(*ahead)
    noise = 1e-4 * rng.standard_normal((2, len(time), 2))
    tracks = (Track("front", "front", time, front + noise[0]), Track("back", "back", time, back + noise[1]))
    behaviour = derive_behaviour(tracks, None, (), (1.0, 0.0), None, None, None, SETTINGS)
    off = turned(behaviour.head_direction_rad, np.deg2rad(degrees))
    assert np.abs(off).max() < np.deg2rad(1)
    askew = BehaviourSettings(head_direction_offset_deg=90.0)
    behaviour = derive_behaviour(tracks, None, (), (1.0, 0.0), None, None, None, askew)
    assert np.abs(turned(behaviour.head_direction_rad, np.deg2rad(degrees + 90))).max() < np.deg2rad(1)


@pytest.mark.parametrize(("point", "side"), [("midpoint", 0.0), ("front", 0.02), ("back", -0.02)])
def test_the_point_that_is_the_position_can_be_chosen(animal, point, side):
    behaviour = derive(animal, BehaviourSettings(position_point=point))
    x, y, angle, _ = truth_at(animal, behaviour.time_s)
    off = np.hypot(behaviour.x_m - x - side * np.cos(angle), behaviour.y_m - y - side * np.sin(angle))
    assert np.sqrt(np.mean(off**2)) < 1e-3


def test_points_named_the_wrong_way_round_are_warned_of(animal):
    behaviour = derive(animal, tracks=animal.tracks()[::-1])
    assert "faces away" in found(behaviour, "warn")


def test_a_wrong_unit_of_length_is_warned_of(animal):
    tracks = tuple(Track(t.name, t.place, t.time_s, 1000 * t.xy_m) for t in animal.tracks())
    behaviour = derive(animal, tracks=tracks)
    assert "covers 7" in found(behaviour, "warn")


def test_samples_outside_the_arena_are_warned_of(animal, arena):
    animal.front_m[:600] += 3.0
    behaviour = derive(animal, arena=arena)
    assert "outside the arena" in found(behaviour, "warn")


def test_too_little_valid_time_fails_and_says_why(animal):
    animal.front_m[1000:5000] = np.nan
    behaviour = derive(animal)
    assert behaviour.verdict == "fail"
    assert "lost" in found(behaviour, "fail")
    short = derive(animal, span_s=(10.0, 20.0))
    assert short.verdict == "fail"
    animal.front_m[:] = np.nan
    nothing = derive(animal)
    assert nothing.verdict == "fail"
    assert not nothing.valid.any()
    json.dumps(audit_document("meadow_1", nothing), allow_nan=False)


def test_covariates_are_put_on_the_bins_on_their_own_clock(animal):
    ramp = np.linspace(0.0, 1.0, len(animal.time_s))
    camera = Covariate("pupil", "processing/behavior/pupil", animal.time_s, ramp, "camera")
    recording = Covariate("odour", "acquisition/odour", animal.time_s, ramp, "recording")
    behaviour = derive(animal, covariates=(camera, recording))
    assert list(behaviour.covariates) == ["odour", "pupil"]
    camera_s = (behaviour.time_s - CLOCK[1]) / CLOCK[0]
    np.testing.assert_allclose(
        behaviour.covariates["pupil"], np.interp(camera_s, animal.time_s, ramp), atol=1e-9
    )
    inside = behaviour.time_s < animal.time_s[-1]
    expected = np.interp(behaviour.time_s, animal.time_s, ramp)
    np.testing.assert_allclose(behaviour.covariates["odour"][inside], expected[inside], atol=1e-9)


def test_the_audit_is_plain_json_and_adds_up(animal, arena):
    animal.front_m[2000:2100] = np.nan
    behaviour = derive(animal, arena=arena)
    document = audit_document("meadow_1", behaviour)
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    assert document["bins"] == len(behaviour.time_s)
    assert document["valid_bins"] + sum(document["masked_bins"].values()) == document["bins"]
    assert document["valid_share"] == pytest.approx(behaviour.valid.mean())
    assert document["span_s"] == pytest.approx(document["bins"] * document["bin_s"])
    starts = [row["start_s"] for row in behaviour.audit_rows]
    assert starts == sorted(starts)


def test_the_same_input_gives_the_same_bytes(animal):
    animal.front_m[2000:2100] = np.nan
    first, second = derive(animal), derive(animal)
    for name in ("x_m", "y_m", "head_direction_rad", "speed_cm_s", "position_sd_m", "direction_sd_rad"):
        assert getattr(first, name).tobytes() == getattr(second, name).tobytes()
