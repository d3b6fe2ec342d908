"""The run root: one identifier over all records of a study, to be printed in the paper or signed.

``results/root.json`` lists every record with its identifier and the digest of what it says of its products.
The root is the digest of that list. Whoever knows the root can tell whether any record, and through the
records any product, is still what it was: a record that was edited to go with an edited product has another
content. Time, host and the place of files have no part in it, so that the same work has the same root
anywhere.

The file also keeps what binds a study to this machine's files: the digests of the records' own bytes, of the
user's two files and of the recordings as they lie there.
"""

from __future__ import annotations

import os
import subprocess
from collections.abc import Iterable, Mapping
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

from odograph.errors import ChangedInputError, DamagedError, InputError, RecordError
from odograph.provenance.canonical import digest_value, readable_json
from odograph.provenance.files import file_digest, read_json, write_if_changed
from odograph.provenance.known import keep_known, read_known
from odograph.provenance.layout import PLAN, RESULTS, STORE
from odograph.provenance.places import FETCHED
from odograph.provenance.record_shape import fault_of_root
from odograph.provenance.records import read_record, told_path
from odograph.provenance.running import still_in_charge

ROOT_FORMAT = 1
ROOT = RESULTS / "root.json"
KNOWN_FILES = PLAN / "recordings.json"
USER_FILES = ("config/config.yaml",)
_KEYS = {"format", "root", "records", "user_files", "recordings", "code"}


def record_content(record: Mapping[str, Any]) -> str:
    """Digest of what a record says, without time, host and places."""
    return digest_value({"record_id": record["record_id"], "products": record["products"]})


def identify_root(records: Iterable[Mapping[str, Any]]) -> str:
    """The root, ``root:<64 hex digits>``, of entries with a record's `file`, `record_id` and `content`."""
    parts = sorted([entry["file"], entry["record_id"], entry["content"]] for entry in records)
    return "root:" + digest_value({"format": ROOT_FORMAT, "records": parts}).removeprefix("sha256:")


def all_record_files(folder: Path) -> list[Path]:
    """Every record below a study's results, sorted; store, plan and fetched recordings hold none."""
    results = folder / RESULTS
    apart = {(folder / place).resolve() for place in (STORE, PLAN, FETCHED)}
    found = []
    for at, folders, names in os.walk(results):
        folders[:] = sorted(name for name in folders if (Path(at) / name).resolve() not in apart)
        found += [Path(at) / name for name in names if is_record_name(name)]
    return sorted(found)


def is_record_name(name: str) -> bool:
    """Whether a file of this name is a record."""
    return name == "record.json" or (name.endswith(".record.json") and not name.startswith("."))


