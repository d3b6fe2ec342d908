"""Do two runs agree? Every product compared, and for what differs, where that begins and why."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from odograph.errors import OdographError
from odograph.provenance.archive.values import Difference, differences, readable_kind
from odograph.provenance.canonical import canonical_json
from odograph.provenance.files import file_digest, read_json
from odograph.provenance.identifier import read_record_id
from odograph.provenance.root import all_record_files

RELATIVE, ABSOLUTE = 1e-6, 1e-9
_FIGURES = (".png", ".svg", ".pdf", ".html")
#: What a record names that can make its products differ, in the order in which it is told.
CAUSES = ("inputs", "settings", "code", "software", "machine")


@dataclass(frozen=True)
class Agreement:
    """How one product of a run compares with that of another.

    Parameters
    ----------
    path : str
        The product.
    verdict : str
        "same bytes", "same values", "within tolerance", "differs" or "missing".
    detail : str
        For what differs: where, and by how much.
    largest : float
        Largest relative difference between numbers; 0 where there is none.
    begins : bool
        Whether it differs though every product that it was made from agrees: here the differences begin.
    causes : tuple of str
        For what differs, which of `CAUSES` its two records do not share. "machine" when they share all: then
        the processor, the operating system or chance is left.
    """

    path: str
    verdict: str
    detail: str = ""
    largest: float = 0.0
    begins: bool = False
    causes: tuple[str, ...] = ()

    @property
    def agrees(self) -> bool:
        """Whether it is the same, or within tolerance."""
        return self.verdict not in ("differs", "missing")


def compare_runs(
    old: Path, new: Path, relative: float = RELATIVE, absolute: float = ABSOLUTE
) -> list[Agreement]:
    """Compare every product of two studies' results.

    Parameters
    ----------
    old, new : Path
        The studies' folders.
    relative, absolute : float
        Two floating-point numbers agree when they differ by no more than `absolute` or by no more than
        `relative` of the larger. Integers, texts and truth values must be the same.

    Returns
    -------
    list of Agreement
        Sorted by path. A figure or a page agrees when it carries the identifier of its record and was drawn,
        with the same settings, from products that agree; its pixels do not count.
    """
    before, after = _records_by_product(old), _records_by_product(new)
    found: dict[str, Agreement] = {}

    def agreement(path: str) -> Agreement:
        # What a product was made from comes first: whether a figure agrees follows from it.
        if path not in found:
            for name in _used(before[path]):
                if name in before:
                    agreement(name)
            found[path] = _compare(path, old, new, before, after, found, (relative, absolute))
        return found[path]

    for path in sorted(before):
        agreement(path)
    for path in sorted(set(after) - set(before)):
        found[path] = Agreement(path, "differs", "only the new run has it", begins=True)
    return [found[path] for path in sorted(found)]


def software_differences(old: Path, new: Path) -> dict[str, tuple[str, str]]:
    """Libraries whose versions differ between the records of two studies: old and new version by name."""
    versions = [_software(old), _software(new)]
    names = sorted({*versions[0], *versions[1]})
    pairs = {name: (versions[0].get(name, "none"), versions[1].get(name, "none")) for name in names}
    return {name: pair for name, pair in pairs.items() if pair[0] != pair[1]}


def _software(folder: Path) -> dict[str, str]:
    found: dict[str, set[str]] = {}
    for file in all_record_files(folder):
        for name, version in read_json(file)["software"].items():
            found.setdefault(name, set()).add(version)
    return {name: " and ".join(sorted(versions)) for name, versions in found.items()}


def _records_by_product(folder: Path) -> dict[str, dict[str, Any]]:
    """The record of every product, by the product's path."""
    found = {}
    for file in all_record_files(folder):
        record = read_json(file)
        found |= {product["path"]: record for product in record["products"]}
    return found


def _used(record: Mapping[str, Any]) -> list[str]:
    """The products that a record's products were made from."""
    return [entry["path"] for entry in record["inputs"] if entry["kind"] == "product"]


