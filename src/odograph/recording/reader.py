"""One NWB file as a `Recording`: every signal checked, in seconds, metres and radians."""

from __future__ import annotations

from collections.abc import Collection
from pathlib import Path

from odograph.recording.context import read_arena, read_covariate, read_invalid_times, read_subject
from odograph.recording.extent import check_spikes_within
from odograph.recording.model import Recording
from odograph.recording.opening import open_recording
from odograph.recording.pulses import read_pulses
from odograph.recording.tracking import read_direction, read_tracks
from odograph.recording.units import read_units
from odograph.settings.intake import IntakeSettings

SIGNALS = ("tracking", "direction", "frame_pulses", "covariates", "invalid_times", "arena")


def read_recording(
    path: str | Path,
    settings: IntakeSettings,
    *,
    signals: Collection[str] | None = None,
    units: Collection[int] | None = None,
) -> Recording:
    """Read an NWB file, or parts of it; raw voltage is never read.

    Parameters
    ----------
    path : str or Path
        The file.
    settings : IntakeSettings
        Where things are and how they were written.
    signals : collection of str, optional
        Which of `SIGNALS` to read; None reads all.
    units : collection of int, optional
        Ids of the units to read; None reads all, an empty collection none.

    Returns
    -------
    Recording
        What warrants a warning is in its `findings`.

    Raises
    ------
    InputError
        The file cannot be used as it is; the message names the place and what to do.
    """
    asked = set(SIGNALS if signals is None else signals)
    unknown = sorted(asked - set(SIGNALS))
    if unknown:
        raise ValueError(f"unknown signals {unknown}; known are {SIGNALS}")
    with open_recording(path, settings) as opened:
        tracks = read_tracks(opened, settings) if "tracking" in asked else ()
        direction = read_direction(opened, settings) if "direction" in asked else None
        pulses = read_pulses(opened, settings) if "frame_pulses" in asked else None
        covariates = (
            tuple(read_covariate(opened, source) for source in settings.covariates)
            if "covariates" in asked
            else ()
        )
        invalid = read_invalid_times(opened) if "invalid_times" in asked else None
        arena = read_arena(opened, settings) if "arena" in asked else None
        found = () if units is not None and not len(units) else read_units(opened, settings, units)
        on_recording_clock = () if settings.frame_pulses_place is not None else tracks
        check_spikes_within(opened, "units", found, on_recording_clock, pulses)
        return Recording(
            file=opened.facts,
            subject=read_subject(opened),
            tracks=tracks,
            direction=direction,
            pulses=pulses,
            covariates=covariates,
            invalid=invalid,
            arena=arena,
            units=found,
            findings=tuple(opened.findings),
        )
