"""Planning before the graph: what does each recording hold now, and does that differ from the last time.

When the workflow is parsed, every recording is looked at by its size and time stamps. Only where these
moved is it read and are its signals and units digested. The digests go to small files under
``results/plan/``, one for each job, written only when their content changed. A job depends on its plan
file, on the digest of that file (as a param of its rule), on the settings that it reads and on the
fingerprint of its code: those say everything that can change its result, and nothing else does.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from odograph.errors import InputError
from odograph.provenance.canonical import canonical_json
from odograph.provenance.effort import NO_EFFORT, Effort, SettledShards, megabytes, minutes, session_effort
from odograph.provenance.fingerprint import code_fingerprint
from odograph.provenance.known import keep_known, read_known
from odograph.provenance.layout import PLAN, shard_of
from odograph.provenance.places import local_place
from odograph.provenance.plan_files import (
    damaged_plan_files,
    planned_intake,
    stamps_of,
    survey_at_rest,
    told_by_address,
    write_session,
    write_source,
    write_study,
)
from odograph.provenance.survey import Request
from odograph.settings.addresses import is_address
from odograph.settings.all import Settings
from odograph.settings.load import load_settings, read_sessions, resolve_session

STEPS = (
    "intake",
    "sync",
    "behaviour",
    "encoding",
    "cards",
    "session_quality",
    "population",
    "population_figures",
    "report",
    "root",
)
#: The settings that each step reads.
STAGES_READ = {
    "intake": ("intake",),
    "sync": ("sync",),
    "behaviour": ("behaviour",),
    "encoding": ("encoding",),
    "cards": ("figures",),
    "session_quality": ("figures",),
    "population": ("population",),
    "population_figures": ("figures",),
    "root": (),
    "report": ("study", "intake", "sync", "behaviour", "encoding", "population", "figures"),
}
_CACHE_FORMAT = 3
_READER = "odograph.steps.survey_recordings"


@dataclass(frozen=True)
class Plan:
    """What the rules need to know; made by `make_plan`.

    Parameters
    ----------
    sessions : tuple of str
        All sessions of the table, sorted.
    unreadable : mapping of str to dict
        The finding that tells why, for each session whose recording cannot be used.
    shards : mapping of str to int
        Jobs that the units of a session are spread over, by session.
    digests : mapping of str to str
        Digest of every plan file, by ``session/step``.
    settings : mapping of str to str
        Settings of every step as canonical JSON, by ``session/step`` or ``step``.
    code : mapping of str to str
        Code fingerprint of every step.
    origins : mapping of str to dict
        By session: ``animal`` and ``regions`` of its units.
    efforts : mapping of str to Effort
        The size of the work, by session.
    """

    sessions: tuple[str, ...]
    unreadable: Mapping[str, Mapping[str, Any]]
    shards: Mapping[str, int]
    digests: Mapping[str, str]
    settings: Mapping[str, str]
    code: Mapping[str, str]
    figure_formats: tuple[str, ...] = field(default=("png",))
    origins: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    efforts: Mapping[str, Effort] = field(default_factory=dict)

    @property
    def readable(self) -> tuple[str, ...]:
        """The sessions whose recording can be used."""
        return tuple(session for session in self.sessions if session not in self.unreadable)

    def origin_of(self, session: str, shard: int) -> str:
        """The animal of a session and the regions of a shard's units, as canonical JSON."""
        origin = self.origins[session]
        regions = {
            unit: region
            for unit, region in origin["regions"].items()
            if shard_of(session, int(unit), self.shards[session]) == shard
        }
        return canonical_json({"animal": origin["animal"], "regions": regions})

    @property
    def units(self) -> int:
        """The units of the whole study."""
        return sum(effort.units for effort in self.efforts.values())

    def megabytes(self, step: str, session: str | None = None) -> int:
        """Memory to ask a cluster for."""
        return megabytes(step, self._effort_of(session), len(self.sessions), self.units)

    def minutes(self, step: str, session: str | None = None) -> int:
        """Time to ask a cluster for."""
        return minutes(step, self._effort_of(session), self.shards.get(session or "", 1), self.units)

    def _effort_of(self, session: str | None) -> Effort:
        return self.efforts.get(session or "", NO_EFFORT)

    def settings_of(self, step: str, session: str | None = None) -> str:
        """The settings a step reads, as canonical JSON."""
        return self.settings[f"{session}/{step}" if session is not None else step]


