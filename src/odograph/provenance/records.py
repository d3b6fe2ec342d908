"""One record for every job: what went in, which settings and which code, and what came out.

A record lies beside its products as ``record.json`` or ``NAME.record.json``. Its identifier is a digest of
everything that decides the result: the rule, its keys, the digests of the inputs and the identifiers of the
records that made them, the settings, the code and the software. Time, host, the place of the recordings and
the products stay outside, so the same work has the same identifier anywhere.
"""

from __future__ import annotations

import platform
import socket
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from functools import cache
from importlib import metadata
from pathlib import Path
from typing import Any

from odograph.errors import DamagedError, OdographError, RecordError
from odograph.provenance.canonical import digest_value
from odograph.provenance.files import file_digest, read_json, write_json
from odograph.provenance.record_shape import fault_of_record
from odograph.settings.addresses import is_address

RECORD_FORMAT = 1
SOFTWARE = ("odograph", "numpy", "scipy", "pandas", "pynwb", "hdmf", "h5py", "pyarrow", "matplotlib", "numba")
#: What of an input tells only where it lay, and so has no part in the identifier.
_PLACE_KEYS = frozenset({"file", "place"})


class RecordDraft:
    """The record of a job that is running.

    Parameters
    ----------
    rule : str
        Name of the rule.
    keys : mapping
        What tells this job from the others of the rule (``session``, ``shard``).
    settings : mapping
        The settings that the step reads, by stage, in full.
    code : mapping of str to str
        Code fingerprints by what they cover.
    """

    def __init__(
        self,
        rule: str,
        *,
        keys: Mapping[str, Any],
        settings: Mapping[str, Any],
        code: Mapping[str, str],
    ) -> None:
        self.rule = rule
        self.keys = dict(keys)
        self.settings = dict(settings)
        self.code = dict(code)
        self.inputs: list[dict[str, Any]] = []
        self.products: list[dict[str, Any]] = []
        self.run: dict[str, Any] = {"started": _now(), "host": socket.gethostname()}
        self._record_id: str | None = None

    def add_product_input(self, path: str | Path) -> None:
        """Note a product of another job as an input, with the identifier of the record that made it.

        Raises
        ------
        DamagedError
            The product is not what its record says, or the record cannot be read.
        """
        producer, wanted = _made_as(Path(path))
        digest = file_digest(path)
        if wanted not in (None, digest):
            raise DamagedError(
                "the product is not what its record says", file=str(path), expected=f"the content {wanted}"
            )
        self._add_input(
            {"kind": "product", "path": Path(path).as_posix(), "digest": digest, "producer": producer}
        )

    def add_signal_input(self, signal: str, digest: str, *, file: str, place: str | None) -> None:
        """Note a signal of the recording as an input."""
        told = told_path(file)
        self._add_input({"kind": "signal", "signal": signal, "digest": digest, "file": told, "place": place})

    def add_unit_input(self, unit: int, digest: str, *, file: str) -> None:
        """Note a unit's spike train as an input."""
        self._add_input({"kind": "unit", "unit": unit, "digest": digest, "file": told_path(file)})

    def add_table_input(self, name: str, rows: Any) -> None:
        """Note the rows of a user's table as an input."""
        self._add_input({"kind": "table", "table": name, "digest": digest_value(rows)})

    def _add_input(self, entry: dict[str, Any]) -> None:
        if self._record_id is not None:
            raise RecordError(
                "an input was added after the record's identifier was used",
                place=self.rule,
                remedy="read every input before writing a figure",
            )
        if entry not in self.inputs:
            self.inputs.append(entry)

    @property
    def record_id(self) -> str:
        """The identifier, ``record:<64 hex digits>``; once it was asked for, no input can be added."""
        if self._record_id is None:
            self.inputs.sort(key=_input_order)
            self._record_id = identify(self._identity())
        return self._record_id

    def _identity(self) -> dict[str, Any]:
        return {
            "format": RECORD_FORMAT,
            "rule": self.rule,
            "keys": self.keys,
            "inputs": self.inputs,
            "settings": self.settings,
            "code": self.code,
            "software": software_versions(),
        }

    def add_product(self, path: str | Path, **facts: Any) -> None:
        """Note a finished product and its digest."""
        self.products.append({"path": Path(path).as_posix(), "digest": file_digest(path)} | facts)

    def write(self, path: str | Path, allowed: Callable[[], None] | None = None) -> None:
        """Write the record, the last act of a job; `allowed` is asked right before it."""
        document = {
            "record_id": self.record_id,
            **self._identity(),
            "products": sorted(self.products, key=lambda product: product["path"]),
            "run": self.run | {"ended": _now()},
        }
        write_json(path, document, allowed)


