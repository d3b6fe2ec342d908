"""Whether the spikes lie within the recording, and whether they can be seconds at all."""

from __future__ import annotations

from typing import Any

import numpy as np

from odograph.recording.model import Pulses, Track, Unit
from odograph.recording.opening import OpenRecording

EDGE_S = 1.0
# A recording may run on for hours round a short piece of tracking, but not for fifty times its length.
FAR_BEYOND = 50.0
UNIT_FACTORS = (("milliseconds", 1e3), ("microseconds", 1e6))
SAMPLING_RATES_HZ = (10e3, 50e3)
MANY_OUTSIDE = 0.1


def recorded_span(opened: OpenRecording) -> tuple[float, float, str] | None:
    """First and last time of the electrical recordings in the file, and the place of the longest.

    Only their start, rate, shape and end time stamps are read, never the voltage. None without any.
    """
    from pynwb.ecephys import ElectricalSeries

    spans = []
    for place, thing in opened.places.items():
        if not isinstance(thing, ElectricalSeries) or not np.shape(thing.data) or not np.shape(thing.data)[0]:
            continue
        span = _series_span(thing)
        if span is not None:
            spans.append((*span, place))
    if not spans:
        return None
    longest = max(spans, key=lambda span: span[1] - span[0])
    return min(span[0] for span in spans), max(span[1] for span in spans), longest[2]


def _series_span(series: Any) -> tuple[float, float] | None:
    if series.timestamps is not None:
        stamps = series.timestamps
        first, last = (float(stamps[0]), float(stamps[-1])) if len(stamps) else (np.nan, np.nan)
    elif series.rate:
        first = float(series.starting_time or 0.0)
        last = first + (np.shape(series.data)[0] - 1) / float(series.rate)
    else:
        return None
    return (first, last) if np.isfinite(first) and np.isfinite(last) and last >= first else None


def behaviour_span(tracks: tuple[Track, ...], pulses: Pulses | None) -> tuple[float, float] | None:
    """First and last time of the behaviour on the recording clock: of the pulses, else of the tracking."""
    times = pulses.time_s if pulses is not None else (tracks[0].time_s if tracks else None)
    return (float(times[0]), float(times[-1])) if times is not None and times.size else None


def check_spikes_within(
    opened: OpenRecording,
    place: str,
    units: tuple[Unit, ...],
    tracks: tuple[Track, ...],
    pulses: Pulses | None,
) -> None:
    """Refuse spikes that lie outside the recording, or so far away that they cannot be seconds.

    The recording's bounds are those of its electrical series. Without one, spikes may go on beyond the
    behaviour (a rest before or after), but not before time zero without a reason, and not for many times its
    length.

    Raises
    ------
    InputError
        Spikes outside the recording, in another unit of time, or none during the behaviour.
    """
    spiking = [unit for unit in units if unit.spike_times_s.size]
    if not spiking:
        return
    recorded = recorded_span(opened)
    behaviour = behaviour_span(tracks, pulses)
    known = recorded or behaviour
    if known is not None:
        _check_unit_of_time(opened, place, spiking, (known[0], known[1]))
    if recorded is not None:
        _check_bounds(opened, place, spiking, (recorded[0], recorded[1]), f"the span of {recorded[2]}")
    else:
        start = min(0.0, behaviour[0]) if behaviour else 0.0
        _check_bounds(opened, place, spiking, (start, np.inf), "times from the session's start on")
    if behaviour is not None:
        _check_overlap(opened, place, spiking, behaviour)


def _check_unit_of_time(
    opened: OpenRecording, place: str, units: list[Unit], span: tuple[float, float]
) -> None:
    length, end = span[1] - span[0], max(abs(span[0]), abs(span[1]))
    last = max(units, key=lambda unit: unit.spike_times_s[-1])
    if length <= 0 or last.spike_times_s[-1] <= end + FAR_BEYOND * length:
        return
    raise opened.refuse(
        f"the last spike is at {last.spike_times_s[-1]:.6g}, the recording ends at {span[1]:.6g} s"
        + _guess(last.spike_times_s[-1] / max(end, 1e-9)),
        place=f"{place} id {last.unit_id}",
        expected=f"seconds, between {span[0]:.6g} and {span[1]:.6g}",
        remedy="divide milliseconds by 1000, sample numbers by the sampling rate; seconds must count from "
        "the session's start",
    )


def _guess(ratio: float) -> str:
    for name, factor in UNIT_FACTORS:
        if 0.5 <= ratio / factor <= 1.5:
            return f"; these look like {name}"
    low, high = SAMPLING_RATES_HZ
    if 0.9 * low <= ratio <= 1.1 * high:
        return f"; these look like sample numbers (about {ratio:.0f} samples/s)"
    return ""


def _check_bounds(
    opened: OpenRecording, place: str, units: list[Unit], bounds: tuple[float, float], name: str
) -> None:
    low, high = bounds[0] - EDGE_S, bounds[1] + EDGE_S
    for unit in units:
        times = unit.spike_times_s
        outside = times[(times < low) | (times > high)]
        if outside.size:
            upper = "" if np.isinf(high) else f" to {bounds[1]:.3f}"
            raise opened.refuse(
                f"{outside.size} of {times.size} spikes lie outside the recording, for instance at "
                f"{outside[0]:.3f} s",
                place=f"{place} id {unit.unit_id}",
                expected=f"{name}: {bounds[0]:.3f}{upper} s",
                remedy="bring the spike times to the file's clock (seconds since the session's start), or "
                "remove the spikes that do not belong to it",
            )


def _check_overlap(
    opened: OpenRecording, place: str, units: list[Unit], behaviour: tuple[float, float]
) -> None:
    total = sum(unit.spike_times_s.size for unit in units)
    within = sum(
        int(np.count_nonzero((unit.spike_times_s >= behaviour[0]) & (unit.spike_times_s <= behaviour[1])))
        for unit in units
    )
    span = f"{behaviour[0]:.3f} to {behaviour[1]:.3f} s"
    if not within:
        raise opened.refuse(
            f"none of {total} spikes falls within the behaviour ({span})",
            place=place,
            expected="spikes and behaviour of one recording, on one clock",
            remedy="if the tracking is on the camera's clock, set intake.frame_pulses_place; else check both "
            "clocks",
        )
    outside = total - within
    if outside:
        opened.note(
            "warn" if outside > MANY_OUTSIDE * total else "note",
            f"{outside} of {total} spikes fall before or after the behaviour ({span}); they are not used",
            place=place,
            expected="spikes during the behaviour",
            remedy="nothing, if the recording went on round it",
        )
