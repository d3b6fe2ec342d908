"""Ways to damage a recording, each a short list of plain values, so that a case can be kept as JSON.

A case names a base recording, the settings to read it with, and the damages, which are done in order: first
those to the structure, through h5py, then those to the bytes.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from base_recordings import base

Damage = list[Any]
Case = dict[str, Any]

HOSTILE_NAMES = (
    "../../x", "a b", "<script>alert(1)</script>", "quote\"'", "x" * 5000, "é\u0301", "\udce9", "\u202eabc",
    "-rf", "$(touch x)", "%s{0}", "\x01\x1b[31m", "\n", "CON",
)  # fmt: skip


# ---- values to put in the place of others


def _numbers(stored: np.ndarray) -> np.ndarray:
    return stored.astype(np.float64) if stored.dtype.kind in "fiub" else np.arange(stored.size, dtype=float)


def _with(stored: np.ndarray, value: float, every: int = 7) -> np.ndarray:
    values = _numbers(stored).copy()
    values.reshape(-1)[::every] = value
    return values


def _texts(texts: list[Any]) -> Callable[[np.ndarray], Any]:
    def make(stored: np.ndarray) -> Any:
        values = np.empty(max(stored.shape[0] if stored.ndim else 1, 1), dtype=h5py.string_dtype())
        values[:] = [texts[k % len(texts)] for k in range(len(values))]
        return values if stored.ndim else values[0]

    return make


VALUES: dict[str, Callable[[np.ndarray], Any]] = {
    "some nan": lambda v: _with(v, np.nan),
    "all nan": lambda v: _with(v, np.nan, 1),
    "some infinite": lambda v: _with(v, np.inf),
    "minus infinite": lambda v: _with(v, -np.inf, 11),
    "huge": lambda v: _with(v, 1e308, 2),
    "tiny": lambda v: _with(v, 5e-324, 1),
    "zeros": lambda v: np.zeros(v.shape),
    "negative": lambda v: -_numbers(v) - 1,
    "milliseconds": lambda v: _numbers(v) * 1000,
    "reversed": lambda v: v[::-1] if v.ndim else v,
    "shorter": lambda v: v[: len(v) // 2] if v.ndim else v,
    "longer": lambda v: np.concatenate([v, v]) if v.ndim else v,
    "empty": lambda v: v[:0] if v.ndim else np.empty(0),
    "one": lambda v: v[:1] if v.ndim else v,
    "transposed": lambda v: v.T,
    "column": lambda v: v.reshape(-1, 1),
    "flat": lambda v: v.reshape(-1),
    "three columns": lambda v: np.zeros((*v.shape[:1], 3)),
    "no columns": lambda v: np.zeros((*v.shape[:1], 0)),
    "cube": lambda v: np.zeros((2, 3, 4)),
    "scalar": lambda v: 1.0,
    "float16": lambda v: _numbers(v).astype(np.float16),
    "float32": lambda v: _numbers(v).astype(np.float32),
    "long double": lambda v: _numbers(v).astype(np.longdouble),
    "complex": lambda v: _numbers(v).astype(np.complex128),
    "int8": lambda v: _numbers(v).astype(np.int64).astype(np.int8),
    "largest uint64": lambda v: np.full(v.shape, 2**64 - 1, dtype=np.uint64),
    "smallest int64": lambda v: np.full(v.shape, -(2**63), dtype=np.int64),
    "big-endian": lambda v: _numbers(v).astype(">f8"),
    "booleans": lambda v: _numbers(v) > 1,
    "nothing": lambda v: h5py.Empty("f8"),
    "no text": lambda v: h5py.Empty(h5py.string_dtype()),
    "texts": _texts(["good", "", "1.5"]),
    "hostile texts": _texts([name for name in HOSTILE_NAMES if "\udce9" not in name]),
    "long text": lambda v: _texts(["x" * 3_000_000, *["x"] * max(v.size - 1, 0)])(v),
    "fixed bytes": lambda v: np.full(v.shape, b"\xff\xfe\x00a", dtype="S4"),
    "bad utf-8": lambda v: _texts([b"\xff\xfeCA1", b"\xed\xa0\x80"])(v),
    "opaque": lambda v: np.zeros(v.shape, dtype="V5"),
    "compound": lambda v: np.zeros(v.shape, dtype=[("a", "f8"), ("b", "i2", (2,))]),
    "object references": lambda v: _references(v.shape, h5py.ref_dtype),
    "region references": lambda v: _references(v.shape, h5py.regionref_dtype),
    "lists": lambda v: _lists(v.shape),
    "enumeration": lambda v: np.zeros(v.shape, dtype=h5py.enum_dtype({"NO": 0, "YES": 1})),
    "dates": lambda v: _texts(["2026-13-45T99:00:00", "yesterday", "0001-01-01T00:00:00+23:59"])(v),
}


def _references(shape: tuple[int, ...], dtype: Any) -> np.ndarray:
    return np.empty(shape or (1,), dtype=dtype)


def _lists(shape: tuple[int, ...]) -> np.ndarray:
    values = np.empty(shape[0] if shape else 1, dtype=h5py.vlen_dtype(np.float64))
    values[:] = [np.arange(k % 3, dtype=float) for k in range(len(values))]
    return values


INDEXES: dict[str, Callable[[np.ndarray], Any]] = {
    "falling": lambda v: v[::-1].copy(),
    "beyond the end": lambda v: v + 10_000,
    "far beyond": lambda v: np.full(v.shape, 2**63, dtype=np.uint64),
    "negative": lambda v: -v.astype(np.int64),
    "negative first": lambda v: np.concatenate([[-5], v[1:].astype(np.int64)]),
    "zeros": lambda v: np.zeros_like(v),
    "enormous": lambda v: np.append(v[:-1].astype(np.int64), 10**12),
    "wrapping": lambda v: np.full(v.shape, 2**64 - 1, dtype=np.uint64),
    "fractions": lambda v: v.astype(np.float64) + 0.5,
    "nan": lambda v: np.full(v.shape, np.nan),
    "short": lambda v: v[:1],
    "long": lambda v: np.concatenate([v, v[-1:]]),
    "scalar": lambda v: v[0],
    "square": lambda v: np.stack([v, v]),
    "texts": _texts(["1", "2"]),
}

ATTRIBUTES: dict[str, Callable[[], Any]] = {
    "integer": lambda: 7,
    "zero": lambda: 0,
    "nan": lambda: np.nan,
    "infinite": lambda: np.inf,
    "negative": lambda: -1.0,
    "text": lambda: "text",
    "empty text": lambda: "",
    "long text": lambda: "x" * 60_000,
    "NUL": lambda: np.bytes_(b"a\0b\0"),
    "bad utf-8": lambda: np.bytes_(b"\xff\xfe"),
    "hostile": lambda: "<script>\u202e../../x$(touch y)\n\x1b[31m",
    "array": lambda: np.arange(12.0).reshape(3, 4),
    "texts": lambda: np.array(["a", "a", "../b"], dtype=h5py.string_dtype()),
    "empty array": lambda: np.empty(0),
    "nothing": lambda: h5py.Empty("f8"),
    "null reference": lambda: h5py.Reference(),
    "compound": lambda: np.zeros(2, dtype=[("a", "f8"), ("b", "i2")]),
    "boolean": lambda: True,
    "complex": lambda: 1 + 2j,
}


# ---- damages to the structure


def _replace(file: h5py.File, place: str, kind: str) -> None:
    _put(file, place, VALUES[kind](np.asarray(file[place][()])))


def _index(file: h5py.File, place: str, kind: str) -> None:
    _put(file, place, INDEXES[kind](np.asarray(file[place][()])))


def _put(file: h5py.File, place: str, values: Any, **how: Any) -> None:
    kept = dict(file[place].attrs)
    del file[place]
    made = file.create_dataset(place, data=values, **how)
    for key, value in kept.items():
        made.attrs[key] = value


def _declare(file: h5py.File, place: str, shape: list[int], dtype: str, chunk: int) -> None:
    """A data set that declares a shape of any size and holds next to nothing."""
    kept = dict(file[place].attrs)
    del file[place]
    kind = h5py.string_dtype() if dtype == "text" else np.dtype(dtype)
    chunks = tuple(min(length, chunk) for length in shape)
    made = file.create_dataset(place, shape, kind, chunks=chunks, compression="gzip", maxshape=shape)
    for key, value in kept.items():
        made.attrs[key] = value


def _delete(file: h5py.File, place: str) -> None:
    del file[place]


def _attribute(file: h5py.File, place: str, name: str, kind: str) -> None:
    if kind == "gone":
        del file[place].attrs[name]
    elif kind == "reference to what was deleted":
        gone = file.create_group("for a moment")
        file[place].attrs[name] = gone.ref
        del file["for a moment"]
    else:
        file[place].attrs[name] = ATTRIBUTES[kind]()


def _type(file: h5py.File, place: str, name: str) -> None:
    file[place].attrs["neurodata_type"] = name


def _other_kind(file: h5py.File, place: str) -> None:
    """A group where a data set should be, or the other way round."""
    thing = file[place]
    kept, was_group = dict(thing.attrs), isinstance(thing, h5py.Group)
    del file[place]
    made = file.create_dataset(place, data=1.0) if was_group else file.create_group(place)
    for key, value in kept.items():
        made.attrs[key] = value


def _rename(file: h5py.File, place: str, number: int) -> None:
    above, _, _ = place.rpartition("/")
    name = HOSTILE_NAMES[number % len(HOSTILE_NAMES)].replace("/", "\\")
    file.move(place, f"{above}/{name}")


def _soft_link(file: h5py.File, place: str, target: str) -> None:
    del file[place]
    file[place] = h5py.SoftLink(target)


def _hard_link(file: h5py.File, place: str, target: str) -> None:
    thing = file[target]
    if place in file:
        del file[place]
    file[place] = thing


def _external_link(file: h5py.File, place: str, other: str, target: str) -> None:
    del file[place]
    file[place] = h5py.ExternalLink(other, target)


def _pipe_link(file: h5py.File, place: str) -> None:
    """A link to a named pipe that nobody writes to: opening it waits for ever."""
    import os

    pipe = Path(file.filename).with_name("pipe")
    if not pipe.exists():
        os.mkfifo(pipe)
    _external_link(file, place, "pipe", "/data")


def _stored_outside(file: h5py.File, place: str, other: str) -> None:
    """Data that lie in another file, as HDF5's external storage."""
    kept, stored = dict(file[place].attrs), file[place]
    shape = stored.shape
    del file[place]
    made = file.create_dataset(place, shape, "f8", external=[(other, 0, h5py.h5f.UNLIMITED)])
    for key, value in kept.items():
        made.attrs[key] = value