def make_plan(
    config: Mapping[str, Any],
    *,
    main_process: bool = True,
    config_file: str | None = None,
    fetch: Callable[[Sequence[str]], Mapping[str, Mapping[str, Any]]] | None = None,
) -> Plan:
    """Look at every recording and write what changed to ``results/plan/``.

    Parameters
    ----------
    config : mapping
        The configuration, as the workflow engine parsed it.
    main_process : bool
        False in a job that parses the workflow again, and in a look beside a run: then nothing is read anew,
        nothing is written, and sessions that are new in the table are left out.
    config_file : str, optional
        The file that the configuration came from, to name its lines in errors.
    fetch : callable, optional
        Brings the local copies of recordings up to date, given their addresses; returns a finding for each
        address that there is no copy of. Called when the sessions table names addresses.

    Returns
    -------
    Plan

    Raises
    ------
    SettingsError
        When the configuration or the sessions table cannot be used.
    """
    settings = load_settings(config, file=config_file)
    table = settings.study.sessions_table
    rows = sorted(read_sessions(table), key=lambda row: row.session)
    own = {
        row.session: resolve_session(settings, row.overrides, session=row.session, file=table)
        if any(text.strip() for text in row.overrides.values())
        else settings
        for row in rows
    }
    cache = _read_cache()
    code = {step: code_fingerprint(f"odograph.steps.{step}", cache["code"]) for step in STEPS}
    if main_process:
        intake = {id(model): canonical_json(model.intake) for model in own.values()}
        addresses = {row.session: row.nwb for row in rows if is_address(row.nwb)}
        lost = fetch(sorted(addresses.values())) if fetch and addresses else {}
        requests = [
            Request(name, local_place(row.nwb), intake[id(own[name])], addresses.get(name))
            for row in rows
            for name in (row.session,)
        ]
        cache = _refresh(requests, cache, own, rows, lost)
    else:
        rows = [row for row in rows if row.session in cache["sessions"]]
        own = {row.session: own[row.session] for row in rows}
    sessions = cache["sessions"]
    digests = {
        f"{session}/{step}": digest
        for session, entry in sessions.items()
        for step, digest in entry["digests"].items()
    } | cache["study"]
    return Plan(
        sessions=tuple(row.session for row in rows),
        unreadable={name: entry["error"] for name, entry in sessions.items() if entry["error"] is not None},
        shards={name: entry["shards"] for name, entry in sessions.items()},
        digests=digests,
        settings=_settings_texts(settings, own),
        code=code,
        figure_formats=tuple(settings.figures.formats),
        origins={
            row.session: {
                "animal": row.animal or sessions.get(row.session, {}).get("animal"),
                "regions": sessions.get(row.session, {}).get("regions", {}),
            }
            for row in rows
        },
        efforts={
            row.session: _effort(own[row.session], sessions[row.session])
            for row in rows
            if row.session in sessions
        },
    )


def use_this_python() -> None:
    """Put the folder of the Python that runs this first in PATH, so that jobs call the same one."""
    folder = str(Path(sys.executable).parent)
    path = os.environ.get("PATH", "")
    if path.split(os.pathsep)[0] != folder:
        os.environ["PATH"] = os.pathsep.join([folder, path])


def _settings_texts(settings: Any, own: Mapping[str, Any]) -> dict[str, str]:
    """The settings of every step; equal models are written out once, since most sessions share them."""
    written: dict[tuple[int, str], str] = {}

    def text(model: Any, step: str) -> str:
        if (id(model), step) not in written:
            read = {stage: getattr(model, stage) for stage in STAGES_READ[step]}
            if step == "population":
                read["study"] = {"on_bad_session": model.study.on_bad_session}
            written[id(model), step] = canonical_json(read)
        return written[id(model), step]

    texts = {step: text(settings, step) for step in STEPS}
    for session, model in own.items():
        for step in ("intake", "sync", "behaviour", "encoding", "cards", "session_quality"):
            texts[f"{session}/{step}"] = text(model, step)
    return texts


# The cache of what is known


