"""Frame pulses, wherever an NWB file may keep them: tables of events, series of events, sampled lines."""

from __future__ import annotations

from typing import Any

import numpy as np

from odograph.recording.choosing import choose_one, describe
from odograph.recording.model import Pulses
from odograph.recording.opening import OpenRecording
from odograph.recording.ragged import row_ends
from odograph.recording.series import check_finite, is_series, read_times
from odograph.settings.intake import IntakeSettings

TIME_COLUMNS = ("timestamp", "event_times", "start_time")
LABEL_COLUMNS = ("annotation", "label", "event_type", "event_name")
CHUNK_SAMPLES = 4_000_000


def pulse_candidates(opened: OpenRecording) -> dict[str, Any]:
    """Objects that may hold pulses: tables and series of events, TimeSeries with one value per sample."""
    from pynwb.behavior import SpatialSeries

    def may_hold_pulses(thing: Any) -> bool:
        if is_series(thing):
            return not isinstance(thing, SpatialSeries) and np.ndim(thing.data) == 1
        return _is_event_table(thing) or _has_event_times(thing)

    return {place: thing for place, thing in opened.places.items() if may_hold_pulses(thing)}


def _is_event_table(thing: Any) -> bool:
    names = getattr(thing, "colnames", None) or ()
    return "timestamp" in names or "event_times" in names


def _has_event_times(thing: Any) -> bool:
    # Types of the events extension carry time stamps without being TimeSeries; pynwb builds their classes
    # from the specification in the file, so there is no class to ask for.
    return not is_series(thing) and not hasattr(thing, "colnames") and hasattr(thing, "timestamps")


def event_count(thing: Any) -> int | None:
    """How many events an object holds; None for a sampled line, which has to be read to know."""
    if getattr(thing, "colnames", None):
        name = next((known for known in TIME_COLUMNS if known in thing.colnames), None)
        return None if name is None else len(getattr(thing[name], "target", thing[name]).data)
    stamps = getattr(thing, "timestamps", None)
    return int(np.shape(stamps)[0]) if stamps is not None and np.ndim(stamps) == 1 else None


def read_pulses(opened: OpenRecording, settings: IntakeSettings) -> Pulses | None:
    """Times of the frame pulses on the recording clock.

    Understood are tables of events (one time per row, or a list of times per row), time intervals (their
    start, or the column named at the end of the place), series of events of the events extension,
    annotations, and TimeSeries: with time stamps of events, with the edges of a line, or sampled.

    Returns
    -------
    Pulses or None
        None when the settings name no pulses.

    Raises
    ------
    InputError
        Nothing at the place, no pulse, or times that are not finite.
    """
    if settings.frame_pulses_place is None:
        return None
    place, column = _place_and_column(opened, settings)
    thing = opened.places[place]
    times = _times_of(opened, thing, place, column, settings)
    check_finite(opened, times, place, "pulse times")
    if not times.size:
        raise opened.refuse(
            "no pulse"
            + (f" with the label {settings.frame_pulses_label!r}" if settings.frame_pulses_label else ""),
            place=place,
            expected="one pulse for each frame of the camera",
            remedy="check intake.frame_pulses_place, intake.frame_pulses_label and intake.frame_pulses_edge",
        )
    return Pulses(place=place, time_s=_in_order(opened, times.astype(np.float64), place))


def _place_and_column(opened: OpenRecording, settings: IntakeSettings) -> tuple[str, str | None]:
    wanted = str(settings.frame_pulses_place).strip("/")
    above, _, last = wanted.rpartition("/")
    table = opened.resolve(above) if above else None
    if table is not None and last in (getattr(opened.places[table], "colnames", None) or ()):
        return table, last
    candidates = pulse_candidates(opened)
    place = choose_one(opened, "frame pulses", "frame_pulses_place", settings.frame_pulses_place, candidates)
    inside = [known for known in candidates if known.startswith(f"{place}/")]
    if place not in candidates and len(inside) == 1:
        place = inside[0]
    return place, None


def _in_order(opened: OpenRecording, times: np.ndarray, place: str) -> np.ndarray:
    steps = np.diff(times)
    unsorted = int(np.count_nonzero(steps < 0))
    if unsorted:
        opened.note(
            "warn",
            f"{unsorted} pulse(s) earlier than the one before; they are taken in order of time",
            place=place,
            expected="pulses in order of time",
            remedy="nothing to do when the table mixes several kinds of events; else look at its writer",
        )
    unique = np.unique(times)
    if unique.size < times.size:
        opened.note(
            "warn",
            f"{times.size - unique.size} pulse(s) at the time of another; each time counts once",
            place=place,
            expected="one pulse at a time",
            remedy="if the table mixes several kinds of events, set intake.frame_pulses_label",
        )
    return unique


def _times_of(
    opened: OpenRecording, thing: Any, place: str, column: str | None, settings: IntakeSettings
) -> np.ndarray:
    if getattr(thing, "colnames", None):
        return _times_of_table(opened, thing, place, column, settings)
    if _has_event_times(thing):
        times = opened.numbers(thing.timestamps, f"{place}/timestamps")
        return _with_label(opened, thing, times, place, settings)
    if is_series(thing):
        return _times_of_series(opened, thing, place, settings)
    raise opened.refuse(
        f"no pulses can be read from {describe(thing)}",
        place=place,
        expected="a table of events, time intervals, or a TimeSeries",
        remedy="correct intake.frame_pulses_place; `odograph look FILE` lists what the file holds",
    )


