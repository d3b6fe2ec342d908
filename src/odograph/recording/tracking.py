"""Tracked points and measured head direction: metres, radians, one convention."""

from __future__ import annotations

from typing import Any

import numpy as np

from odograph.recording.choosing import choose, choose_one, describe, list_candidates
from odograph.recording.model import Direction, Track
from odograph.recording.opening import OpenRecording
from odograph.recording.series import (
    check_length,
    check_rising,
    in_unit,
    one_column,
    read_times,
    stored_values,
)
from odograph.settings.intake import IntakeSettings

METRES = {
    **dict.fromkeys(("m", "meter", "meters", "metre", "metres"), 1.0),
    **dict.fromkeys(("cm", "centimeter", "centimeters", "centimetre", "centimetres"), 0.01),
    **dict.fromkeys(("mm", "millimeter", "millimeters", "millimetre", "millimetres"), 0.001),
}
PIXELS = ("px", "pixel", "pixels")
DEGREES = ("degree", "degrees", "deg", "°")
RADIANS = ("radian", "radians", "rad")
LARGEST_RANGE_M = 100.0
SMALLEST_RANGE_M = 0.01


def point_candidates(opened: OpenRecording) -> dict[str, Any]:
    """Series that may be a tracked point: SpatialSeries with two or three columns, or inside a Position."""
    from pynwb.behavior import CompassDirection, Position, SpatialSeries

    found = {}
    for place, thing in opened.places.items():
        if not isinstance(thing, SpatialSeries):
            continue
        holder = opened.places.get(place.rpartition("/")[0])
        if isinstance(holder, CompassDirection):
            continue
        if isinstance(holder, Position) or (np.ndim(thing.data) == 2 and np.shape(thing.data)[1] in (2, 3)):
            found[place] = thing
    return found


def direction_candidates(opened: OpenRecording) -> dict[str, Any]:
    """Series that hold a head direction by their type: those in a CompassDirection."""
    from pynwb.behavior import CompassDirection, SpatialSeries

    return {
        place: thing
        for place, thing in opened.places.items()
        if isinstance(thing, SpatialSeries)
        and isinstance(opened.places.get(place.rpartition("/")[0]), CompassDirection)
    }


def read_tracks(opened: OpenRecording, settings: IntakeSettings) -> tuple[Track, ...]:
    """The tracked points, front first.

    Returns
    -------
    tuple of Track
        One or two; two share their time stamps.

    Raises
    ------
    InputError
        No position, several without a choice, an unknown unit of length, wrong shapes, bad times, every
        sample lost.
    """
    places = _point_places(opened, settings)
    tracks = tuple(_read_track(opened, place, settings) for place in places)
    if len(tracks) == 2 and not np.array_equal(tracks[0].time_s, tracks[1].time_s):
        raise opened.refuse(
            f"the two points have different time stamps ({tracks[0].time_s.size} and "
            f"{tracks[1].time_s.size} samples)",
            place=f"{tracks[0].place}, {tracks[1].place}",
            expected="two points tracked in the same frames",
            remedy="write both points at the same time stamps, or set intake.front_point alone",
        )
    return tracks


def _point_places(opened: OpenRecording, settings: IntakeSettings) -> list[str]:
    candidates = point_candidates(opened)
    holder = None
    if settings.position_place is not None:
        holder = choose(
            opened, "position", "position_place", settings.position_place, candidates, required=True
        )
        inside = {place: thing for place, thing in candidates.items() if place.startswith(f"{holder}/")}
        candidates = inside or {holder: opened.places[holder]}
    named = [
        (key, name)
        for key, name in (("front_point", settings.front_point), ("back_point", settings.back_point))
        if name is not None
    ]
    if not named:
        if len(candidates) > 1:
            raise opened.refuse(
                f"{len(candidates)} tracked points: {list_candidates(candidates)}",
                place=holder,
                expected="one point, or a choice of one or two",
                remedy="set intake.front_point and, for the head direction from two points, "
                "intake.back_point; or intake.position_place for one point alone",
            )
        place = choose(opened, "position", "position_place", None, candidates, required=True)
        return [place] if place else []
    return [_named_point(opened, key, name, candidates) for key, name in named]


def _named_point(opened: OpenRecording, key: str, name: str, candidates: dict[str, Any]) -> str:
    matches = [
        place for place in candidates if place == name.strip("/") or place.endswith(f"/{name.strip('/')}")
    ]
    if len(matches) == 1:
        return matches[0]
    if not candidates:
        choose(opened, "position", "position_place", None, candidates, required=True)
    return choose_one(opened, "tracked point", key, name, candidates)


def _read_track(opened: OpenRecording, place: str, settings: IntakeSettings) -> Track:
    series = _series_at(opened, place, "position_place")
    time_s = read_times(opened, series, place)
    stored = stored_values(opened, series, place)
    check_length(opened, stored, time_s, place, "2")
    if stored.ndim != 2 or stored.shape[1] not in (2, 3):
        raise opened.refuse(
            f"data of shape {stored.shape}",
            place=f"{place}/data",
            expected="two coordinates per sample, shape (n, 2); a third is left aside",
            remedy="check intake.position_place, or write the position in the plane",
        )
    keep = check_rising(opened, time_s, place)
    flat = stored[:, :2].astype(np.float64)
    metres = in_unit(series, stored[:, :2]) * _metres_per_unit(opened, series, place, settings)
    lost = ~np.isfinite(flat).all(axis=1)
    marker = {"zero": 0.0, "minus_one": -1.0, None: None}[settings.lost_value]
    if marker is not None:
        lost |= (flat == marker).all(axis=1)
    metres[lost] = np.nan
    confidence = _confidence(opened, series, place, time_s)
    _check_extent(opened, metres[keep], place)
    return Track(
        name=place.rpartition("/")[2],
        place=place,
        time_s=time_s[keep],
        xy_m=metres[keep],
        confidence=None if confidence is None else confidence[keep],
    )


