"""A recording as plain arrays: what the NWB file says, in seconds, metres and radians."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import numpy as np

from odograph.errors import printable

Scalar = str | bool | int | float
Clock = Literal["camera", "recording"]
Finding = dict[str, str | None]


@dataclass(frozen=True)
class FileFacts:
    """What the file says of itself; `session_start_time` is its own text (ISO 8601).

    `linked_files` are the other files that its links lead into.
    """

    path: Path
    nwb_version: str
    identifier: str | None
    session_id: str | None
    session_start_time: str | None
    description: str | None
    linked_files: tuple[Path, ...] = ()

    @property
    def name(self) -> str:
        """Name of the file without its folder, which is of no account to any result."""
        return self.path.name


@dataclass(frozen=True)
class Subject:
    """The animal, as far as the file tells."""

    subject_id: str | None
    species: str | None
    sex: str | None
    age: str | None


@dataclass(frozen=True)
class Track:
    """One tracked point.

    `time_s` (n_samples,) strictly increasing; `xy_m` (n_samples, 2), NaN where the point was lost;
    `confidence` (n_samples,) or None.
    """

    name: str
    place: str
    time_s: np.ndarray
    xy_m: np.ndarray
    confidence: np.ndarray | None = None


@dataclass(frozen=True)
class Direction:
    """A measured head direction.

    `angle_rad` (n_samples,) in [0, 2 pi), counter-clockwise from +x, NaN where it was lost.
    """

    place: str
    time_s: np.ndarray
    angle_rad: np.ndarray


@dataclass(frozen=True)
class Pulses:
    """Frame pulses of the camera on the recording clock: `time_s` (n_pulses,), strictly increasing."""

    place: str
    time_s: np.ndarray


@dataclass(frozen=True)
class Covariate:
    """One more variable of the behaviour: `values` (n_samples,) at `time_s` (n_samples,) of its clock."""

    name: str
    place: str
    time_s: np.ndarray
    values: np.ndarray
    clock: Clock


@dataclass(frozen=True)
class Intervals:
    """Stretches of time on the recording clock: `start_s` and `stop_s` (n_intervals,), sorted by start."""

    place: str
    start_s: np.ndarray
    stop_s: np.ndarray


@dataclass(frozen=True)
class Arena:
    """The arena's floor: `corners_m` (n_corners, 2), a polygon that does not cross itself."""

    corners_m: np.ndarray
    place: str


@dataclass(frozen=True)
class Unit:
    """One sorted unit.

    `spike_times_s` (n_spikes,) sorted; `observed_s` (n_intervals, 2) the stretches in which the unit could be
    seen, empty when the file states none: then it was observed throughout. `kept` says whether the unit
    passed the study's conditions, `reason` why not.
    """

    unit_id: int
    spike_times_s: np.ndarray
    observed_s: np.ndarray
    attributes: dict[str, Scalar]
    region: str | None
    kept: bool = True
    reason: str | None = None


@dataclass(frozen=True)
class Recording:
    """What was read of one NWB file; parts not asked for are None or empty."""

    file: FileFacts
    subject: Subject
    tracks: tuple[Track, ...] = ()
    direction: Direction | None = None
    pulses: Pulses | None = None
    covariates: tuple[Covariate, ...] = ()
    invalid: Intervals | None = None
    arena: Arena | None = None
    units: tuple[Unit, ...] = ()
    findings: tuple[Finding, ...] = ()


def finding(
    level: Literal["warn", "fail", "note"],
    found: str,
    *,
    place: str | None = None,
    expected: str | None = None,
    remedy: str | None = None,
) -> Finding:
    """One finding for a session's verdict."""
    facts = {"place": place, "found": found, "expected": expected, "remedy": remedy}
    return {"level": level} | {key: printable(text) if text else text for key, text in facts.items()}


def verdict_of(findings: tuple[Finding, ...] | list[Finding]) -> str:
    """The verdict that findings add up to: the worst level, where a note counts as `pass`."""
    levels = {entry["level"] for entry in findings}
    if "fail" in levels:
        return "fail"
    return "warn" if "warn" in levels else "pass"