def _read_cache() -> dict[str, Any]:
    cache = read_known(PLAN / "cache.json")
    if cache.get("format") == _CACHE_FORMAT:
        return cache
    return {"format": _CACHE_FORMAT, "code": {}, "sessions": {}, "study": {}}


def _refresh(
    requests: Sequence[Request],
    cache: dict[str, Any],
    own: Mapping[str, Settings],
    rows: Sequence[Any],
    lost: Mapping[str, Mapping[str, Any]],
) -> dict[str, Any]:
    """Survey the recordings that moved, and write the plan files whose content changed."""
    reader = code_fingerprint(_READER, cache["code"])
    settled = SettledShards()
    known = cache["sessions"]
    keys = {request.session: stamps_of(request, reader, known.get(request.session)) for request in requests}
    damaged = {session: damaged_plan_files(session, entry) for session, entry in known.items()}
    moved = [
        request
        for request in requests
        if (entry := known.get(request.session)) is None
        or entry["key"] != keys[request.session]
        or entry["key"] is None
        or "intake" in damaged[request.session]
    ]
    gone = {
        request.session: _not_fetched(request, lost) if request.address else _no_file(request)
        for request in moved
        if not Path(request.nwb).is_file()
    }
    answers, read = survey_at_rest([request for request in moved if request.session not in gone], reader)
    answers |= gone
    entries = {}
    for request in requests:
        session = request.session
        if session in answers:
            answer = told_by_address(answers[session], request)
            entry = {"error": answer.get("error"), "links": answer.get("links", []), "shards": None}
            entry |= {"animal": answer.get("animal"), "regions": answer.get("regions", {})}
            entry |= {"units": len(answer.get("units", {})), "duration_s": answer.get("duration_s")}
            at_rest = read.get(session) == stamps_of(request, reader, None)
            entry["key"] = (
                stamps_of(request, reader, entry) if at_rest and answer.get("settled", True) else None
            )
        else:
            answer, entry = None, dict(known[session])
        study, shards = own[session].study, 1
        if entry["error"] is None:
            shards = settled.of(session, study, _effort(own[session], entry))
        if answer is not None or entry["shards"] != shards or damaged[session]:
            write_session(session, answer or planned_intake(session), entry, shards)
        write_source(request, study)
        entries[session] = entry
    fresh = {
        "format": _CACHE_FORMAT,
        "code": cache["code"],
        "sessions": entries,
        "study": write_study(rows, entries),
    }
    keep_known(PLAN / "cache.json", fresh)
    settled.keep()
    _tell_unreadable(entries, study.on_bad_session)
    return fresh


def _effort(settings: Settings, entry: Mapping[str, Any]) -> Effort:
    return session_effort(settings, entry["units"], entry["duration_s"])


def _no_file(request: Request) -> dict[str, Any]:
    error = InputError(
        "there is no such file",
        file=request.nwb,
        expected="an NWB file",
        remedy="correct the path in the sessions table; it is relative to the folder the workflow is run in",
    )
    return {"error": error.finding() | {"file": request.nwb}, "settled": False}


def _not_fetched(request: Request, lost: Mapping[str, Mapping[str, Any]]) -> dict[str, Any]:
    error = lost.get(request.name) or InputError(
        "the recording was not fetched",
        expected="its copy from object storage",
        remedy="run the workflow with snakemake, which fetches it",
    ).finding() | {"file": request.name}
    return {"error": error, "settled": False, "fetched": False}


def _tell_unreadable(entries: Mapping[str, Mapping[str, Any]], on_bad_session: str) -> None:
    """Name the recordings that cannot be used; when the study says `stop`, that ends the planning."""
    bad = {session: entry["error"] for session, entry in entries.items() if entry["error"] is not None}
    told = []
    for session, finding in sorted(bad.items())[:5]:
        where = f"{finding['file']}: " if finding.get("file") else ""
        told.append(f"session {session} cannot be used: {where}{finding['found']}")
    if len(bad) > 5:
        told.append(f"and {len(bad) - 5} more of {len(entries)} sessions")
    if bad and on_bad_session == "stop":
        raise InputError(
            "; ".join(told),
            expected="recordings that can be used, since study.on_bad_session is stop",
            remedy="mend them, take them out of the sessions table, or set study.on_bad_session to leave_out",
        )
    for line in told:
        print(f"odograph: {line}", file=sys.stderr)
