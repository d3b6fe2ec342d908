"""Columns of a table with a list of entries in each row, kept as one data set and the end of each row."""

from __future__ import annotations

from typing import Any

import numpy as np

from odograph.recording.opening import OpenRecording

WHOLE_FROM_SHARE = 0.3


def row_ends(opened: OpenRecording, table: Any, place: str, name: str) -> np.ndarray:
    """End of each row of a ragged column in its data set.

    Returns
    -------
    ndarray of int (n_rows,)

    Raises
    ------
    InputError
        The column has no index, or one that does not fit its data.
    """
    index = table[name]
    if not hasattr(index, "target"):
        raise opened.refuse(
            f"the column {name} has no index that says which entries belong to which row",
            place=f"{place}/{name}",
            expected=f"a column {name}_index",
            remedy="write the table anew, with pynwb's own methods",
        )
    ends = opened.array(index.data, f"{place}/{name}_index")
    n_entries = len(index.target.data) if np.ndim(index.target.data) else 0
    whole = ends.dtype.kind in "iu" and ends.ndim == 1
    fits = (
        whole and ends.size == len(table.id) and bool(np.all(np.diff(ends.astype(np.int64), prepend=0) >= 0))
    )
    if not fits or (ends.size and ends[-1] > n_entries):
        raise opened.refuse(
            f"the index of {name} does not fit: {ends.size} ends for {len(table.id)} rows, the last "
            f"{ends.ravel()[-1] if ends.size else None} of {n_entries} entries",
            place=f"{place}/{name}_index",
            expected="one rising whole number for each row",
            remedy="write the table anew, with pynwb's own methods",
        )
    return ends.astype(np.int64)


def read_ragged(
    opened: OpenRecording, table: Any, place: str, name: str, rows: list[int]
) -> dict[int, np.ndarray]:
    """Entries of a ragged column in some rows; the data set is read once when much of it is wanted.

    Returns
    -------
    dict
        Entries by row, of the type they are stored in.

    Raises
    ------
    InputError
        As `row_ends`, and when the data cannot be read.
    """
    ends = row_ends(opened, table, place, name)
    starts = np.concatenate([[0], ends[:-1]])
    data = table[name].target.data
    wanted = sum(int(ends[row] - starts[row]) for row in rows)
    if wanted > WHOLE_FROM_SHARE * len(data):
        whole = opened.array(data, f"{place}/{name}")
        return {row: whole[starts[row] : ends[row]] for row in rows}
    return {
        row: opened.array(data, f"{place}/{name}", slice(int(starts[row]), int(ends[row]))) for row in rows
    }
