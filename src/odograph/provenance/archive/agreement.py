"""Do two runs agree? Tables number by number, documents value by value, figures by what is behind them."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from odograph.provenance.files import file_digest, read_arrays, read_json, read_table
from odograph.provenance.root import all_record_files

RELATIVE, ABSOLUTE = 1e-6, 1e-9
_FIGURES = (".png", ".svg", ".pdf", ".html")


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
    """

    path: str
    verdict: str
    detail: str = ""
    largest: float = 0.0

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
        Numbers agree when they differ by no more than `absolute` or by no more than `relative` of the larger.

    Returns
    -------
    list of Agreement
        Sorted by path. A figure or a page agrees when all that it was drawn from agrees.
    """
    before, after = _products(old), _products(new)
    found: dict[str, Agreement] = {}
    for path in sorted(before):
        if Path(path).suffix not in _FIGURES:
            found[path] = _compare(path, old, new, path in after, relative, absolute)
    for path in sorted(before):
        if Path(path).suffix in _FIGURES:
            found[path] = _figure(path, old, new, before[path], path in after, found)
    for path in sorted(set(after) - set(before)):
        found[path] = Agreement(path, "differs", "only the new run has it")
    return [found[path] for path in sorted(found)]


def software_differences(old: Path, new: Path) -> dict[str, tuple[str, str]]:
    """Libraries whose versions differ between the records of two studies: old and new version by name."""
    versions = [_software(old), _software(new)]
    names = sorted({*versions[0], *versions[1]})
    pairs = {name: (versions[0].get(name, "none"), versions[1].get(name, "none")) for name in names}
    return {name: pair for name, pair in pairs.items() if pair[0] != pair[1]}


def _software(folder: Path) -> dict[str, str]:
    found: dict[str, str] = {}
    for file in all_record_files(folder):
        found |= read_json(file)["software"]
    return found


def _products(folder: Path) -> dict[str, list[str]]:
    """Every product, with the products that its record used."""
    found = {}
    for file in all_record_files(folder):
        record = read_json(file)
        used = [entry["path"] for entry in record["inputs"] if entry["kind"] == "product"]
        found |= {product["path"]: used for product in record["products"]}
    return found


def _compare(path: str, old: Path, new: Path, there: bool, relative: float, absolute: float) -> Agreement:
    if not there or not (new / path).is_file():
        return Agreement(path, "missing", "the new run did not make it")
    if file_digest(old / path) == file_digest(new / path):
        return Agreement(path, "same bytes")
    readers = {".parquet": _table, ".npz": _arrays, ".json": _document, ".tsv": _lines}
    read = readers.get(Path(path).suffix)
    if read is None:
        return Agreement(path, "differs", "its bytes differ")
    differences = list(_differences(read(old / path), read(new / path), relative, absolute))
    if not differences:
        return Agreement(path, "same values")
    largest = max(size for _, size in differences)
    beyond = [(where, size) for where, size in differences if size > 0 and not math.isnan(size)]
    wrong = [where for where, size in differences if math.isinf(size)]
    if wrong:
        finite = [size for _, size in beyond if math.isfinite(size)]
        more = f" and {len(wrong) - 3} more" if len(wrong) > 3 else ""
        return Agreement(path, "differs", "; ".join(wrong[:3]) + more, max(finite, default=0.0))
    return Agreement(path, "within tolerance", "", largest)


def _figure(
    path: str,
    old: Path,
    new: Path,
    used: list[str],
    there: bool,
    found: Mapping[str, Agreement],
) -> Agreement:
    if not there or not (new / path).is_file():
        return Agreement(path, "missing", "the new run did not make it")
    if file_digest(old / path) == file_digest(new / path):
        return Agreement(path, "same bytes")
    wrong = [name for name in used if name in found and not found[name].agrees]
    if wrong:
        return Agreement(path, "differs", f"drawn from {wrong[0]}, which differs")
    return Agreement(path, "same values", "drawn from data that agree")


def _table(path: Path) -> dict[str, Any]:
    table = read_table(path)
    return {name: table[name].to_numpy() for name in table.columns}


def _arrays(path: Path) -> dict[str, Any]:
    return dict(read_arrays(path))


def _lines(path: Path) -> dict[str, Any]:
    rows = [line.split("\t") for line in path.read_text(encoding="utf-8").splitlines()]
    return {name: np.array([row[i] for row in rows[1:]], object) for i, name in enumerate(rows[0])}


def _document(path: Path) -> dict[str, Any]:
    flat: dict[str, Any] = {}

    def walk(value: Any, place: str) -> None:
        if isinstance(value, Mapping):
            for key, item in value.items():
                walk(item, f"{place}.{key}" if place else str(key))
        elif isinstance(value, list):
            flat[f"{place} (length)"] = np.array([len(value)])
            for i, item in enumerate(value):
                walk(item, f"{place}[{i}]")
        else:
            flat[place] = np.array([value], object if isinstance(value, str) or value is None else None)

    walk(json.loads(path.read_bytes()), "")
    return flat


def _differences(
    old: Mapping[str, Any], new: Mapping[str, Any], relative: float, absolute: float
) -> Iterator[tuple[str, float]]:
    """Where two sets of columns differ, and by how much of the larger; infinite where they do not agree."""
    for name in sorted({*old, *new}):
        if name not in old or name not in new:
            yield f"{name} is in one of the two only", math.inf
            continue
        a, b = np.asarray(old[name]), np.asarray(new[name])
        if a.shape != b.shape:
            yield f"{name} has {a.shape} and {b.shape} values", math.inf
            continue
        a, b = _numbers(a), _numbers(b)
        if a is None or b is None:
            differ = np.asarray(old[name], object) != np.asarray(new[name], object)
            both = [_nothing(x) and _nothing(y) for x, y in zip(old[name], new[name], strict=True)]
            differ = np.ravel(differ) & ~np.array(both, bool)
            if differ.any():
                yield f"{name} differs in {int(differ.sum())} of {differ.size} rows", math.inf
            continue
        unequal = ~((a == b) | (np.isnan(a) & np.isnan(b)))
        if not unequal.any():
            continue
        apart = np.abs(a - b)[unequal]
        larger = np.maximum(np.abs(a), np.abs(b))[unequal]
        ratio = np.where(np.isnan(apart), math.inf, apart / np.maximum(larger, 1e-300))
        beyond = ~((apart <= absolute) | (apart <= relative * larger))
        if beyond.any():
            place = f"{name} differs in {int(beyond.sum())} of {a.size} values"
            size = float(np.max(ratio[beyond]))
            yield f"{place}, by up to {size:.2g} of the larger" if math.isfinite(size) else place, math.inf
        else:
            yield name, float(np.max(ratio))


def _numbers(values: np.ndarray) -> np.ndarray | None:
    """Values as floats, None when they are text."""
    if values.dtype != object:
        return values.astype(float) if values.dtype.kind in "fiub" else None
    try:
        return np.array([math.nan if _nothing(value) else float(value) for value in values.ravel()])
    except (TypeError, ValueError):
        return None


def _nothing(value: Any) -> bool:
    return value is None or value == "" or (isinstance(value, float) and math.isnan(value))