def _virtual(file: h5py.File, place: str, other: str) -> None:
    """A virtual data set over another file."""
    kept, shape = dict(file[place].attrs), file[place].shape
    layout = h5py.VirtualLayout(shape, "f8")
    layout[...] = h5py.VirtualSource(other, "data", shape)
    del file[place]
    made = file.create_virtual_dataset(place, layout, fillvalue=0.5)
    for key, value in kept.items():
        made.attrs[key] = value


def _deep(file: h5py.File, place: str, depth: int) -> None:
    group = file.require_group(place)
    for _ in range(depth):
        group = group.create_group("g")


def _many(file: h5py.File, place: str, count: int) -> None:
    for number in range(count):
        file[place].attrs[f"more_{number}"] = "x" * 100


def _diamonds(file: h5py.File, place: str, depth: int) -> None:
    """Groups that each lead twice to the next: as many paths as two to the power of the depth."""
    group = file.require_group(place).create_group("d")
    for _ in range(depth):
        below = group.create_group("a")
        group["b"] = below
        group = below


def _column(file: h5py.File, place: str, columns: list[str]) -> None:
    file[place].attrs["colnames"] = np.array(columns, dtype=h5py.string_dtype())


STRUCTURE: dict[str, Callable[..., None]] = {
    "replace": _replace,
    "index": _index,
    "declare": _declare,
    "delete": _delete,
    "attribute": _attribute,
    "type": _type,
    "other kind": _other_kind,
    "rename": _rename,
    "soft link": _soft_link,
    "hard link": _hard_link,
    "external link": _external_link,
    "pipe link": _pipe_link,
    "stored outside": _stored_outside,
    "virtual": _virtual,
    "deep": _deep,
    "many": _many,
    "diamonds": _diamonds,
    "columns": _column,
}


