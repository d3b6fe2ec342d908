"""Walking the records from a product back to the signals in the recordings and the settings read."""

from __future__ import annotations

import difflib
import re
from collections import deque
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from odograph.errors import InputError, OdographError
from odograph.provenance.canonical import canonical_json
from odograph.provenance.files import file_digest
from odograph.provenance.identifier import read_record_id
from odograph.provenance.records import read_record, record_files

_CODE = re.compile(r"(?:record:)?([0-9a-f]{6,64})")


@dataclass(frozen=True)
class Start:
    """Where a trace begins.

    Parameters
    ----------
    record : dict
        The record.
    file : Path
        Where it lies.
    product : dict or None
        The entry of the product asked for, when one was.
    path : Path or None
        The file asked for.
    """

    record: dict[str, Any]
    file: Path
    product: dict[str, Any] | None = None
    path: Path | None = None


@dataclass
class Trace:
    """What stands behind a product.

    Parameters
    ----------
    start : Start
        Where it began.
    records : dict of str to dict
        All records met, by identifier, the nearest first.
    files : dict of str to Path
        Where each record lies.
    problems : list of str
        Whatever does not fit: products that changed, records that are gone.
    row : tuple of (session, unit) or None
        The one unit whose course is asked for.
    """

    start: Start
    records: dict[str, dict[str, Any]] = field(default_factory=dict)
    files: dict[str, Path] = field(default_factory=dict)
    problems: list[str] = field(default_factory=list)
    row: tuple[str, int] | None = None

    @property
    def unit(self) -> int | None:
        """The unit that was asked for, or that the product shows, when it shows one."""
        return self.row[1] if self.row else (self.start.product or {}).get("unit")

    def sources(self) -> dict[str, dict[str, Any]]:
        """By session: the recording's file, the signals and the units that were read."""
        found: dict[str, dict[str, Any]] = {}
        for record in self.records.values():
            session = record["keys"].get("session")
            for entry in record["inputs"]:
                if entry["kind"] not in ("signal", "unit"):
                    continue
                place = found.setdefault(session, {"file": entry["file"], "signals": {}, "units": {}})
                if entry["kind"] == "signal":
                    place["signals"][entry["signal"]] = {"place": entry["place"], "digest": entry["digest"]}
                elif self.unit is None or entry["unit"] == self.unit:
                    place["units"][entry["unit"]] = entry["digest"]
        return dict(sorted(found.items()))

    def settings(self) -> list[dict[str, Any]]:
        """Every setting read, with its value and the sessions it holds for (None: it is the study's)."""
        values: dict[tuple[str, str], dict[str, Any]] = {}
        for record in self.records.values():
            session = record["keys"].get("session")
            for stage, content in record["settings"].items():
                for key, value in content.items():
                    name = f"{stage}.{key}"
                    row = values.setdefault(
                        (name, canonical_json(value)), {"setting": name, "value": value, "sessions": set()}
                    )
                    row["sessions"].add(session)
        rows = []
        for _, row in sorted(values.items()):
            sessions = sorted(session for session in row["sessions"] if session is not None)
            rows.append(row | {"sessions": sessions or None})
        return rows

    def document(self) -> dict[str, Any]:
        """All of it as plain values."""
        start = self.start
        return {
            "schema_version": 1,
            "record_id": start.record["record_id"],
            "product": start.product,
            "records": [
                record | {"file": self.files[name].as_posix()} for name, record in self.records.items()
            ],
            "sources": [{"session": session} | facts for session, facts in self.sources().items()],
            "settings": self.settings(),
            "problems": self.problems,
        }


def find_start(target: str, results: Path) -> Start:
    """Find the record that a trace of `target` begins with.

    Parameters
    ----------
    target : str
        A figure, table or page; a record file; or an identifier or its first six digits or more.
    results : Path
        The folder of the results.

    Raises
    ------
    InputError
        When nothing is found.
    """
    path = Path(target)
    if path.is_file():
        return _start_from_file(path, results)
    code = _CODE.fullmatch(target.strip().lower())
    if code is None:
        raise InputError(
            "there is no such file, and it is no record's identifier either",
            file=target,
            expected="a figure, a table, a record, or the digits in the margin of a figure",
            remedy=_near_files(path, results),
        )
    matches = {
        record["record_id"]: Start(record, file)
        for file, record in _all_records(results)
        if record["record_id"].removeprefix("record:").startswith(code.group(1))
    }
    if len(matches) != 1:
        found = (
            f"{len(matches)} records begin with {code.group(1)}"
            if matches
            else "no record has this identifier"
        )
        raise InputError(
            found,
            file=str(results),
            expected="the identifier of one record",
            remedy="give more digits"
            if matches
            else "name the folder of the results with --results; the figure may be of an earlier run",
        )
    return next(iter(matches.values()))