def _series_at(opened: OpenRecording, place: str, key: str) -> Any:
    from pynwb.behavior import SpatialSeries

    thing = opened.places[place]
    if not isinstance(thing, SpatialSeries):
        raise opened.refuse(
            f"this is not a SpatialSeries but: {describe(thing)}",
            place=place,
            expected="a SpatialSeries",
            remedy=f"correct intake.{key}; `odograph look FILE` lists what the file holds",
        )
    return thing


def _metres_per_unit(opened: OpenRecording, series: Any, place: str, settings: IntakeSettings) -> float:
    unit = (settings.length_unit or str(series.unit or "")).strip().lower()
    if unit in METRES:
        return METRES[unit]
    if unit in PIXELS:
        if settings.metres_per_pixel is None:
            raise opened.refuse(
                "the position is in pixels and their size is not known",
                place=f"{place}/data",
                expected="a scale",
                remedy="set intake.metres_per_pixel, or as a column of the sessions table when it differs "
                "between sessions",
            )
        return settings.metres_per_pixel
    raise opened.refuse(
        f"unknown unit of length: {series.unit!r}",
        place=f"{place}/data",
        expected="metres, centimetres, millimetres or pixels (also m, cm, mm, px)",
        remedy="set intake.length_unit to the unit the numbers are in (metres, centimetres, millimetres, "
        "pixels)",
    )


def _confidence(opened: OpenRecording, series: Any, place: str, time_s: np.ndarray) -> np.ndarray | None:
    data = getattr(series, "confidence", None)
    if data is None or np.ndim(data) == 0:
        return None
    values = one_column(opened, opened.numbers(data, f"{place}/confidence"), place)
    check_length(opened, values, time_s, f"{place}/confidence")
    return values


def _check_extent(opened: OpenRecording, xy_m: np.ndarray, place: str) -> None:
    seen = xy_m[np.isfinite(xy_m).all(axis=1)]
    if not len(seen):
        raise opened.refuse(
            "every sample is lost",
            place=f"{place}/data",
            expected="a tracked animal",
            remedy="check the place, and intake.lost_value",
        )
    low, high = np.percentile(seen, [1, 99], axis=0)
    extent = float(np.max(high - low))
    if not SMALLEST_RANGE_M <= extent <= LARGEST_RANGE_M:
        opened.note(
            "warn",
            f"the animal moved over {extent:.3g} m (1st to 99th percentile)",
            place=f"{place}/data",
            expected=f"between {SMALLEST_RANGE_M:g} and {LARGEST_RANGE_M:g} m",
            remedy="check the unit of length: set intake.length_unit, and intake.metres_per_pixel for pixels",
        )


def read_direction(opened: OpenRecording, settings: IntakeSettings) -> Direction | None:
    """The measured head direction, if there is one.

    Angles are turned to counter-clockwise from +x by `direction_zero_deg` and `direction_clockwise`.

    Raises
    ------
    InputError
        Several without a choice, an unknown unit of angle, wrong shapes, bad times.
    """
    place = choose(
        opened,
        "measured head direction",
        "direction_place",
        settings.direction_place,
        direction_candidates(opened),
        required=False,
    )
    if place is None:
        return None
    if not hasattr(opened.places[place], "data"):
        inside = [known for known in direction_candidates(opened) if known.startswith(f"{place}/")]
        place = inside[0] if len(inside) == 1 else place
    series = _series_at(opened, place, "direction_place")
    time_s = read_times(opened, series, place)
    stored = one_column(opened, stored_values(opened, series, place), place)
    check_length(opened, stored, time_s, place)
    keep = check_rising(opened, time_s, place)
    turn = in_unit(series, stored) * _radians_per_unit(opened, series, place, settings)
    angle = np.deg2rad(settings.direction_zero_deg) + (-turn if settings.direction_clockwise else turn)
    angle = np.where(np.isfinite(angle), angle, np.nan)
    wrapped = np.mod(angle, 2 * np.pi)
    # The remainder of a tiny negative angle rounds up to the period itself.
    wrapped[wrapped >= 2 * np.pi] = 0.0
    return Direction(place=place, time_s=time_s[keep], angle_rad=wrapped[keep])


def _radians_per_unit(opened: OpenRecording, series: Any, place: str, settings: IntakeSettings) -> float:
    unit = (settings.direction_unit or str(series.unit or "")).strip().lower()
    if unit in RADIANS:
        return 1.0
    if unit in DEGREES:
        return float(np.pi / 180)
    raise opened.refuse(
        f"unknown unit of angle: {series.unit!r}",
        place=f"{place}/data",
        expected="radians or degrees",
        remedy="set intake.direction_unit to the unit the numbers are in, or intake.direction_place to none "
        "to leave this series aside",
    )
