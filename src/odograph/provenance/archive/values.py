"""Two products compared value by value: tables, arrays and documents.

Floating-point numbers may differ by a stated tolerance; whole numbers, texts and truth values must be equal.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from odograph.errors import InputError
from odograph.provenance.files import read_arrays

_WHOLE = re.compile(r"[+-]?\d+")


@dataclass(frozen=True)
class Column:
    """Values that belong together.

    Parameters
    ----------
    values : ndarray (n,)
        Floats, NaN where there is none, when `exact` is false; else objects, None where there is none.
    shape : tuple of int
        The shape they had.
    exact : bool
        Whether they must be equal.
    """

    values: np.ndarray
    shape: tuple[int, ...]
    exact: bool


@dataclass(frozen=True)
class Difference:
    """How one column differs.

    Parameters
    ----------
    text : str
        Which column, in how many values, by how much.
    largest : float
        Largest relative difference between two numbers of it; 0 for texts.
    beyond : bool
        Whether any is beyond the tolerance.
    """

    text: str
    largest: float
    beyond: bool


def readable_kind(path: str) -> bool:
    """Whether files of this kind can be compared by their values."""
    return Path(path).suffix in _READERS


def differences(old: Path, new: Path, relative: float, absolute: float) -> list[Difference]:
    """Where two files of the same kind differ, column by column.

    Parameters
    ----------
    old, new : Path
        Two tables (Parquet, tab-separated), two sets of arrays (npz) or two documents (JSON).
    relative, absolute : float
        Floats agree when they differ by no more than `absolute`, or by no more than `relative` of the larger.

    Raises
    ------
    InputError
        One of them cannot be read.
    """
    read = _READERS[old.suffix]
    try:
        before, after = read(old), read(new)
    except (ValueError, IndexError) as error:
        raise InputError(f"it cannot be read ({error})", file=str(new)) from error
    return list(_differences(before, after, relative, absolute))


def _differences(
    old: Mapping[str, Column], new: Mapping[str, Column], relative: float, absolute: float
) -> Iterator[Difference]:
    for name in sorted({*old, *new}):
        if name not in old or name not in new:
            run = "archived" if name in old else "new"
            yield Difference(f"only the {run} one has {name}", 0.0, True)
            continue
        a, b = old[name], new[name]
        if a.shape != b.shape:
            yield Difference(f"{name} has {_size(a.shape)} values, now {_size(b.shape)}", 0.0, True)
        elif a.exact or b.exact:
            count = sum(x != y for x, y in zip(_objects(a), _objects(b), strict=True))
            if count:
                yield Difference(f"{name} differs in {count} of {a.values.size} values", 0.0, True)
        else:
            yield from _difference_of_floats(name, a.values, b.values, relative, absolute)


def _difference_of_floats(
    name: str, a: np.ndarray, b: np.ndarray, relative: float, absolute: float
) -> Iterator[Difference]:
    unequal = ~((a == b) | (np.isnan(a) & np.isnan(b)))
    if not unequal.any():
        return
    with np.errstate(invalid="ignore"):
        apart = np.abs(a - b)[unequal]
    larger = np.maximum(np.abs(a), np.abs(b))[unequal]
    # A number against none, or against an infinite one, differs by no amount that could be told.
    told = np.isfinite(apart)
    beyond = ~told | ((apart > absolute) & (apart > relative * larger))
    ratio = np.where(told, apart, 0.0) / np.where(told, np.maximum(larger, np.finfo(float).tiny), 1.0)
    if not beyond.any():
        yield Difference(name, float(ratio.max()), False)
        return
    count, largest = int(beyond.sum()), float(ratio[beyond].max())
    size = f", by up to {apart[beyond & told].max():.2g}, {largest:.2g} of the larger" if largest else ""
    yield Difference(f"{name} differs in {count} of {a.size} values{size}", largest, True)


def _size(shape: tuple[int, ...]) -> str:
    return " by ".join(map(str, shape)) or "1"


def _objects(column: Column) -> list[Any]:
    return [None if isinstance(x, float) and math.isnan(x) else x for x in column.values.tolist()]


def _floats(values: Any) -> Column:
    array = np.asarray(values, float)
    return Column(array.ravel(), array.shape, False)


def _exact(values: list[Any]) -> Column:
    array = np.empty(len(values), object)
    array[:] = values
    return Column(array, array.shape, True)


def _table(path: Path) -> dict[str, Column]:
    import pyarrow as pa
    import pyarrow.parquet as pq

    try:
        table = pq.read_table(path)
    except pa.ArrowInvalid as error:
        raise InputError(f"it is no Parquet table ({error})", file=str(path)) from error
    columns = {}
    for name in table.column_names:
        values = table.column(name).to_pylist()
        floating = pa.types.is_floating(table.schema.field(name).type)
        columns[name] = (
            _floats([math.nan if x is None else x for x in values]) if floating else _exact(values)
        )
    return columns


def _arrays(path: Path) -> dict[str, Column]:
    columns = {}
    for name, values in read_arrays(path).items():
        if values.dtype.kind == "f":
            columns[name] = _floats(values)
        else:
            columns[name] = Column(values.ravel().astype(object), values.shape, True)
    return columns


def _lines(path: Path) -> dict[str, Column]:
    rows = [line.split("\t") for line in path.read_text(encoding="utf-8").splitlines()]
    if not rows:
        return {}
    return {name: _cells([row[at] for row in rows[1:]]) for at, name in enumerate(rows[0])}


def _cells(cells: list[str]) -> Column:
    """Cells of a text table: floats when all are numbers and not all are whole, else as they are written."""
    if not all(not cell or _WHOLE.fullmatch(cell) for cell in cells):
        try:
            return _floats([float(cell) if cell else math.nan for cell in cells])
        except ValueError:
            pass
    return _exact(cells)


def _document(path: Path) -> dict[str, Column]:
    columns: dict[str, Column] = {}

    def walk(value: Any, place: str) -> None:
        if isinstance(value, Mapping):
            for key, item in value.items():
                walk(item, f"{place}.{key}" if place else str(key))
        elif isinstance(value, list):
            columns[f"length of {place}"] = _exact([len(value)])
            for number, item in enumerate(value):
                walk(item, f"{place}[{number}]")
        else:
            columns[place] = _floats([value]) if isinstance(value, float) else _exact([value])

    walk(json.loads(path.read_bytes()), "")
    return columns


_READERS: dict[str, Callable[[Path], dict[str, Column]]] = {
    ".parquet": _table,
    ".npz": _arrays,
    ".json": _document,
    ".tsv": _lines,
}
