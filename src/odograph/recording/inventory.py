"""The inventory of a session: what its file holds, with digests, and whether it can be used."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from odograph.errors import OdographError
from odograph.recording.digest import signal_digests, unit_digest
from odograph.recording.extent import behaviour_span
from odograph.recording.model import Recording, Unit, verdict_of


def make_inventory(session: str, recording: Recording) -> dict[str, Any]:
    """What a recording holds, as plain values for `inventory.json`.

    Parameters
    ----------
    session : str
        Name of the session.
    recording : Recording
        Everything that the study reads of its file.

    Returns
    -------
    dict
        session, verdict, findings, file, subject, signals, units, arena.
    """
    span = behaviour_span(recording.tracks, recording.pulses)
    return {
        "session": session,
        "verdict": verdict_of(recording.findings),
        "findings": [dict(entry) for entry in recording.findings],
        "file": {
            "name": recording.file.name,
            "nwb_version": recording.file.nwb_version,
            "identifier": recording.file.identifier,
            "session_id": recording.file.session_id,
            "session_start_time": recording.file.session_start_time,
            "description": recording.file.description,
        },
        "subject": {
            "subject_id": recording.subject.subject_id,
            "species": recording.subject.species,
            "sex": recording.subject.sex,
            "age": recording.subject.age,
        },
        "signals": list(_signals(recording)),
        "units": [_unit_entry(unit, span) for unit in recording.units],
        "arena": None if recording.arena is None else {"corners_m": recording.arena.corners_m.tolist()},
    }


def failed_inventory(session: str, error: OdographError) -> dict[str, Any]:
    """The inventory of a session whose file cannot be used: the same shape, with the reason."""
    nothing = dict.fromkeys(
        ("name", "nwb_version", "identifier", "session_id", "session_start_time", "description")
    )
    return {
        "session": session,
        "verdict": "fail",
        "findings": [error.finding()],
        "file": {**nothing, "name": Path(error.file).name if error.file else None},
        "subject": dict.fromkeys(("subject_id", "species", "sex", "age")),
        "signals": [],
        "units": [],
        "arena": None,
    }


def _signals(recording: Recording) -> Iterator[dict[str, Any]]:
    digests = signal_digests(recording)
    if recording.tracks:
        lost = np.stack([~np.isfinite(track.xy_m).all(axis=1) for track in recording.tracks])
        places = ", ".join(track.place for track in recording.tracks)
        yield _entry("tracking", places, digests, recording.tracks[0].time_s, "m", lost.any(axis=0))
    if recording.direction is not None:
        signal = recording.direction
        yield _entry("direction", signal.place, digests, signal.time_s, "rad", ~np.isfinite(signal.angle_rad))
    if recording.pulses is not None:
        yield _entry("frame_pulses", recording.pulses.place, digests, recording.pulses.time_s, "s", None)
    for covariate in recording.covariates:
        name = f"covariate:{covariate.name}"
        lost = ~np.isfinite(covariate.values)
        yield _entry(name, covariate.place, digests, covariate.time_s, None, lost)
    if recording.invalid is not None:
        signal = recording.invalid
        entry = _entry("invalid_times", signal.place, digests, signal.start_s, "s", None)
        yield {**entry, "last_s": float(signal.stop_s.max()), "median_step_s": None}
    if recording.arena is not None:
        entry = _entry("arena", recording.arena.place, digests, np.empty(0), "m", None)
        yield {**entry, "samples": len(recording.arena.corners_m)}


def _entry(
    name: str,
    place: str,
    digests: dict[str, str],
    time_s: np.ndarray,
    unit: str | None,
    lost: np.ndarray | None,
) -> dict[str, Any]:
    return {
        "signal": name,
        "place": place,
        "digest": digests[name],
        "samples": int(time_s.size),
        "unit": unit,
        "first_s": float(time_s[0]) if time_s.size else None,
        "last_s": float(time_s[-1]) if time_s.size else None,
        "median_step_s": float(np.median(np.diff(time_s))) if time_s.size > 1 else None,
        "lost_share": float(np.mean(lost)) if lost is not None and lost.size else None,
    }


def _unit_entry(unit: Unit, span: tuple[float, float] | None) -> dict[str, Any]:
    return {
        "unit": unit.unit_id,
        "digest": unit_digest(unit),
        "n_spikes": int(unit.spike_times_s.size),
        "mean_rate_hz": _mean_rate_hz(unit, span),
        "region": unit.region,
        "attributes": {name: _plain(value) for name, value in sorted(unit.attributes.items())},
        "kept": unit.kept,
        "reason": unit.reason,
    }


def _plain(value: Any) -> Any:
    return None if isinstance(value, float) and not np.isfinite(value) else value


def _mean_rate_hz(unit: Unit, span: tuple[float, float] | None) -> float | None:
    """Spikes per second in the unit's observed intervals; without any, during the behaviour."""
    times = unit.spike_times_s
    if unit.observed_s.size:
        seconds = float(np.sum(unit.observed_s[:, 1] - unit.observed_s[:, 0]))
        edges = unit.observed_s.reshape(-1)
        n_spikes = int(np.count_nonzero(np.searchsorted(edges, times, side="right") % 2))
    elif span is not None:
        seconds = span[1] - span[0]
        n_spikes = int(np.count_nonzero((times >= span[0]) & (times <= span[1])))
    else:
        return None
    return n_spikes / seconds if seconds > 0 else None
