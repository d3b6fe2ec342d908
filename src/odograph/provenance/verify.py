"""Is a finished study still what its records say? Every digest is computed again.

The chain has four links: the run root names every record; a record names its products and inputs by digest
and by the record that made them; the first records name the signals and units of the recordings, whose files
the root names by their bytes; the settings and the code that a record names are compared with those that are
there. A change anywhere breaks a link; one that was hidden by editing a record breaks the link before.
"""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from odograph.errors import InputError, OdographError
from odograph.provenance.canonical import canonical_json
from odograph.provenance.fingerprint import code_fingerprint
from odograph.provenance.identifier import read_record_id
from odograph.provenance.layout import PLAN, RESULTS, STORE
from odograph.provenance.places import FETCHED, local_place
from odograph.provenance.plan import STAGES_READ
from odograph.provenance.records import read_record
from odograph.provenance.root import (
    ROOT,
    all_record_files,
    digests_of,
    is_record_name,
    read_root,
    record_content,
)
from odograph.settings.addresses import is_address

_CARRY_IDENTIFIER = (".png", ".svg", ".pdf", ".html")
# The syntax trees of this package's modules: they are what runs here, whatever happens to their files.
_MODULES: dict[str, Any] = {}
_OTHER_FILES = frozenset({ROOT.name})


@dataclass(frozen=True)
class Breach:
    """One thing that does not hold.

    Parameters
    ----------
    file : str
        The file at fault, relative to the study's folder.
    found : str
        What is wrong with it.
    meaning : str
        What that means for the results, or what to do.
    damaged : tuple of str
        Files of the results whose removal makes the next run make them again.
    """

    file: str
    found: str
    meaning: str
    damaged: tuple[str, ...] = ()


@dataclass
class Verification:
    """What was checked and what does not hold.

    Parameters
    ----------
    root : str or None
        The run root, when there is one that follows from its own list.
    breaches : list of Breach
        Sorted by file.
    records, products, recordings : int
        How many were checked.
    bytes_read : int
        Bytes digested.
    code : dict or None
        The commit that the run was made at, and whether files that git knows were changed (`modified`).
    """

    root: str | None = None
    code: dict[str, Any] | None = None
    breaches: list[Breach] = field(default_factory=list)
    records: int = 0
    products: int = 0
    recordings: int = 0
    bytes_read: int = 0

    @property
    def damaged(self) -> list[str]:
        """Files whose removal makes the next run make again what does not hold, sorted.

        The run root is among them, since it is what asks for every record.
        """
        files = {file for breach in self.breaches for file in breach.damaged}
        return sorted(files | {ROOT.as_posix()} if files else files)

    def add(self, file: str | Path, found: str, meaning: str, damaged: Iterable[str] = ()) -> None:
        """Note a breach."""
        breach = Breach(
            str(file) if is_address(file) else Path(file).as_posix(), found, meaning, tuple(damaged)
        )
        if breach not in self.breaches:
            self.breaches.append(breach)


def verify(folder: str | Path = ".", *, recordings: bool = True) -> Verification:
    """Check a study's folder: its root, records, products, settings, code and recordings.

    Parameters
    ----------
    folder : str or Path
        The study's folder, with `results` and `config` in it; also the payload of an unpacked archive.
    recordings : bool
        Whether the recordings' bytes are read, too.

    Raises
    ------
    InputError
        There are no results.
    """
    folder = Path(folder)
    if not (folder / RESULTS).is_dir():
        raise InputError(
            "there are no results",
            file=str(folder / RESULTS),
            expected="the folder of a study that was run",
            remedy="name the folder that holds `results`",
        )
    found = Verification()
    records = _check_records(folder, found)
    _check_products(folder, records, found)
    _check_strangers(folder, records, found)
    _check_settings(folder, records, found)
    _check_code(records, found)
    if recordings:
        _check_recordings(folder, found)
    found.breaches.sort(key=lambda breach: (breach.file, breach.found))
    return found


