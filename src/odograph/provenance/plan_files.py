"""The small files that planning writes for the jobs, and what a recording looks like from outside."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Mapping, Sequence
from typing import Any

from odograph.errors import InputError
from odograph.provenance.canonical import digest_text, readable_json
from odograph.provenance.files import write_if_changed
from odograph.provenance.layout import PLAN, plan_folder, shard_of
from odograph.provenance.survey import Request, named_in_finding, survey

# How often a recording is read that changes meanwhile.
_READINGS = 3


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


def survey_at_rest(requests: Sequence[Request], reader: str) -> tuple[dict[str, Any], dict[str, Any]]:
    """Survey recordings; one that changes while it is read is read again.

    Returns
    -------
    tuple of dict
        By session, the answers of `survey`, and what each recording looked like when its reading began.

    Raises
    ------
    InputError
        A recording changes again and again.
    """
    answers: dict[str, Any] = {}
    before: dict[str, Any] = {}
    moving = list(requests)
    for _ in range(_READINGS):
        before |= {request.session: stamps_of(request, reader, None) for request in moving}
        answers |= survey(moving)
        moving = [
            request for request in moving if stamps_of(request, reader, None) != before[request.session]
        ]
        if not moving:
            return answers, before
        names = ", ".join(request.name for request in moving)
        print(f"odograph: {names}: changed while it was read; it is read again", file=sys.stderr)
    raise InputError(
        f"the recording changed {_READINGS} times while it was read",
        file=moving[0].name,
        expected="a recording that nobody writes to",
        remedy="wait until the file is written or copied, then run snakemake again",
    )


def told_by_address(answer: dict[str, Any], request: Request) -> dict[str, Any]:
    """An answer of the survey whose error names the address of a recording in place of its local copy."""
    if request.address is None or answer.get("error") is None:
        return answer
    return answer | {"error": named_in_finding(answer["error"], request.nwb, request.address)}


def damaged_plan_files(session: str, entry: Mapping[str, Any]) -> set[str]:
    """The steps whose plan file is gone, or is not what it was when it was written."""
    folder = str(plan_folder(session))
    return {
        step
        for step, digest in entry["digests"].items()
        if digest_text(_content(f"{folder}/{step}.json")) != digest
    }


def _content(path: str) -> str:
    try:
        with open(path, encoding="utf-8", newline="") as file:  # noqa: PTH123 (for every session at every start)
            return file.read()
    except (OSError, UnicodeDecodeError):
        return ""


def planned_intake(session: str) -> dict[str, Any]:
    """What the plan says of a whole recording, as the survey answered."""
    return json.loads((plan_folder(session) / "intake.json").read_bytes())


def write_session(session: str, answer: Mapping[str, Any], entry: dict[str, Any], shards: int) -> None:
    """Write one session's plan files: for each job the digests of what it reads from the recording."""
    signals, units = answer.get("signals", {}), answer.get("units", {})
    documents: dict[str, Any] = {}
    if answer.get("error") is not None:
        documents["intake"] = {"error": answer["error"]}
        if not answer.get("fetched", True):
            documents["intake"]["fetched"] = False
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
    if request.address is not None:
        source["address"] = request.address
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
