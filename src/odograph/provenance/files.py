"""Reading and writing products: deterministic bytes, written beside the target and renamed.

A reader of any product sees the old file or the whole new one, never a part, whatever moment a job dies at.
Libraries are imported where they are used, so that a step that writes JSON starts fast.
"""

from __future__ import annotations

import contextlib
import hashlib
import io
import json
import math
import zipfile
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from odograph.errors import InputError
from odograph.provenance.canonical import readable_json
from odograph.provenance.renaming import renamed_into_place

Allowed = Callable[[], None] | None

if TYPE_CHECKING:
    import numpy as np
    import pandas as pd
    import pyarrow as pa

    Table = pd.DataFrame | pa.Table | Mapping[str, Any] | Sequence[Mapping[str, Any]]


def write_bytes(path: str | Path, data: bytes, allowed: Allowed = None) -> None:
    """Write bytes to a file, by rename; `allowed` is asked right before it (as in `renamed_into_place`)."""
    with renamed_into_place(path, allowed) as temporary:
        temporary.write_bytes(data)


def write_text(path: str | Path, text: str, allowed: Allowed = None) -> None:
    """Write text to a file as UTF-8, by rename."""
    write_bytes(path, text.encode(), allowed)


def write_if_changed(path: str | Path, text: str) -> bool:
    """Write text unless the file already holds it, so its time stamp moves only with its content.

    Returns
    -------
    bool
        Whether the file was written.
    """
    with contextlib.suppress(FileNotFoundError):
        if Path(path).read_bytes() == text.encode():
            return False
    write_text(path, text)
    return True


def write_json(path: str | Path, document: Any, allowed: Allowed = None) -> None:
    """Write a document as indented JSON with sorted keys; numbers that are not finite become null."""
    write_text(path, readable_json(document), allowed)


def read_json(path: str | Path) -> Any:
    """Read a JSON document.

    Raises
    ------
    InputError
        When the file is missing or is not JSON.
    """
    try:
        text = Path(path).read_bytes().decode()
        document = json.loads(text)
        if "\\ud" in text.lower():
            # Half a surrogate pair is no text: it could be neither shown nor written again.
            json.dumps(document, ensure_ascii=False).encode()
        return document
    except OSError as error:
        raise _cannot_be_read(path, error, "a JSON document") from error
    except (ValueError, RecursionError) as error:
        raise InputError(
            f"not a JSON document ({error})",
            file=str(path),
            expected="a JSON document",
            remedy="run `odograph verify --remove`, then snakemake",
        ) from error


def _cannot_be_read(path: str | Path, error: OSError, expected: str) -> InputError:
    if isinstance(error, FileNotFoundError):
        return InputError(
            "the file is missing", file=str(path), expected=expected, remedy="run snakemake again"
        )
    return InputError(
        f"the file cannot be read ({error.strerror or error})",
        file=str(path),
        expected=expected,
        remedy="delete what is there and run snakemake again; if it comes back, look at the disk",
    )


def file_digest(path: str | Path) -> str:
    """SHA-256 of a file's bytes, as ``sha256:<64 hex digits>``."""
    with Path(path).open("rb") as handle:
        return "sha256:" + hashlib.file_digest(handle, "sha256").hexdigest()


# Tables


def write_table(path: str | Path, table: Table, allowed: Allowed = None) -> None:
    """Write a table as Parquet: zstd, no index, no library's own metadata, NaN as null.

    Parameters
    ----------
    path : str or Path
        The file to write.
    table : DataFrame, pyarrow Table, mapping of columns, or sequence of rows
        A mapping holds one array or list per column, all of equal length; rows are mappings with the same
        keys in the same order.
    allowed : callable, optional
        Asked right before the rename.
    """
    import pyarrow.parquet as pq

    with renamed_into_place(path, allowed) as temporary:
        pq.write_table(as_arrow(table), temporary, compression="zstd", write_statistics=False)


def read_table(path: str | Path, columns: Sequence[str] | None = None) -> pd.DataFrame:
    """Read a Parquet table as a DataFrame (null numbers become NaN)."""
    return _read_arrow(path, columns).to_pandas()


def read_columns(path: str | Path, columns: Sequence[str] | None = None) -> dict[str, np.ndarray]:
    """Read a Parquet table as one array per column, without pandas; null numbers become NaN."""
    table = _read_arrow(path, columns)
    return {name: _column_array(table.column(name)) for name in table.column_names}


def write_tsv(path: str | Path, table: Table, allowed: Allowed = None) -> None:
    """Write a table as tab-separated text: shortest floats, `true` and `false`, blank for missing."""
    columns = as_arrow(table).to_pydict()
    lines = ["\t".join(columns)]
    lines += ["\t".join(map(_tsv_cell, row)) for row in zip(*columns.values(), strict=True)]
    write_text(path, "\n".join(lines) + "\n", allowed)


