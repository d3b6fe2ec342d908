"""What the jobs of a session will take, known before they run: time, memory, and from these the shards.

The figures are measured ones (`tests/benchmarks/encoding_speed.py`, the demo study), rounded up. They decide
how work is divided and what a cluster is asked for, never a result.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from odograph.errors import InputError
from odograph.provenance.canonical import readable_json
from odograph.provenance.files import read_json, write_if_changed
from odograph.provenance.layout import PLAN
from odograph.settings.all import Settings

MOST_SHARDS = 64
#: One unit: what does not grow with the session, and seconds per analysis bin with three terms.
_UNIT_S, _UNIT_AND_BIN_S = 0.15, 4.2e-6
#: A spike history makes rows of its own for every unit.
_HISTORY_TIMES = 3.0
_CARD_S = 0.6
#: Memory: libraries and compiled code, and what grows with the bins.
_FIT_MB, _FIT_BIN_MB, _HISTORY_BIN_MB = 400.0, 1.5e-4, 6e-4
_READ_MB, _READ_BIN_MB = 400.0, 1e-3
#: The engine starts again inside every job of a cluster, and reads the plan of the whole study.
_ENGINE_MB, _ENGINE_SESSION_MB = 250.0, 0.5
_POPULATION_MB, _POPULATION_UNIT_MB = 1000.0, 0.06
_SPARE = 1.5
_LEAST_MINUTES = 10


@dataclass(frozen=True)
class Effort:
    """The size of one session's work.

    Parameters
    ----------
    units : int
        Units that are analysed.
    bins : int
        Analysis bins.
    models : int
        Candidate models, 2 to the power of the terms, less one.
    history : bool
        Whether every model has a spike history.
    """

    units: int
    bins: int
    models: int
    history: bool

    @property
    def fit_seconds(self) -> float:
        """One core's time for the fits of all units."""
        times = (1.0 + self.models / 7.0) / 2.0 * (_HISTORY_TIMES if self.history else 1.0)
        return self.units * (_UNIT_S + _UNIT_AND_BIN_S * self.bins * times)

    @property
    def fit_megabytes(self) -> float:
        """Memory of a job that fits, whatever the number of its units."""
        return _FIT_MB + self.bins * (_FIT_BIN_MB + (_HISTORY_BIN_MB if self.history else 0.0))


NO_EFFORT = Effort(units=0, bins=0, models=1, history=False)


def session_effort(settings: Settings, units: int, duration_s: float | None) -> Effort:
    """The size of a session's work from what planning knows of its recording.

    Parameters
    ----------
    settings : Settings
        Of the session.
    units : int
        Units that are analysed.
    duration_s : float or None
        From the first to the last tracked sample; None where nothing was tracked.
    """
    return Effort(
        units=units,
        bins=math.ceil((duration_s or 0.0) / settings.behaviour.bin_s),
        models=2 ** len(settings.encoding.terms) - 1,
        history=settings.encoding.history_s > 0,
    )


def shards_for(effort: Effort, minutes: float) -> int:
    """The number of shards whose fits take about `minutes` each."""
    return min(max(math.ceil(effort.fit_seconds / (60.0 * minutes)), 1), MOST_SHARDS)


# What a job asks a cluster for


def megabytes(step: str, effort: Effort, sessions: int, units: int) -> int:
    """Memory to ask for, the engine inside the job included.

    Parameters
    ----------
    step : str
        Name of the step.
    effort : Effort
        Of the job's session; of an empty one for jobs of the whole study.
    sessions, units : int
        Of the whole study.
    """
    if step in ("encoding", "cards"):
        own = effort.fit_megabytes
    elif step in ("population", "population_figures", "report", "root"):
        own = _POPULATION_MB + _POPULATION_UNIT_MB * units
    else:
        own = _READ_MB + _READ_BIN_MB * effort.bins
    return math.ceil(_SPARE * (own + _ENGINE_MB + _ENGINE_SESSION_MB * sessions) / 100.0) * 100


def minutes(step: str, effort: Effort, shards: int, units: int) -> int:
    """Time to ask for: several times what is predicted, and never so little that a slow disk decides."""
    seconds = {
        "encoding": effort.fit_seconds / shards,
        "cards": _CARD_S * effort.units / shards,
        "population": 0.01 * units,
        "report": 0.1 * units,
    }.get(step, 60.0)
    return _LEAST_MINUTES + math.ceil(4.0 * seconds / 60.0)


# The number of shards, settled once


class SettledShards:
    """Into how many shards each session is divided: settled when it is first planned, and kept.

    A session keeps its number when units come and go, so that none of them moves to another shard. Another
    target time settles all of them anew, a number that is asked for goes before it; neither costs a fit, as
    fits are kept by unit. The numbers lie in ``results/plan/shards.json``; without it they are settled anew.
    """

    file = PLAN / "shards.json"

    def __init__(self) -> None:
        try:
            kept = read_json(self.file)
            self._kept = {
                session: {"shards": int(entry["shards"]), "minutes": entry["minutes"]}
                for session, entry in kept.items()
                if 1 <= int(entry["shards"]) <= MOST_SHARDS
            }
        except (InputError, ValueError, KeyError, TypeError, AttributeError):
            self._kept = {}

    def of(self, session: str, study: Any, effort: Effort) -> int:
        """The number of one session."""
        if study.shards_per_session is not None:
            return study.shards_per_session
        kept = self._kept.get(session)
        if kept is None or kept["minutes"] not in (None, study.shard_minutes):
            kept = {"shards": shards_for(effort, study.shard_minutes), "minutes": study.shard_minutes}
            self._kept[session] = kept
        return kept["shards"]

    def keep(self) -> None:
        """Write the numbers, those of sessions that are out of the table for now among them."""
        write_if_changed(self.file, readable_json(self._kept))


def keep_shards_of(results: Path, study: Path) -> None:
    """Give a study the shards of finished results, whatever it would settle on itself.

    An analysis that is run again from its archive has the same records only if it is divided as it was.

    Parameters
    ----------
    results : Path
        A folder of finished results.
    study : Path
        The folder of the study that is to be run.
    """
    shards: dict[str, int] = {}
    for record in results.glob("sessions/*/encoding/shard-*/record.json"):
        session = record.parents[2].name
        shards[session] = shards.get(session, 0) + 1
    kept = {session: {"shards": number, "minutes": None} for session, number in shards.items()}
    write_if_changed(study / SettledShards.file, readable_json(kept))