def trace(start: Start, results: Path) -> Trace:
    """Follow the records from the start to the recordings.

    Parameters
    ----------
    start : Start
        From `find_start`.
    results : Path
        The folder of the results.

    Returns
    -------
    Trace
        Problems are told in it, not raised.
    """
    base = results.resolve().parent
    found = Trace(start)
    if (
        start.product is not None
        and start.path is not None
        and file_digest(start.path) != start.product["digest"]
    ):
        found.problems.append(f"{start.path} was changed after its record was written")
    waiting = deque([(start.file, start.record)])
    while waiting:
        file, record = waiting.popleft()
        if record["record_id"] in found.records:
            continue
        found.records[record["record_id"]] = record
        found.files[record["record_id"]] = file
        for entry in record["inputs"]:
            if entry["kind"] == "product":
                _check_product(base, entry, found)
                before = _producer(base, entry, found)
                if before is not None:
                    waiting.append(before)
    return found


def of_row(found: Trace, session: str, unit: int) -> Trace:
    """The part of a trace that leads to one unit: a point of a figure, a row of a table.

    Parameters
    ----------
    found : Trace
        From `trace`.
    session : str
    unit : int

    Raises
    ------
    InputError
        Nothing on the way read this unit.
    """

    def reads(record: Mapping[str, Any]) -> bool:
        return any(entry["kind"] == "unit" and entry["unit"] == unit for entry in record["inputs"])

    kept = {}
    for name, record in found.records.items():
        own = record["keys"].get("session")
        if own is None or (own == session and (record["rule"] != "encoding" or reads(record))):
            kept[name] = record
    if not any(reads(record) for record in kept.values() if record["keys"].get("session") == session):
        known = {record["keys"].get("session") for record in found.records.values()} - {None}
        raise InputError(
            f"unit {unit} of session {session} was not read on the way to it",
            file=str(found.start.path or found.start.file),
            expected="a unit of a session that stands behind it"
            if session in known
            else f"one of the sessions {', '.join(sorted(known))}",
            remedy="look the unit up in results/population/units.tsv",
        )
    return Trace(found.start, kept, found.files, found.problems, (session, unit))


def _start_from_file(path: Path, results: Path) -> Start:
    if path.name.endswith("record.json"):
        return Start(read_record(path), path, None, path)
    for file in record_files(path.parent):
        record = read_record(file)
        for product in record["products"]:
            if Path(product["path"]).name == path.name:
                return Start(record, file, product, path)
    record_id = read_record_id(path)
    digest = file_digest(path)
    for file, record in _all_records(results):
        for product in record["products"]:
            if product["digest"] == digest:
                return Start(record, file, product, path)
        if record["record_id"] == record_id:
            return Start(record, file, None, path)
    if record_id is not None:
        raise InputError(
            f"its record {record_id.removeprefix('record:')[:12]} is not among these results",
            file=str(path),
            place=str(results),
            expected="the results that it was made with",
            remedy="name the results it was made with by --results; or it was made by an earlier run",
        )
    raise InputError(
        "it carries no identifier of a record and is no product of these results",
        file=str(path),
        expected="a figure, table or page made by odograph",
        remedy="name the folder of the results with --results",
    )


def _producer(base: Path, entry: Mapping[str, Any], found: Trace) -> tuple[Path, dict[str, Any]] | None:
    """The record that made an input."""
    wanted, path = entry["producer"], base / entry["path"]
    if wanted is None:
        found.problems.append(f"{entry['path']} had no record when it was read")
        return None
    if wanted in found.records:
        return None
    for file in record_files(path.parent):
        try:
            record = read_record(file)
        except OdographError as error:
            found.problems.append(str(error))
            continue
        if record["record_id"] == wanted:
            return file, record
    found.problems.append(
        f"the record {wanted.removeprefix('record:')[:12]} that made {entry['path']} is gone: "
        "it was made again since, or deleted"
    )
    return None


def _check_product(base: Path, entry: Mapping[str, Any], found: Trace) -> None:
    path = base / entry["path"]
    if not path.is_file():
        found.problems.append(f"{entry['path']} is gone")
    elif file_digest(path) != entry["digest"]:
        found.problems.append(f"{entry['path']} changed since it was read")


def _all_records(results: Path) -> Iterator[tuple[Path, dict[str, Any]]]:
    for file in sorted(results.rglob("*record.json")):
        if file.name == "record.json" or file.name.endswith(".record.json"):
            yield file, read_record(file)


def _near_files(path: Path, results: Path) -> str:
    names = [str(file) for file in results.rglob("*") if file.is_file() and "plan" not in file.parts[:2]]
    near = difflib.get_close_matches(str(path), names, n=1, cutoff=0.6)
    return f"did you mean {near[0]}?" if near else "look for it in the folder of the results"
