"""Tracked samples that cannot be true, marked one by one with the reason; exchanged points put right."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from odograph.behaviour.chain import believable_chain
from odograph.behaviour.swaps import exchanged_samples
from odograph.errors import InputError
from odograph.recording.model import Arena, Track
from odograph.settings.behaviour import BehaviourSettings

_JUMP_SLACK_M = 0.015
# Two points farther apart than this many times their usual largest distance: one of them is elsewhere.
_TOO_FAR_APART = 1.25

# Reasons of a sample, in the order in which the first that applies is given.
SAMPLE_REASONS = ("lost", "low_confidence", "outside_arena", "jump")
REASON_TYPE = "U14"


@dataclass(frozen=True, eq=False)
class CleanedPoints:
    """Tracked points on the recording clock, with what is not believed taken out.

    Attributes
    ----------
    time_s : ndarray (n_frames,)
        Recording clock, s.
    points_m : tuple of ndarray (n_frames, 2)
        Front point first; NaN where lost or not believed.
    reasons : tuple of ndarray (n_frames,) of str
        Why a sample of each point is out; "" where it is believed.
    exchanged : ndarray (n_frames,) of bool
        Samples in which the two points were exchanged and have been put right.
    """

    time_s: np.ndarray
    points_m: tuple[np.ndarray, ...]
    reasons: tuple[np.ndarray, ...]
    exchanged: np.ndarray


def clean_points(
    tracks: tuple[Track, ...],
    clock: tuple[float, float],
    arena: Arena | None,
    settings: BehaviourSettings,
) -> CleanedPoints:
    """Mark lost and impossible samples and undo exchanges.

    Parameters
    ----------
    tracks : tuple of Track
        One point, or the front and the back point.
    clock : (float, float)
        Slope and intercept (s) of recording time on camera time.
    arena : Arena or None
        Points outside its outline are not believed.
    settings : BehaviourSettings
        Limits.

    Raises
    ------
    InputError
        No track, more than two, or time stamps that do not ascend.
    """
    if not 1 <= len(tracks) <= 2:
        raise InputError(f"{len(tracks)} tracked points", expected="one point, or a front and a back point")
    camera_s = _checked_times(tracks[0])
    points = [np.array(tracks[0].xy_m, float)]
    confidences = [tracks[0].confidence]
    if len(tracks) == 2:
        rows = _rows_at(camera_s, _checked_times(tracks[1]))
        points.append(_taken(np.asarray(tracks[1].xy_m, float), rows))
        confidence = tracks[1].confidence
        confidences.append(None if confidence is None else _taken(np.asarray(confidence, float), rows))
    time_s = clock[0] * camera_s + clock[1]
    reasons = [np.full(len(time_s), "", REASON_TYPE) for _ in points]
    for point, confidence, reason in zip(points, confidences, reasons, strict=True):
        _take_out(point, reason, ~np.isfinite(point).all(axis=1), "lost")
        if confidence is not None:
            _take_out(point, reason, ~(confidence >= settings.min_confidence), "low_confidence")
        if arena is not None:
            outside = ~inside_outline(point, np.asarray(arena.corners_m, float), settings.arena_margin_m)
            _take_out(point, reason, outside, "outside_arena")
    exchanged = np.zeros(len(time_s), bool)
    if len(points) == 2:
        if settings.repair_swaps:
            exchanged = exchanged_samples(time_s, *points)
            points = _exchange(points, exchanged)
            reasons = _exchange(reasons, exchanged)
        _drop_far_apart(time_s, points, reasons)
    for point, reason in zip(points, reasons, strict=True):
        believed = believable_chain(time_s, point, settings.max_speed_m_s, _JUMP_SLACK_M)
        _take_out(point, reason, ~believed, "jump")
    return CleanedPoints(time_s, tuple(points), tuple(reasons), exchanged)


def inside_outline(xy_m: np.ndarray, corners_m: np.ndarray, margin_m: float) -> np.ndarray:
    """Points (n, 2) within a polygon (k, 2) or no farther than a margin from its edges, (n,) of bool.

    Even-odd rule for the inside, distance to the nearest edge for the margin. NaN gives False.
    """
    x, y = xy_m[:, 0], xy_m[:, 1]
    inside = np.zeros(len(xy_m), bool)
    nearest = np.full(len(xy_m), np.inf)
    for (ax, ay), (bx, by) in zip(corners_m, np.roll(corners_m, -1, axis=0), strict=True):
        if ay != by:
            inside ^= ((ay > y) != (by > y)) & (x < (bx - ax) * (y - ay) / (by - ay) + ax)
        length = (bx - ax) ** 2 + (by - ay) ** 2
        along = np.clip(((x - ax) * (bx - ax) + (y - ay) * (by - ay)) / max(length, 1e-300), 0, 1)
        nearest = np.fmin(nearest, np.hypot(x - ax - along * (bx - ax), y - ay - along * (by - ay)))
    return (inside | (nearest <= margin_m)) & np.isfinite(x) & np.isfinite(y)


def _checked_times(track):
    times = np.asarray(track.time_s, float)
    if len(times) < 2:
        raise InputError(f"{len(times)} samples", place=track.place, expected="at least two tracked samples")
    if not np.isfinite(times).all() or (np.diff(times) <= 0).any():
        raise InputError(
            "time stamps are not finite or do not ascend",
            place=track.place,
            expected="strictly ascending time stamps",
            remedy="repair the time stamps in the file",
        )
    return times


def _rows_at(wanted_s, given_s):
    """Row of the other point's sample at each time, -1 where there is none within half a frame."""
    if len(wanted_s) == len(given_s) and np.array_equal(wanted_s, given_s):
        return np.arange(len(wanted_s))
    right = np.clip(np.searchsorted(given_s, wanted_s), 1, len(given_s) - 1)
    rows = np.where(wanted_s - given_s[right - 1] <= given_s[right] - wanted_s, right - 1, right)
    near = np.abs(given_s[rows] - wanted_s) <= 0.5 * np.median(np.diff(wanted_s))
    return np.where(near, rows, -1)


def _taken(values, rows):
    """Rows of values; NaN where the row is -1."""
    taken = values[rows].copy()
    taken[rows < 0] = np.nan
    return taken


def _take_out(point, reason, rows, name):
    """Take samples out of a point and say why, if they are not out already."""
    reason[rows & (reason == "")] = name
    point[rows] = np.nan


def _exchange(pair, rows):
    """Two arrays with the marked rows exchanged."""
    front, back = pair
    wide = rows.reshape(-1, *([1] * (front.ndim - 1)))
    return [np.where(wide, back, front), np.where(wide, front, back)]


def _drop_far_apart(time_s, points, reasons):
    """Where the points are too far apart, take out the one that is farther from its own course."""
    apart = np.hypot(*(points[0] - points[1]).T)
    both = np.isfinite(apart)
    if both.sum() < 10:
        return
    limit = _TOO_FAR_APART * float(np.percentile(apart[both], 90))
    far = np.flatnonzero(both & (apart > limit))
    near = np.flatnonzero(both & (apart <= limit))
    if not len(far) or not len(near):
        return
    off = [
        np.hypot(
            *[point[far, axis] - np.interp(time_s[far], time_s[near], point[near, axis]) for axis in (0, 1)]
        )
        for point in points
    ]
    for this, other in ((0, 1), (1, 0)):
        out = np.zeros(len(time_s), bool)
        out[far[off[this] > off[other]]] = True
        _take_out(points[this], reasons[this], out, "jump")
