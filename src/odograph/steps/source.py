"""Reading from a session's recording what a step needs, and checking that it is what was planned."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from odograph.errors import ChangedInputError, InputError
from odograph.provenance.step import Step

if TYPE_CHECKING:
    from odograph.recording.model import Recording


def recording_name(source: Mapping[str, Any]) -> str:
    """How records and messages name a session's recording: its path, or the address it was fetched from."""
    return source.get("address") or source["nwb"]


def read_signals(step: Step) -> Recording:
    """Read the signals that the step's plan names, check their digests and put them into the record.

    Raises
    ------
    ChangedInputError
        When a signal is no longer what it was when the run was planned.
        It could be read then, so a recording that cannot be used now has changed, too.
    """
    from odograph.recording.digest import signal_digests

    planned = step.plan["signals"]
    source = step.source
    groups = {name.partition(":")[0] for name in planned}
    wanted = {"covariates" if group == "covariate" else group for group in groups}
    recording = _read(source, signals=wanted, units=())
    _compare(planned, signal_digests(recording), recording_name(source), "signal")
    places = signal_places(recording)
    for name, digest in planned.items():
        step.record.add_signal_input(name, digest, file=recording_name(source), place=places.get(name))
    return recording


def read_units(step: Step, units: Mapping[int, str]) -> Recording:
    """Read some units and check their digests.

    Parameters
    ----------
    step : Step
        The job.
    units : mapping of int to str
        Planned digest by unit.

    Raises
    ------
    ChangedInputError
        As `read_signals`.
    """
    from odograph.recording.digest import unit_digests

    source = step.source
    recording = _read(source, signals=(), units=tuple(units))
    _compare(units, unit_digests(recording), recording_name(source), "unit")
    return recording


def _read(source: Mapping[str, Any], **what: Any) -> Recording:
    from odograph.recording.reader import read_recording
    from odograph.settings.intake import IntakeSettings

    try:
        return read_recording(source["nwb"], IntakeSettings.model_validate(source["intake"]), **what)
    except InputError as error:
        raise ChangedInputError(
            f"the recording changed since this run was planned; now it cannot be used: {error.found}",
            file=recording_name(source) if error.file in (None, source["nwb"]) else error.file,
            place=error.place,
            expected="the content that was there when the run began",
            remedy="run snakemake again",
        ) from error


def signal_places(recording: Recording) -> dict[str, str]:
    """Where in the file each signal lies, by the signal's name."""
    places = {f"covariate:{covariate.name}": covariate.place for covariate in recording.covariates}
    if recording.tracks:
        places["tracking"] = ", ".join(track.place for track in recording.tracks)
    single = {
        "direction": recording.direction,
        "frame_pulses": recording.pulses,
        "invalid_times": recording.invalid,
        "arena": recording.arena,
    }
    return places | {name: signal.place for name, signal in single.items() if signal is not None}


def _compare(planned: Mapping, found: Mapping, file: str, what: str) -> None:
    changed = [str(name) for name in planned if found.get(name) != planned[name]]
    if changed:
        raise ChangedInputError(
            f"{what} {', '.join(changed)} changed since this run was planned",
            file=file,
            expected="the content that was there when the run began",
            remedy="run snakemake again",
        )