def _times_of_table(
    opened: OpenRecording, table: Any, place: str, column: str | None, settings: IntakeSettings
) -> np.ndarray:
    name = column or next((known for known in TIME_COLUMNS if known in table.colnames), None)
    if name is None:
        raise opened.refuse(
            f"the table has no column of times; its columns: {', '.join(table.colnames)}",
            place=place,
            expected=f"a column {', '.join(TIME_COLUMNS)}, or one named at the end of the place",
            remedy=f"set intake.frame_pulses_place to {place}/COLUMN",
        )
    indexed = getattr(table[name], "target", None)
    values = opened.numbers((indexed if indexed is not None else table[name]).data, f"{place}/{name}")
    wanted = settings.frame_pulses_label
    if wanted is not None:
        labels = next((known for known in LABEL_COLUMNS if known in table.colnames), None)
        if labels is None:
            raise opened.refuse(
                f"the table has no column of labels; its columns: {', '.join(table.colnames)}",
                place=place,
                expected=f"one of {', '.join(LABEL_COLUMNS)}",
                remedy="set intake.frame_pulses_label to null",
            )
        chosen = np.array(
            [_as_text(label) == wanted for label in opened.array(table[labels].data, f"{place}/{labels}")],
            dtype=bool,
        )
        if indexed is not None:
            chosen = np.repeat(chosen, np.diff(row_ends(opened, table, place, name), prepend=0))
        values = values[chosen]
    return values


def _with_label(
    opened: OpenRecording, thing: Any, times: np.ndarray, place: str, settings: IntakeSettings
) -> np.ndarray:
    wanted = settings.frame_pulses_label
    if wanted is None:
        return times
    data = getattr(thing, "data", None)
    names = getattr(thing, "data__labels", None)
    if data is None:
        raise opened.refuse(
            "these events have no labels",
            place=place,
            expected="labelled events",
            remedy="set intake.frame_pulses_label to null",
        )
    values = opened.array(data, f"{place}/data")
    if names is not None:
        texts = [_as_text(name) for name in opened.array(names, f"{place}/data__labels")]
        return times[np.array([texts[int(value)] == wanted for value in values], dtype=bool)]
    return times[np.array([_as_text(value) == wanted for value in values], dtype=bool)]


def _as_text(value: Any) -> str:
    return value.decode("utf-8", "replace") if isinstance(value, bytes) else str(value)


def _times_of_series(opened: OpenRecording, series: Any, place: str, settings: IntakeSettings) -> np.ndarray:
    from pynwb.misc import AnnotationSeries, IntervalSeries

    if isinstance(series, AnnotationSeries):
        return _with_label(opened, series, read_times(opened, series, place), place, settings)
    if series.timestamps is None:
        return _edges_of_line(opened, series, place, settings)
    times = opened.numbers(series.timestamps, f"{place}/timestamps")
    if np.ndim(series.data) != 1 or np.shape(series.data)[0] != times.size:
        raise opened.refuse(
            f"data of shape {np.shape(series.data)} with {times.size} time stamps",
            place=place,
            expected=f"one value per time stamp, shape ({times.size})",
            remedy="correct intake.frame_pulses_place, or write one value for each time stamp",
        )
    if settings.frame_pulses_label is not None:
        return _with_label(opened, series, times, place, settings)
    values = opened.numbers(series.data, f"{place}/data")
    rising = settings.frame_pulses_edge == "rising"
    if isinstance(series, IntervalSeries):
        return times[values > 0 if rising else values < 0]
    levels = np.unique(values[np.isfinite(values)])
    if levels.size != 2:
        # One level, or a running count: each time stamp is an event of its own.
        return times
    return times[_edges(values > levels.mean(), rising, before=not rising)]


def _edges_of_line(opened: OpenRecording, series: Any, place: str, settings: IntakeSettings) -> np.ndarray:
    """Edges of a regularly sampled line, at half way between its extremes; read in pieces."""
    data = series.data
    if np.ndim(data) != 1:
        raise opened.refuse(
            f"a sampled line of shape {np.shape(data)}",
            place=f"{place}/data",
            expected="one line, shape (n,)",
            remedy="write the line of the camera alone, or its edges as a table of events",
        )

    def read(start: int) -> np.ndarray:
        return opened.numbers(data, f"{place}/data", slice(start, start + CHUNK_SAMPLES))

    opened.check_held(data, f"{place}/data")
    if not len(data):
        raise opened.refuse(
            "the line has no samples",
            place=f"{place}/data",
            expected="a line that goes up and down once a frame",
            remedy="correct intake.frame_pulses_place",
        )
    pieces = range(0, len(data), CHUNK_SAMPLES)
    extremes = [(float(np.min(part)), float(np.max(part))) for part in map(read, pieces)]
    low, high = min(pair[0] for pair in extremes), max(pair[1] for pair in extremes)
    if not high > low:
        raise opened.refuse(
            f"the line never changes (it is {low:g} throughout)",
            place=f"{place}/data",
            expected="a line that goes up and down once a frame",
            remedy="correct intake.frame_pulses_place",
        )
    rising = settings.frame_pulses_edge == "rising"
    found, before = [], None
    for start in pieces:
        above = read(start) > (low + high) / 2
        # A line that starts in a pulse shows no edge there.
        edges = _edges(above, rising, before=bool(above[0]) if before is None else before)
        found.append(start + np.flatnonzero(edges))
        before = bool(above[-1])
    return float(series.starting_time or 0.0) + np.concatenate(found) / float(series.rate)


def _edges(above: np.ndarray, rising: bool, *, before: bool) -> np.ndarray:
    earlier = np.concatenate([[before], above[:-1]])
    return above & ~earlier if rising else ~above & earlier
