"""Lost, impossible and exchanged samples, found where they were put."""

from __future__ import annotations

import numpy as np
import pytest

from odograph.behaviour.chain import believable_chain
from odograph.behaviour.cleaning import clean_points, inside_outline
from odograph.behaviour.swaps import exchanged_samples, facing_cosine
from odograph.errors import InputError
from odograph.recording.model import Track
from odograph.settings.behaviour import BehaviourSettings

SETTINGS = BehaviourSettings()
SAME_CLOCK = (1.0, 0.0)


def test_a_sound_track_is_believed_whole(animal):
    cleaned = clean_points(animal.tracks(), SAME_CLOCK, None, SETTINGS)
    assert not cleaned.exchanged.any()
    for reason, point, seen in zip(
        cleaned.reasons, cleaned.points_m, (animal.front_m, animal.back_m), strict=True
    ):
        assert (reason == "").all()
        np.testing.assert_array_equal(point, seen)


@pytest.mark.parametrize("n_samples", [1, 5, 75])
def test_a_jump_is_out_however_long_it_stays(animal, n_samples):
    # A reflection that stands still for up to 1.5 s, half an arena away.
    hit = slice(2000, 2000 + n_samples)
    animal.front_m[hit] = animal.front_m[2000] + [0.35, -0.3]
    believed = believable_chain(animal.time_s, animal.front_m, 2.0, 0.015)
    assert np.flatnonzero(~believed).tolist() == list(range(2000, 2000 + n_samples))


def test_a_jump_at_the_very_start_and_end_is_out(animal):
    animal.front_m[:10] += 0.5
    animal.front_m[-7:] += 0.5
    believed = believable_chain(animal.time_s, animal.front_m, 2.0, 0.015)
    assert believed.sum() == len(believed) - 17
    assert believed[10:-7].all()


def test_a_chain_without_samples_is_empty():
    assert not believable_chain(np.arange(4.0), np.full((4, 2), np.nan), 2.0, 0.01).any()


def test_exchanges_are_found_frame_by_frame(animal):
    truth = np.zeros(len(animal.time_s), bool)
    for first, n in ((300, 1), (900, 20), (2500, 400)):
        truth[first : first + n] = True
    animal.exchange(truth)
    found = exchanged_samples(animal.time_s, animal.front_m, animal.back_m)
    np.testing.assert_array_equal(found, truth)
    cleaned = clean_points(animal.tracks(), SAME_CLOCK, None, SETTINGS)
    assert all((reason == "").all() for reason in cleaned.reasons)
    ahead = cleaned.points_m[0] - cleaned.points_m[1]
    turn = np.angle(np.exp(1j * (np.arctan2(ahead[:, 1], ahead[:, 0]) - animal.angle_rad)))
    assert np.abs(turn).max() < np.deg2rad(15)


def test_an_exchange_that_begins_and_ends_while_a_point_is_lost(animal):
    truth = np.zeros(len(animal.time_s), bool)
    truth[1000:1100] = True
    animal.exchange(truth)
    animal.front_m[995:1005] = np.nan
    animal.back_m[1095:1106] = np.nan
    found = exchanged_samples(animal.time_s, animal.front_m, animal.back_m)
    both = np.isfinite(animal.front_m[:, 0]) & np.isfinite(animal.back_m[:, 0])
    np.testing.assert_array_equal(found[both], truth[both])


def test_points_named_the_wrong_way_round_are_left_but_seen(animal):
    found = exchanged_samples(animal.time_s, animal.back_m, animal.front_m)
    assert not found.any()
    assert facing_cosine(animal.time_s, animal.front_m, animal.back_m) > 0.5
    assert facing_cosine(animal.time_s, animal.back_m, animal.front_m) < -0.5


def test_repair_can_be_switched_off(animal):
    animal.exchange(slice(900, 920))
    cleaned = clean_points(animal.tracks(), SAME_CLOCK, None, BehaviourSettings(repair_swaps=False))
    assert not cleaned.exchanged.any()


def test_reasons_are_given_in_their_order(animal, arena):
    animal.front_m[10:12] = np.nan
    animal.front_m[20:23] = [-0.2, 0.5]
    confidence = np.ones(len(animal.time_s))
    confidence[[10, 30]] = 0.1
    cleaned = clean_points(animal.tracks(front=confidence), SAME_CLOCK, arena, SETTINGS)
    front = cleaned.reasons[0]
    assert front[10:12].tolist() == ["lost", "lost"]
    assert front[20:23].tolist() == ["outside_arena"] * 3
    assert front[30] == "low_confidence"
    assert (front != "").sum() == 6
    assert (cleaned.reasons[1] == "").all()
    assert np.isnan(cleaned.points_m[0][front != ""]).all()


def test_of_two_points_too_far_apart_the_stray_one_goes(animal):
    ahead = animal.front_m[700] - animal.back_m[700]
    animal.back_m[700:705] -= 0.05 * ahead / np.hypot(*ahead)
    cleaned = clean_points(animal.tracks(), SAME_CLOCK, None, SETTINGS)
    assert (cleaned.reasons[0] == "").all()
    assert np.flatnonzero(cleaned.reasons[1] == "jump").tolist() == list(range(700, 705))


def test_points_with_times_of_their_own_are_brought_together(animal):
    front, back = animal.tracks()
    kept = np.ones(len(animal.time_s), bool)
    kept[[50, 51, 400]] = False
    back = Track(back.name, back.place, animal.time_s[kept] + 0.001, animal.back_m[kept], None)
    cleaned = clean_points((front, back), SAME_CLOCK, None, SETTINGS)
    assert np.flatnonzero(cleaned.reasons[1] == "lost").tolist() == [50, 51, 400]
    np.testing.assert_array_equal(cleaned.points_m[1][kept], animal.back_m[kept])


def test_times_are_put_on_the_recording_clock(animal):
    cleaned = clean_points(animal.tracks(), (1 + 40e-6, 12.5), None, SETTINGS)
    np.testing.assert_allclose(cleaned.time_s, animal.time_s * (1 + 40e-6) + 12.5)


def test_inside_an_outline_that_is_not_convex():
    corners = np.array([[0, 0], [2, 0], [2, 1], [1, 1], [1, 2], [0, 2]], float)
    points = np.array(
        [[0.5, 1.5], [1.5, 1.5], [1.04, 1.5], [1.5, 0.5], [-0.04, 1.0], [-0.06, 1.0], [np.nan, 0]]
    )
    inside = inside_outline(points, corners, 0.05)
    assert inside.tolist() == [True, False, True, True, True, False, False]
    assert inside_outline(points, corners[::-1], 0.05).tolist() == inside.tolist()


def test_tracks_that_cannot_be_used_are_refused(animal):
    front, back = animal.tracks()
    with pytest.raises(InputError, match="0 tracked points"):
        clean_points((), SAME_CLOCK, None, SETTINGS)
    with pytest.raises(InputError, match="3 tracked points"):
        clean_points((front, back, back), SAME_CLOCK, None, SETTINGS)
    falling = Track("front", "processing/behavior/front", animal.time_s[::-1], animal.front_m, None)
    with pytest.raises(InputError, match="ascend"):
        clean_points((falling,), SAME_CLOCK, None, SETTINGS)
