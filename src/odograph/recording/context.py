"""The lesser signals of a recording: subject, arena, invalid times, further variables."""

from __future__ import annotations

from typing import Any

import numpy as np

from odograph.errors import printable
from odograph.recording.choosing import choose, choose_one
from odograph.recording.model import Arena, Covariate, Intervals, Subject
from odograph.recording.opening import OpenRecording
from odograph.recording.series import (
    check_finite,
    check_length,
    check_rising,
    in_unit,
    is_series,
    one_column,
    read_times,
    stored_values,
)
from odograph.settings.intake import CovariateSource, IntakeSettings


def read_subject(opened: OpenRecording) -> Subject:
    """The animal, as far as the file tells."""
    subject = opened.nwbfile.subject
    if subject is None:
        return Subject(None, None, None, None)
    texts = (getattr(subject, name, None) for name in ("subject_id", "species", "sex", "age"))
    return Subject(*(printable(str(text)) if text else None for text in texts))


def arena_candidates(opened: OpenRecording) -> dict[str, Any]:
    """Tables with the columns x_m and y_m."""
    return {
        place: thing
        for place, thing in opened.places.items()
        if {"x_m", "y_m"} <= set(getattr(thing, "colnames", None) or ())
    }


def read_arena(opened: OpenRecording, settings: IntakeSettings) -> Arena | None:
    """The arena's corners, from the settings or from a table of the file.

    Raises
    ------
    InputError
        Several tables without a choice, or corners that make no polygon.
    """
    if settings.arena_corners_m is not None:
        corners, place = np.asarray(settings.arena_corners_m, dtype=np.float64), "intake.arena_corners_m"
    else:
        candidates = arena_candidates(opened)
        chosen = choose(opened, "arena", "arena_place", settings.arena_place, candidates, required=False)
        if chosen is None:
            return None
        if chosen not in candidates:
            raise opened.refuse(
                "this is not a table with the columns x_m and y_m",
                place=chosen,
                expected="the corners of the arena, one per row, in order",
                remedy="correct intake.arena_place, or set intake.arena_corners_m",
            )
        place = chosen
        table = opened.places[place]
        x, y = (opened.numbers(table[name].data, f"{place}/{name}") for name in ("x_m", "y_m"))
        if x.ndim != 1 or x.shape != y.shape:
            raise opened.refuse(
                f"columns x_m and y_m of shapes {x.shape} and {y.shape}",
                place=place,
                expected="one number in each column for each corner",
                remedy="correct the table, or set intake.arena_corners_m",
            )
        corners = np.stack([x, y], axis=1)
    check_finite(opened, corners, place, "corners")
    if len(corners) > 3 and np.array_equal(corners[0], corners[-1]):
        corners = corners[:-1]
    problem = _polygon_problem(corners)
    if problem:
        raise opened.refuse(
            f"the arena's corners make no floor: {problem}",
            place=place,
            expected="three or more corners in order round the arena",
            remedy="correct the corners, or set intake.arena_corners_m",
        )
    return Arena(corners_m=corners, place=place)


def _polygon_problem(corners: np.ndarray) -> str | None:
    n = len(corners)
    if n < 3:
        return f"{n} corner(s)"
    x, y = corners.T
    area = 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))
    crossing = [
        (i, j)
        for i in range(n)
        for j in range(i + 2, n)
        if (j + 1) % n != i and _cross(corners[i], corners[(i + 1) % n], corners[j], corners[(j + 1) % n])
    ]
    if crossing:
        i, j = crossing[0]
        return f"the sides after corners {i + 1} and {j + 1} cross"
    extent = float(np.max(np.ptp(corners, axis=0)))
    return "they lie on one line" if abs(area) <= 1e-9 * extent**2 else None


def _cross(a: np.ndarray, b: np.ndarray, c: np.ndarray, d: np.ndarray) -> bool:
    def side(p: np.ndarray, q: np.ndarray, r: np.ndarray) -> float:
        return float((q[0] - p[0]) * (r[1] - p[1]) - (q[1] - p[1]) * (r[0] - p[0]))

    return side(a, b, c) * side(a, b, d) < 0 and side(c, d, a) * side(c, d, b) < 0


def read_invalid_times(opened: OpenRecording) -> Intervals | None:
    """Stretches that the file marks as invalid, sorted by start; None when it marks none.

    Raises
    ------
    InputError
        Times that are not finite, or an interval that ends before it starts.
    """
    table = opened.nwbfile.invalid_times
    if table is None or len(table.id) == 0:
        return None
    place = "intervals/invalid_times"
    start, stop = (
        opened.numbers(table[name].data, f"{place}/{name}") for name in ("start_time", "stop_time")
    )
    if start.ndim != 1 or start.shape != stop.shape:
        raise opened.refuse(
            f"columns start_time and stop_time of shapes {start.shape} and {stop.shape}",
            place=place,
            expected="one number in each column for each interval",
            remedy="correct the table of invalid times",
        )
    check_finite(opened, start, f"{place}/start_time", "times")
    check_finite(opened, stop, f"{place}/stop_time", "times")
    back = np.flatnonzero(stop < start)
    if back.size:
        raise opened.refuse(
            f"{back.size} interval(s) end before they start, first row {back[0]}: "
            f"{start[back[0]]:.3f} to {stop[back[0]]:.3f} s",
            place=place,
            expected="stop_time after start_time",
            remedy="correct the table of invalid times",
        )
    order = np.lexsort((stop, start))
    return Intervals(place=place, start_s=start[order], stop_s=stop[order])


def read_covariate(opened: OpenRecording, source: CovariateSource) -> Covariate:
    """One further variable of the behaviour, in the unit the file gives it.

    Raises
    ------
    InputError
        Nothing at the place, not one value per sample, bad times.
    """
    series_only = {place: thing for place, thing in opened.places.items() if is_series(thing)}
    place = choose_one(opened, f"the variable {source.name}", "covariates", source.place, series_only)
    if place not in series_only:
        raise opened.refuse(
            f"this is not a TimeSeries but: {type(opened.places[place]).__name__}",
            place=place,
            expected=f"a TimeSeries with one value per sample for {source.name}",
            remedy="correct the place in intake.covariates",
        )
    series = opened.places[place]
    time_s = read_times(opened, series, place)
    stored = one_column(opened, stored_values(opened, series, place), place)
    check_length(opened, stored, time_s, place)
    keep = check_rising(opened, time_s, place, rate_matters=False)
    values = in_unit(series, stored)
    return Covariate(
        source.name, place, time_s[keep], np.where(np.isfinite(values), values, np.nan)[keep], source.clock
    )
