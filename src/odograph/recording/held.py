"""Whether the data of a data set are there, before memory is taken for them."""

from __future__ import annotations

import math
import os
from functools import cache
from pathlib import Path
from typing import Any

import h5py

#: Of unpacked to packed bytes; constants compress well, but not as well as this.
LARGEST_RATIO = 5000
#: What may be declared without being there: data sets of fill values take no room in the file.
FEW_BYTES = 1 << 26


def extent_of(data: Any, part: slice | None) -> tuple[int, int | None, str | None]:
    """How much memory reading takes, and where the data are.

    Parameters
    ----------
    data : Any
        A data set of an open HDF5 file, as h5py or hdmf gives it; anything else is in memory already.
    part : slice or None
        The rows to read; None for all.

    Returns
    -------
    int
        Bytes that reading takes.
    int or None
        Bytes that the file holds for the whole data set; None where they lie elsewhere.
    str or None
        The file that the data are kept in, where it is not this one and cannot be followed.
    """
    # hdmf wraps data sets of references and of text; the stored one is inside.
    stored = getattr(data, "dataset", data)
    if not isinstance(stored, h5py.Dataset):
        return 0, None, None
    shape = stored.shape or ()
    if part is not None and shape:
        shape = (len(range(*part.indices(shape[0]))), *shape[1:])
    needed = math.prod(shape) * stored.dtype.itemsize
    if stored.is_virtual:
        gone = [str(path) for path in sources_of(stored) if not path.is_file()]
        return needed, None, gone[0] if gone else None
    outside = stored.external
    return needed, stored.id.get_storage_size(), str(outside[0][0]) if outside else None


def byte_count(count: int) -> str:
    """A number of bytes in words."""
    return f"{count / 1e9:.3g} GB" if count >= 1e8 else f"{count:,} bytes"


@cache
def memory() -> int:
    """Bytes of this machine's memory; where the system does not say, as many as any machine has."""
    try:
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")
    except (AttributeError, OSError, ValueError):
        return 1 << 44


def is_hollow(dataset: h5py.Dataset) -> bool:
    """Whether a data set declares far more than the file holds for it."""
    try:
        if not dataset.size or dataset.size * dataset.dtype.itemsize <= FEW_BYTES:
            return False
        needed, held, _ = extent_of(dataset, None)
    except TypeError:  # a type that numpy does not know; whoever uses the data is told
        return False
    return held is not None and needed > LARGEST_RATIO * held


def sources_of(dataset: h5py.Dataset) -> list[Path]:
    """The other files that a virtual data set takes its data from."""
    if not dataset.is_virtual:
        return []
    names = {source.file_name for source in dataset.virtual_sources()} - {"."}
    return sorted(beside(dataset.file, name) for name in names)


def beside(file: h5py.File, name: str) -> Path:
    """A file that another one names, in the folder of the one that names it."""
    return Path(file.filename).parent / name
