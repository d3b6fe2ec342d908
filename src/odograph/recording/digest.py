"""Content digests: the same signal has the same digest whatever the file around it looks like."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping

import numpy as np

from odograph.recording.model import Recording, Unit


def content_digest(meaning: Mapping[str, str], arrays: Mapping[str, np.ndarray]) -> str:
    """Digest of arrays and of the attributes that give them meaning.

    Parameters
    ----------
    meaning : Mapping[str, str]
        Role, unit and the like.
    arrays : Mapping[str, ndarray]
        Numeric arrays of any shape. They are taken as little-endian float64 in C order, with one NaN and one
        zero, so storage, chunks, byte order and float width do not count where the values are equal.

    Returns
    -------
    str
        `sha256:` and 64 hexadecimal digits.
    """
    digest = hashlib.sha256()
    for key in sorted(meaning):
        _put(digest, key.encode(), meaning[key].encode())
    for key in sorted(arrays):
        values = np.ascontiguousarray(arrays[key], dtype="<f8")
        values = np.where(np.isnan(values), np.nan, values) + 0.0
        _put(digest, key.encode(), f"float64 {values.shape}".encode(), values.astype("<f8").tobytes())
    return f"sha256:{digest.hexdigest()}"


def _put(digest: hashlib._Hash, *parts: bytes) -> None:
    # The length before each part keeps "ab"+"c" and "a"+"bc" apart.
    for part in parts:
        digest.update(len(part).to_bytes(8, "little"))
        digest.update(part)


def signal_digests(recording: Recording) -> dict[str, str]:
    """Digest of each signal that was read, by the signal's name.

    The names are `tracking` (all tracked points together), `direction`, `frame_pulses`, `covariate:NAME`,
    `invalid_times` and `arena`. The digest covers the arrays as they are used, after units, conventions and
    lost values were settled, and the role of each; the names and places of things in the file do not count.
    """
    found: dict[str, str] = {}
    if recording.tracks:
        found["tracking"] = _tracking_digest(recording)
    if recording.direction is not None:
        found["direction"] = content_digest(
            {"signal": "direction", "unit": "rad", "clock": "camera"},
            {"time_s": recording.direction.time_s, "angle": recording.direction.angle_rad},
        )
    if recording.pulses is not None:
        found["frame_pulses"] = content_digest(
            {"signal": "frame_pulses", "unit": "s", "clock": "recording"}, {"time_s": recording.pulses.time_s}
        )
    for covariate in recording.covariates:
        found[f"covariate:{covariate.name}"] = content_digest(
            {"signal": "covariate", "name": covariate.name, "clock": covariate.clock},
            {"time_s": covariate.time_s, "values": covariate.values},
        )
    if recording.invalid is not None:
        found["invalid_times"] = content_digest(
            {"signal": "invalid_times", "unit": "s", "clock": "recording"},
            {"start": recording.invalid.start_s, "stop": recording.invalid.stop_s},
        )
    if recording.arena is not None:
        found["arena"] = content_digest(
            {"signal": "arena", "unit": "m"}, {"corners": recording.arena.corners_m}
        )
    return found


def _tracking_digest(recording: Recording) -> str:
    roles = ("front", "back") if len(recording.tracks) > 1 else ("point",)
    arrays: dict[str, np.ndarray] = {}
    for role, track in zip(roles, recording.tracks, strict=True):
        arrays[f"{role}.time_s"] = track.time_s
        arrays[f"{role}.xy"] = track.xy_m
        if track.confidence is not None:
            arrays[f"{role}.confidence"] = track.confidence
    return content_digest({"signal": "tracking", "unit": "m", "clock": "camera"}, arrays)


def unit_digest(unit: Unit) -> str:
    """Digest of one unit's spike times and observed intervals; its id and its columns do not count."""
    return content_digest(
        {"signal": "unit", "unit": "s", "clock": "recording"},
        {"spike_times": unit.spike_times_s, "observed": unit.observed_s},
    )


def unit_digests(recording: Recording, *, dropped_too: bool = False) -> dict[int, str]:
    """Digest of each unit that was read and kept, by unit id.

    Parameters
    ----------
    recording : Recording
        What was read.
    dropped_too : bool
        Whether units that the study's conditions leave out are included.
    """
    return {unit.unit_id: unit_digest(unit) for unit in recording.units if unit.kept or dropped_too}