def _check_records(folder: Path, found: Verification) -> dict[str, dict[str, Any]]:
    """The records, by file, that can be read; the root's list of them is checked against what is there."""
    files = [path.relative_to(folder).as_posix() for path in all_record_files(folder)]
    listed = _listed_records(folder, found)
    digests = dict(zip(files, digests_of(folder / name for name in files), strict=True))
    records = {}
    for name in files:
        found.records += 1
        found.bytes_read += (folder / name).stat().st_size
        entry = listed.get(name)
        try:
            record = read_record(folder / name)
        except OdographError as error:
            found.add(
                name, f"the record cannot be trusted: {error.found}", "its products cannot be traced", (name,)
            )
            continue
        records[name] = record
        if entry is None:
            if listed:
                found.add(name, "the run root does not list this record", "it was added since", (str(ROOT),))
        elif entry["record_id"] != record["record_id"] or entry["content"] != record_content(record):
            meaning = _rerun("it was edited")
            found.add(
                name, "the record says something else than when the run ended", meaning, (name, str(ROOT))
            )
        elif entry["digest"] != digests[name]:
            found.add(
                name, "the record's bytes changed, though not what it says of the results", "it was edited"
            )
    for name in sorted(set(listed) - set(files)):
        found.add(name, "the record is gone", _rerun("its products cannot be traced"), (str(ROOT),))
    return records


def _rerun(what: str) -> str:
    return f"{what}; its job has to run again"


def _listed_records(folder: Path, found: Verification) -> dict[str, dict[str, Any]]:
    try:
        document = read_root(folder)
    except OdographError as error:
        found.add(ROOT, error.found, error.remedy or "run snakemake again", (ROOT.as_posix(),))
        return {}
    found.root, found.code = document["root"], document["code"]
    for row, digest in zip(
        document["user_files"],
        digests_of(folder / row["file"] for row in document["user_files"]),
        strict=True,
    ):
        if digest is None:
            found.add(row["file"], "the file is gone", "the run cannot be repeated without it")
        elif digest != row["digest"]:
            found.add(
                row["file"],
                "the file is not the one of the run",
                "see below for settings that differ, if any",
            )
    return {row["file"]: row for row in document["records"]}


def _check_products(folder: Path, records: Mapping[str, dict[str, Any]], found: Verification) -> None:
    """Products by digest and identifier, and inputs by the products and records that they came from."""
    made: dict[str, tuple[str, str, str]] = {}
    for name, record in records.items():
        for product in record["products"]:
            made[product["path"]] = (product["digest"], record["record_id"], name)
    paths = sorted(made)
    for path, digest in zip(paths, digests_of(folder / path for path in paths), strict=True):
        wanted, record_id, name = made[path]
        found.products += 1
        if digest is None:
            found.add(path, "the product is gone", f"the job of {name} has to run again", (name,))
            continue
        found.bytes_read += (folder / path).stat().st_size
        if digest != wanted:
            meaning = f"it was changed after {name} was written"
            found.add(path, "the product is not what its record says", meaning, (path, name))
        elif Path(path).suffix in _CARRY_IDENTIFIER and read_record_id(folder / path) != record_id:
            meaning = f"its record is {name}"
            found.add(path, "it carries the identifier of another record", meaning, (path, name))
    known = {record["record_id"] for record in records.values()}
    for name, record in records.items():
        for entry in record["inputs"]:
            if entry["kind"] == "product":
                _check_input(name, entry, made, known, found)


def _check_input(
    name: str,
    entry: Mapping[str, Any],
    made: Mapping[str, tuple[str, str, str]],
    known: set[str],
    found: Verification,
) -> None:
    path, maker = entry["path"], made.get(entry["path"])
    if maker is None:
        found.add(path, f"no record says that it made this input of {name}", "it cannot be traced further")
    elif entry["digest"] != maker[0] or entry["producer"] not in known:
        found.add(
            name,
            f"it was made from another {path} than is there now",
            _rerun("inputs and results differ"),
            (name,),
        )


def _check_strangers(folder: Path, records: Mapping[str, dict[str, Any]], found: Verification) -> None:
    """Files among the results that no record knows."""
    known = {product["path"] for record in records.values() for product in record["products"]}
    unread = {breach.file for breach in found.breaches}
    apart = {(folder / place).resolve() for place in (STORE, PLAN, FETCHED)}
    for at, folders, names in os.walk(folder / RESULTS):
        folders[:] = [name for name in folders if (Path(at) / name).resolve() not in apart]
        # Without its record a product is a stranger; the record that cannot be read says so already.
        hidden = any(
            Path(file).parent.as_posix() == _relative(at, folder) for file in unread if _is_record(file)
        )
        for name in names:
            path = f"{_relative(at, folder)}/{name}"
            if path not in known and not is_record_name(name) and name not in _OTHER_FILES and not hidden:
                found.add(
                    path, "no record knows this file", "it is no result of the run; delete it or move it away"
                )