def told_path(file: str | Path) -> str:
    """A path as records tell it: of a file outside the study's folder its name only.

    Where somebody keeps their recordings, and under which user's name, is nobody's business.
    An address holds no credentials (`odograph.settings.sessions` refuses those) and is told as it is.
    """
    if is_address(file):
        return str(file)
    path = Path(file)
    if not path.is_absolute():
        return path.as_posix()
    here = Path.cwd()
    return path.relative_to(here).as_posix() if path.is_relative_to(here) else path.name


def identify(record: Mapping[str, Any]) -> str:
    """The identifier that a record must have.

    Parameters
    ----------
    record : mapping
        A whole record, or at least the parts that decide the result.
    """
    parts = ("format", "rule", "keys", "settings", "code", "software")
    inputs = [
        {key: value for key, value in entry.items() if key not in _PLACE_KEYS} for entry in record["inputs"]
    ]
    identity = {part: record[part] for part in parts} | {"inputs": inputs}
    return "record:" + digest_value(identity).removeprefix("sha256:")


def read_record(path: str | Path) -> dict[str, Any]:
    """Read a record and check that it is whole.

    Raises
    ------
    RecordError
        When its identifier does not follow from its content.
    InputError
        When it is missing or not JSON.
    """
    record = read_json(path)
    form = record.get("format") if isinstance(record, dict) else None
    if isinstance(form, int) and form != RECORD_FORMAT:
        raise RecordError(
            f"a record of format {form}",
            file=str(path),
            expected=f"format {RECORD_FORMAT}",
            remedy="run snakemake again with this version, or read it with the version that wrote it",
        )
    fault = fault_of_record(record)
    if fault is not None:
        raise RecordError(
            fault,
            file=str(path),
            expected=f"a record of format {RECORD_FORMAT} as odograph writes it",
            remedy="run `odograph verify --remove`, then snakemake",
        )
    try:
        expected, found = identify(record), record["record_id"]
    except (TypeError, ValueError, RecursionError) as error:
        raise RecordError(
            f"its content cannot be digested ({error})",
            file=str(path),
            expected="a record as odograph writes it",
            remedy="run `odograph verify --remove`, then snakemake",
        ) from error
    if found != expected:
        raise RecordError(
            f"the record was changed after it was written: it says {found}",
            file=str(path),
            expected=expected,
            remedy="run `odograph verify --remove`, then snakemake",
        )
    return record


def record_files(folder: str | Path) -> list[Path]:
    """The records that lie in a folder, sorted by name."""
    return sorted(
        path
        for path in Path(folder).glob("*record.json")
        if path.name == "record.json" or (path.name.endswith(".record.json") and path.name[0] != ".")
    )


def producer_of(path: str | Path) -> str | None:
    """The identifier of the record that lists a file among its products; None when there is none."""
    return _made_as(Path(path))[0]


def _made_as(path: Path) -> tuple[str | None, str | None]:
    """Of a product the identifier of its record, and the digest that it has there."""
    return _producers_in(path.parent).get(path.name, (None, None))


@cache
def _producers_in(folder: Path) -> dict[str, tuple[str, str]]:
    # Within one job the inputs do not change, so each folder is looked at once.
    producers = {}
    for file in record_files(folder):
        try:
            record = read_record(file)
            made = [(Path(product["path"]).name, product["digest"]) for product in record["products"]]
        except (OdographError, KeyError, TypeError) as error:
            found = error.found if isinstance(error, OdographError) else f"the record lacks {error}"
            raise DamagedError(found, file=str(file), expected="a record as its job wrote it") from error
        producers |= {name: (record["record_id"], digest) for name, digest in made}
    return producers


@cache
def software_versions() -> dict[str, str]:
    """Versions of Python and of every package that can touch a result."""
    versions = {"python": platform.python_version()}
    for name in SOFTWARE:
        try:
            versions[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            versions[name] = "not installed"
    return versions


def _input_order(entry: Mapping[str, Any]) -> tuple[str, str, str, int]:
    name = entry.get("path") or entry.get("signal") or entry.get("table") or ""
    return (entry["kind"], str(entry.get("session", "")), name, entry.get("unit", -1))


def _now() -> str:
    return datetime.now(UTC).isoformat(timespec="milliseconds")
