"""The demo study as data: which animal ran in which session, for how long, and with which faults."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np

FRAME_INTERVAL_S = 0.02
SAMPLE_RATE_HZ = 30_000
ARENA_SIDE_M = 1.1
FEWEST_UNITS = 4  # for a second sorting: two merged, one split, one changed
SESSIONS_TABLE = Path(__file__).with_name("sessions.tsv")


@dataclass(frozen=True)
class Animal:
    """One animal of the study."""

    subject_id: str
    sex: str
    age: str
    weight_kg: float
    group: str


@dataclass(frozen=True)
class SessionPlan:
    """What a session will be; everything in its recording follows from these values.

    Attributes
    ----------
    session : str
        Name of the session; seeds every random draw.
    minutes : float
        Length of the recording. [min]
    units : int
        Number of units.
    camera_ahead_s, drift_ppm : float
        Reading of the camera clock at the recording's zero [s], and how fast the recording clock runs
        against it: recording = (1 + drift_ppm 1e-6) (camera - camera_ahead_s).
    clock_jump_s : float
        Step of the camera clock half-way through; 0 for a sound clock. [s]
    dropped, lost, swapped, reflected : float
        Shares of camera frames dropped, of points lost, of samples with the points exchanged, and of
        points replaced by a reflection.
    handling : tuple
        Stretches during which the animal was handled, as fractions of the session; written as invalid times.
    partly_observed : bool
        Whether some units are held only for a part of the session (written as observed intervals).
    """

    session: str
    animal: Animal
    start: datetime
    minutes: float
    units: int
    camera_ahead_s: float
    drift_ppm: float
    clock_jump_s: float = 0.0
    dropped: float = 0.003
    lost: float = 0.012
    swapped: float = 0.006
    reflected: float = 0.003
    handling: tuple[tuple[float, float], ...] = ()
    partly_observed: bool = False

    @property
    def duration_s(self) -> float:
        """Length of the recording. [s]"""
        return self.minutes * 60.0


BRACKEN = Animal("bracken", "F", "P140D", 0.212, "meadow_reared")
SORREL = Animal("sorrel", "M", "P151D", 0.238, "meadow_reared")
TEASEL = Animal("teasel", "F", "P133D", 0.205, "burrow_reared")

STUDY: tuple[SessionPlan, ...] = (
    SessionPlan(
        "bracken_1", BRACKEN, datetime(2025, 3, 4, 16, 5, tzinfo=UTC), 16, 30, 41.3821, 23.0, lost=0.008
    ),
    SessionPlan(
        "bracken_2",
        BRACKEN,
        datetime(2025, 3, 6, 16, 20, tzinfo=UTC),
        20,
        34,
        1873.0456,
        27.5,
        swapped=0.012,
        handling=((0.312, 0.331), (0.742, 0.754)),
    ),
    SessionPlan(
        "sorrel_1", SORREL, datetime(2025, 3, 11, 15, 50, tzinfo=UTC), 18, 32, 12.9107, -41.0, dropped=0.011
    ),
    SessionPlan(
        "sorrel_2",
        SORREL,
        datetime(2025, 3, 13, 16, 0, tzinfo=UTC),
        15,
        26,
        655.5018,
        -38.5,
        clock_jump_s=1.3712,
    ),
    SessionPlan(
        "teasel_1",
        TEASEL,
        datetime(2025, 3, 18, 16, 35, tzinfo=UTC),
        17,
        28,
        7204.2290,
        64.0,
        reflected=0.008,
    ),
    SessionPlan(
        "teasel_2",
        TEASEL,
        datetime(2025, 3, 20, 16, 15, tzinfo=UTC),
        15,
        24,
        95.7743,
        61.0,
        lost=0.025,
        partly_observed=True,
    ),
)


def plans(
    sessions: Iterable[str] | None = None, *, minutes: float | None = None, units: int | None = None
) -> tuple[SessionPlan, ...]:
    """The study's sessions, all or those named, shortened where asked.

    Raises
    ------
    ValueError
        When a session is not one of the study, or a length or a number of units cannot be simulated.
    """
    known = {plan.session: plan for plan in STUDY}
    wanted = list(known) if sessions is None else list(sessions)
    unknown = [name for name in wanted if name not in known]
    if unknown:
        raise ValueError(f"no session {', '.join(unknown)}; the study has {', '.join(known)}")
    if minutes is not None and not 0.5 <= minutes <= 240:
        raise ValueError(f"minutes is {minutes:g}; a session can be 0.5 to 240 minutes long")
    if units is not None and not 1 <= units <= 2000:
        raise ValueError(f"units is {units}; a session can have 1 to 2000 units")
    changes = {key: value for key, value in {"minutes": minutes, "units": units}.items() if value is not None}
    return tuple(replace(known[name], **changes) for name in wanted)


def generator(*words: object) -> np.random.Generator:
    """A random generator seeded by words (session, purpose, ...), the same on every machine."""
    seed = hashlib.sha256("/".join(str(word) for word in words).encode()).digest()
    return np.random.Generator(np.random.PCG64(int.from_bytes(seed[:16], "little")))


def sessions_table(all_plans: Iterable[SessionPlan] = STUDY, folder: str = "demo_data/recordings") -> str:
    """The sessions table of the study as tab-separated text."""
    lines = ["session\tnwb\tanimal\tgroup"]
    for plan in all_plans:
        lines.append(
            f"{plan.session}\t{folder}/{plan.session}.nwb\t{plan.animal.subject_id}\t{plan.animal.group}"
        )
    return "\n".join(lines) + "\n"