def workers() -> int:
    """Threads for digests: one for each processor this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def digests_of(paths: Iterable[Path]) -> list[str | None]:
    """Digests of many files, on all processors; None for a file that cannot be read."""

    def digest(path: Path) -> str | None:
        try:
            return file_digest(path)
        except OSError:
            return None

    with ThreadPoolExecutor(workers()) as pool:
        return list(pool.map(digest, paths))


def write_root(folder: str | Path = ".") -> str:
    """Write the root of a finished study; returns it.

    Parameters
    ----------
    folder : str or Path
        The study's folder, with `results` and `config` in it.

    Raises
    ------
    InputError
        There is no record.
    DamagedError
        A record cannot be read, or was changed after it was written.
    ChangedInputError
        A recording is not the file any more that the run was planned with.
    """
    folder = Path(folder)
    sessions = _sessions(folder)
    entries = []
    for file in all_record_files(folder):
        try:
            record = read_record(file)
        except (InputError, RecordError) as error:
            raise DamagedError(
                error.found, file=str(file), expected="a record as its job wrote it"
            ) from error
        if record["keys"].get("session") in (None, *sessions):
            entries.append({"path": file, "record": record})
    if not entries:
        raise InputError("there are no records", file=str(folder / RESULTS), remedy="run snakemake")
    records = [
        {
            "file": entry["path"].relative_to(folder).as_posix(),
            "record_id": entry["record"]["record_id"],
            "content": record_content(entry["record"]),
            "digest": digest,
        }
        for entry, digest in zip(entries, digests_of(entry["path"] for entry in entries), strict=True)
    ]
    document = {
        "format": ROOT_FORMAT,
        "root": identify_root(records),
        "records": records,
        "user_files": _user_files(folder),
        "recordings": _recordings(folder, sessions),
        "code": code_state(folder),
    }
    document["own_digest"] = digest_value(document)
    still_in_charge()
    write_if_changed(folder / ROOT, readable_json(document))
    return document["root"]


def read_root(folder: str | Path) -> dict[str, Any]:
    """Read a study's root and check that it follows from its own list.

    Raises
    ------
    InputError
        There is none, or it is no JSON.
    RecordError
        It was changed after it was written.
    """
    path = Path(folder) / ROOT
    document = read_json(path)
    fault = fault_of_root(document)
    if fault is None:
        try:
            rest = {key: value for key, value in document.items() if key != "own_digest"}
            whole = document["format"] == ROOT_FORMAT and document["root"] == identify_root(
                document["records"]
            )
            whole = whole and document["own_digest"] == digest_value(rest) and rest.keys() == _KEYS
            whole = whole and path.read_bytes() == readable_json(document).encode()
        except (TypeError, ValueError, RecursionError):
            whole = False
    if fault is not None or not whole:
        raise RecordError(
            "the run root was changed after it was written" + (f": {fault}" if fault else ""),
            file=str(path),
            expected="the list of records as snakemake wrote it",
            remedy="compare with the root that was printed; delete the file and run snakemake again",
        )
    return document


def _sessions(folder: Path) -> list[str]:
    plan = read_json(folder / PLAN / "population.json")
    return [row["session"] for row in plan["sessions"]]


def _user_files(folder: Path) -> list[dict[str, str]]:
    from odograph.settings.load import load_settings

    names = [*USER_FILES, str(load_settings(folder / USER_FILES[0]).study.sessions_table)]
    return [{"file": name, "digest": file_digest(folder / name)} for name in names]


def _recordings(folder: Path, sessions: list[str]) -> list[dict[str, Any]]:
    """Every recording and the files it links to, by their bytes; those known by their stamps are not read."""
    cache = read_json(folder / PLAN / "cache.json")["sessions"]
    known = read_known(folder / KNOWN_FILES)
    found, sources, addresses = [], {}, {}
    for session in sessions:
        source = read_json(folder / PLAN / "sessions" / session / "source.json")
        sources[session] = source["nwb"]
        addresses[source["nwb"]] = source.get("address")
        for name in (sources[session], *cache[session]["links"]):
            path = folder / name
            if path.is_file():
                stat = path.stat()
                stamp = [stat.st_size, stat.st_mtime_ns, stat.st_ino]
                _refuse_changed(str(name), stamp, cache[session]["key"])
                found.append((session, str(name), path, stamp))
    fresh = [row for row in found if known.get(row[1], {}).get("stamp") != row[3]]
    digests = dict(zip((row[1] for row in fresh), digests_of(row[2] for row in fresh), strict=True))
    now = {
        name: {"stamp": stamp, "digest": digests.get(name) or known[name]["digest"]}
        for _, name, _, stamp in found
    }
    keep_known(folder / KNOWN_FILES, now)
    return [
        {
            "session": session,
            "file": addresses.get(name) or told_path(name),
            "linked": name != sources[session],
            "bytes": stamp[0],
            "digest": now[name]["digest"],
        }
        for session, name, _, stamp in found
    ]


def _refuse_changed(name: str, stamp: list[int], key: list[Any] | None) -> None:
    """The results are those of the file that was planned with; another one must not be bound to them."""
    planned = {row[0]: row[1:] for row in (key[0] if key else ())}
    if planned.get(name, stamp) != stamp:
        raise ChangedInputError(
            "the recording changed since this run was planned",
            file=name,
            expected="the file that was there when the run began",
            remedy="run snakemake again",
        )


def code_state(folder: Path) -> dict[str, Any]:
    """The commit that the study's folder is at, and whether files that git knows were changed since."""

    def git(*arguments: str) -> str | None:
        try:
            done = subprocess.run(  # noqa: S603 (a list of fixed words and a path)
                ["git", "-C", str(folder), *arguments],  # noqa: S607 (git is where the user's PATH says)
                capture_output=True,
                text=True,
                timeout=30,
                check=True,
            )
        except (OSError, subprocess.SubprocessError):
            return None
        return done.stdout.strip()

    commit = git("rev-parse", "HEAD")
    changed = git("status", "--porcelain", "--untracked-files=no") if commit else None
    return {"commit": commit, "modified": bool(changed) if changed is not None else None}
