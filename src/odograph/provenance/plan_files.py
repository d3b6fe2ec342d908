"""The small files that planning writes for the jobs, and what a recording looks like from outside."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping, Sequence
from typing import Any

from odograph.provenance.canonical import digest_text, readable_json
from odograph.provenance.files import write_if_changed
from odograph.provenance.layout import PLAN, plan_folder, shard_of
from odograph.provenance.survey import Request


def stamps_of(request: Request, reader: str, entry: Mapping[str, Any] | None) -> list[Any] | None:
    """What a recording and the files it links to look like from outside: path, size, time stamp, inode."""
    stamps = []
    for path in (request.nwb, *(entry["links"] if entry else ())):
        try:
            stat = os.stat(path)  # noqa: PTH116 (a plain call: this runs for every session at every start)
        except OSError:
            return None
        stamps.append([path, stat.st_size, stat.st_mtime_ns, stat.st_ino])
    return [stamps, digest_text(request.settings), reader]


def some_missing(session: str, entry: Mapping[str, Any]) -> bool:
    """Whether a plan file of a session is gone."""
    folder = str(plan_folder(session))
    return not all(os.path.exists(f"{folder}/{step}.json") for step in entry["digests"])  # noqa: PTH110


def planned_intake(session: str) -> dict[str, Any]:
    """What the plan says of a whole recording, as the survey answered."""
    return json.loads((plan_folder(session) / "intake.json").read_bytes())


def write_session(session: str, answer: Mapping[str, Any], entry: dict[str, Any], shards: int) -> None:
    """Write one session's plan files: for each job the digests of what it reads from the recording."""
    signals, units = answer.get("signals", {}), answer.get("units", {})
    documents: dict[str, Any] = {}
    if answer.get("error") is not None:
        documents["intake"] = {"error": answer["error"]}
    else:
        documents["intake"] = {"inventory": answer["inventory"], "signals": signals, "units": units}
        documents["sync"] = {"signals": _chosen(signals, ("tracking", "frame_pulses"))}
        documents["behaviour"] = {
            "signals": {name: digest for name, digest in signals.items() if name != "frame_pulses"}
        }
        for shard in range(shards):
            documents[f"shard-{shard}"] = {
                "units": {
                    unit: digest
                    for unit, digest in units.items()
                    if shard_of(session, int(unit), shards) == shard
                }
            }
    folder = plan_folder(session)
    entry["digests"] = {}
    for step, document in documents.items():
        text = readable_json(document)
        write_if_changed(folder / f"{step}.json", text)
        entry["digests"][step] = digest_text(text)
    entry["shards"] = shards


def _chosen(signals: Mapping[str, str], names: Sequence[str]) -> dict[str, str]:
    return {name: signals[name] for name in names if name in signals}


def write_source(request: Request, study: Any) -> None:
    """Tell the jobs where the recording lies and how to read it; no rule depends on this file."""
    source = {
        "nwb": request.nwb,
        "intake": json.loads(request.settings),
        "on_bad_session": study.on_bad_session,
    }
    write_if_changed(plan_folder(request.session) / "source.json", readable_json(source))


def write_study(rows: Sequence[Any], entries: Mapping[str, Mapping[str, Any]]) -> dict[str, str]:
    """Write what the population depends on besides products: who belongs to it."""
    document = {
        "sessions": [
            {
                "session": row.session,
                "animal": row.animal,
                "group": row.group,
                "settings": row.overrides,
                "readable": entries[row.session]["error"] is None,
                "shards": entries[row.session]["shards"],
            }
            for row in rows
        ]
    }
    text = readable_json(document)
    write_if_changed(PLAN / "population.json", text)
    return {"population": digest_text(text)}