def as_arrow(table: Table) -> pa.Table:
    """Turn any of the table forms of `write_table` into a pyarrow Table without schema metadata."""
    import pyarrow as pa

    if isinstance(table, pa.Table):
        result = table
    elif isinstance(table, Mapping):
        result = pa.table({name: pa.array(values, from_pandas=True) for name, values in table.items()})
    elif hasattr(table, "iloc"):
        result = pa.Table.from_pandas(table, preserve_index=False)
    else:
        names = list(table[0]) if table else []
        result = pa.table({name: pa.array([row[name] for row in table], from_pandas=True) for name in names})
    # Which of arrow's two types of text a column gets depends on the version of pandas.
    fields = [
        field.with_type(pa.string()) if pa.types.is_large_string(field.type) else field
        for field in result.schema
    ]
    return result.cast(pa.schema(fields))


def columns_digest(columns: Mapping[str, np.ndarray]) -> str:
    """Digest of the values of numeric and boolean columns, whatever file they came from.

    Parameters
    ----------
    columns : mapping of str to ndarray (n_rows,)
        Numbers are taken as little-endian float64, so the order of columns and their width do not matter.

    Returns
    -------
    str
        ``sha256:<64 hex digits>``
    """
    import numpy as np

    state = hashlib.sha256()
    for name in sorted(columns):
        values = np.ascontiguousarray(columns[name], dtype="<f8")
        state.update(f"{name} {values.shape}\n".encode())
        state.update(values.tobytes())
    return "sha256:" + state.hexdigest()


def _read_arrow(path: str | Path, columns: Sequence[str] | None) -> pa.Table:
    import pyarrow as pa
    import pyarrow.parquet as pq

    try:
        # One thread, and the file itself rather than a data set: both start faster for small tables.
        with pq.ParquetFile(path) as source:
            return source.read(columns=list(columns) if columns else None, use_threads=False)
    except FileNotFoundError as error:
        raise _cannot_be_read(path, error, "a Parquet table") from error
    except (pa.ArrowException, OSError, ValueError, MemoryError) as error:
        raise InputError(
            f"not a Parquet table ({error})",
            file=str(path),
            expected="a Parquet table",
            remedy="run `odograph verify --remove`, then snakemake",
        ) from error


def _column_array(column: pa.ChunkedArray) -> np.ndarray:
    import numpy as np

    values = column.to_numpy()
    return np.array(values) if values.dtype != object else np.array(column.to_pylist(), dtype=object)


def _tsv_cell(value: Any) -> str:
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    return str(value).replace("\t", " ").replace("\n", " ")


# Named arrays


def write_arrays(path: str | Path, arrays: Mapping[str, np.ndarray], allowed: Allowed = None) -> None:
    """Write named arrays as an uncompressed npz file whose bytes depend on the arrays only.

    Parameters
    ----------
    path : str or Path
        The file to write.
    arrays : mapping of str to ndarray
        Names may hold slashes. Objects are refused.
    allowed : callable, optional
        Asked right before the rename.
    """
    write_bytes(path, pack_arrays(arrays), allowed)


def pack_arrays(arrays: Mapping[str, np.ndarray]) -> bytes:
    """The bytes that `write_arrays` writes."""
    import numpy as np

    buffer = io.BytesIO()
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_STORED) as archive:
        for name in sorted(arrays):
            member = io.BytesIO()
            np.lib.format.write_array(member, np.asanyarray(arrays[name]), allow_pickle=False)
            # ZipInfo's default date is fixed (1980), so the time of writing leaves no trace.
            archive.writestr(zipfile.ZipInfo(f"{name}.npy"), member.getvalue())
    return buffer.getvalue()


def read_arrays(path: str | Path, wanted: Callable[[str], bool] | None = None) -> dict[str, np.ndarray]:
    """Read named arrays written by `write_arrays`.

    Parameters
    ----------
    path : str or Path
        The npz file.
    wanted : callable, optional
        Takes a name and says whether to read it; all are read by default.

    Raises
    ------
    InputError
        When the file is missing or damaged (each array's checksum is verified).
    """
    try:
        with zipfile.ZipFile(path) as archive:
            return {
                member.filename.removesuffix(".npy"): _read_member(archive, member)
                for member in archive.infolist()
                if wanted is None or wanted(member.filename.removesuffix(".npy"))
            }
    except OSError as error:
        raise _cannot_be_read(path, error, "named arrays") from error
    except Exception as error:
        # Of damaged bytes zipfile and numpy raise many kinds, down to struct.error and SyntaxError.
        raise InputError(
            f"the file is damaged ({error})",
            file=str(path),
            expected="named arrays as odograph writes them",
            remedy="run `odograph verify --remove`, then snakemake",
        ) from error


def _read_member(archive: zipfile.ZipFile, member: zipfile.ZipInfo) -> np.ndarray:
    """One array; as `pack_arrays` writes it, its bytes are all there, so none can be declared for nothing."""
    import numpy as np

    if member.compress_type != zipfile.ZIP_STORED or member.compress_size != member.file_size:
        raise ValueError(f"{member.filename} is packed")
    stream = io.BytesIO(archive.read(member))
    version = np.lib.format.read_magic(stream)
    read_header = np.lib.format.read_array_header_1_0
    shape, _, dtype = (read_header if version == (1, 0) else np.lib.format.read_array_header_2_0)(stream)
    if math.prod(shape) * dtype.itemsize > member.file_size:
        raise ValueError(f"{member.filename} declares the shape {shape}")
    stream.seek(0)
    return np.lib.format.read_array(stream, allow_pickle=False)