def _relative(at: str, folder: Path) -> str:
    return Path(at).relative_to(folder).as_posix()


def _is_record(file: str) -> bool:
    return is_record_name(Path(file).name)


def _check_settings(folder: Path, records: Mapping[str, dict[str, Any]], found: Verification) -> None:
    """The settings that the records name against those of the user's files now."""
    from odograph.settings.load import load_settings, read_sessions, resolve_session

    config = folder / "config" / "config.yaml"
    try:
        study = load_settings(config)
        table = study.study.sessions_table
        rows = {row.session: row for row in read_sessions(folder / table)}
    except OdographError as error:
        found.add(
            error.file or "config/config.yaml", f"the settings cannot be read: {error.found}", "see there"
        )
        return
    own: dict[str | None, dict[str, Any]] = {None: study.model_dump(mode="json")}
    for record in records.values():
        session = record["keys"].get("session")
        if session is not None and session not in rows:
            found.add(
                table, f"session {session} has results but is not in the table", "it was taken out since"
            )
            continue
        if session not in own:
            own[session] = resolve_session(study, rows[session].overrides).model_dump(mode="json")
        for name, was, now in _differences(record["settings"], own[session]):
            in_table = session is not None and name in rows[session].overrides
            place, whose = (table, f" of session {session}") if in_table else ("config/config.yaml", "")
            found.add(place, f"{name}{whose} is {now}; the run was made with {was}", "run snakemake again")


def _differences(then: Mapping[str, Any], now: Mapping[str, Any]) -> Iterator[tuple[str, str, str]]:
    for stage, values in then.items():
        for key, value in values.items():
            current = now.get(stage, {}).get(key)
            if canonical_json(value) != canonical_json(current):
                yield f"{stage}.{key}", canonical_json(value), canonical_json(current)


def _check_code(records: Mapping[str, dict[str, Any]], found: Verification) -> None:
    """The code that the records name against the one that runs here."""
    now: dict[str, str] = {}
    for record in records.values():
        rule = record["rule"]
        if rule not in STAGES_READ:
            continue
        if rule not in now:
            now[rule] = code_fingerprint(f"odograph.steps.{rule}", _MODULES)
        if record["code"].get(rule) != now[rule]:
            found.add(
                f"src/odograph/steps/{rule}.py",
                f"the code of {rule} is not the one of the run",
                "use the version that the records name, or run snakemake again",
            )


def _check_recordings(folder: Path, found: Verification) -> None:
    """The recordings' bytes; of a file that differs, whether what was read from it differs as well."""
    try:
        rows = read_root(folder)["recordings"]
    except OdographError:
        return
    paths = [folder / name for name in _present_places(folder, rows)]
    for row, path, digest in zip(rows, paths, digests_of(paths), strict=True):
        found.recordings += 1
        if digest is None:
            found.add(
                row["file"],
                f"the recording of session {row['session']} is not there",
                "put it there, or correct its path in the sessions table and run snakemake again "
                "(nothing is computed again when its content is the same)",
            )
            continue
        found.bytes_read += path.stat().st_size
        if digest != row["digest"]:
            found.add(
                row["file"],
                f"the recording of session {row['session']} is not the file that was read",
                "run snakemake: what was read from it and differs is computed again, and nothing else",
            )


def _present_places(folder: Path, rows: list[dict[str, Any]]) -> list[str]:
    """Where the recordings lie now: a session's own where the sessions table says."""
    from odograph.settings.load import load_settings, read_sessions

    try:
        table = load_settings(folder / "config" / "config.yaml").study.sessions_table
        now = {row.session: row.nwb for row in read_sessions(folder / table)}
    except OdographError:
        now = {}
    return [
        local_place(row["file"] if row["linked"] else now.get(row["session"], row["file"])) for row in rows
    ]