# ---- damages to the bytes


def _flip(content: bytearray, at: int, bit: int) -> bytearray:
    content[at % len(content)] ^= 1 << bit
    return content


def _set(content: bytearray, at: int, values: list[int]) -> bytearray:
    at %= len(content)
    content[at : at + len(values)] = bytes(values)
    return content


def _copy(content: bytearray, source: int, target: int, count: int) -> bytearray:
    source, target = source % len(content), target % len(content)
    content[target : target + count] = content[source : source + count]
    return content


def _remove(content: bytearray, at: int, count: int) -> bytearray:
    at %= len(content)
    del content[at : at + count]
    return content


def _insert(content: bytearray, at: int, values: list[int]) -> bytearray:
    at %= len(content)
    content[at:at] = bytes(values)
    return content


def _cut(content: bytearray, at: int) -> bytearray:
    return content[: at % len(content)]


BYTES: dict[str, Callable[..., bytearray]] = {
    "flip": _flip,
    "set": _set,
    "copy": _copy,
    "remove": _remove,
    "insert": _insert,
    "cut": _cut,
}


def damage(case: Case, path: Path) -> None:
    """Write the recording of a case. A damage whose place an earlier one took away is passed over."""
    path.write_bytes(base(case["base"]))
    structural = [step for step in case["damages"] if step[0] in STRUCTURE]
    if structural:
        with h5py.File(path, "r+") as file:
            for name, *facts in structural:
                with contextlib.suppress(Exception):  # an earlier damage has made it impossible
                    STRUCTURE[name](file, *facts)
    content = bytearray(path.read_bytes())
    for name, *facts in case["damages"]:
        if name in BYTES and content:
            content = BYTES[name](content, *facts)
    path.write_bytes(content)