def _compare(
    path: str,
    old: Path,
    new: Path,
    before: Mapping[str, dict[str, Any]],
    after: Mapping[str, dict[str, Any]],
    found: Mapping[str, Agreement],
    tolerances: tuple[float, float],
) -> Agreement:
    wrong = [name for name in _used(before[path]) if name in found and not found[name].agrees]
    if path not in after or not (new / path).is_file():
        return Agreement(path, "missing", "the new run did not make it", begins=not wrong)
    if file_digest(old / path) == file_digest(new / path):
        return Agreement(path, "same bytes")
    causes = _causes(before[path], after[path])
    if Path(path).suffix in _FIGURES:
        verdict, detail = _figure(path, old, new, before[path], after[path], wrong, causes)
        largest = 0.0
    else:
        verdict, detail, largest = _data(path, old, new, tolerances)
    if verdict != "differs":
        return Agreement(path, verdict, detail, largest)
    return Agreement(path, verdict, detail, largest, begins=not wrong, causes=causes)


def _causes(old: Mapping[str, Any], new: Mapping[str, Any]) -> tuple[str, ...]:
    parts = {cause: (old.get(cause), new.get(cause)) for cause in ("settings", "code", "software")}
    parts["inputs"] = (_content(old), _content(new))
    found = [cause for cause in CAUSES if cause in parts and _unlike(*parts[cause])]
    return tuple(found) or ("machine",)


def _unlike(old: Any, new: Any) -> bool:
    return canonical_json(old) != canonical_json(new)


def _content(record: Mapping[str, Any]) -> list[tuple[str, str, str]]:
    """What a record's inputs are, wherever they lie; products are looked at by their own records."""
    return sorted(
        (entry["kind"], str(entry.get("signal", entry.get("unit", entry.get("table")))), entry["digest"])
        for entry in record["inputs"]
        if entry["kind"] != "product"
    )


def _figure(
    path: str,
    old: Path,
    new: Path,
    before: Mapping[str, Any],
    after: Mapping[str, Any],
    wrong: list[str],
    causes: tuple[str, ...],
) -> tuple[str, str]:
    """A figure by what is behind it: its identifier, its settings and the products it was drawn from."""
    for folder, record in ((old, before), (new, after)):
        if _identifier(folder / path) != record["record_id"]:
            whose = "the archived" if folder == old else "the new"
            return "differs", f"{whose} one does not carry the identifier of its record"
    if wrong:
        more = f" and {len(wrong) - 1} more" if len(wrong) > 1 else ""
        return "differs", f"drawn from {wrong[0]}{more}, which differs"
    if sorted(_used(before)) != sorted(_used(after)):
        return "differs", "drawn from other products"
    for cause in ("inputs", "settings"):
        if cause in causes:
            return "differs", f"drawn with other {cause}"
    if before["record_id"] == after["record_id"]:
        return "same values", "it carries the same identifier"
    return "same values", "drawn from products that agree"


def _identifier(path: Path) -> str | None:
    try:
        return read_record_id(path)
    except OdographError:
        return None


def _data(path: str, old: Path, new: Path, tolerances: tuple[float, float]) -> tuple[str, str, float]:
    if not readable_kind(path):
        return "differs", "its bytes differ", 0.0
    try:
        found = differences(old / path, new / path, *tolerances)
    except OdographError as error:
        return "differs", error.found, 0.0
    beyond = [one for one in found if one.beyond]
    largest = max((one.largest for one in beyond or found), default=0.0)
    if beyond:
        return "differs", _told(beyond), largest
    return ("within tolerance" if found else "same values"), "", largest


def _told(beyond: list[Difference]) -> str:
    beyond = sorted(beyond, key=lambda one: -one.largest)
    more = f" and {len(beyond) - 3} more" if len(beyond) > 3 else ""
    return "; ".join(one.text for one in beyond[:3]) + more
