"""The file as such: there, whole, HDF5, NWB 2 or later, without links that wait or have no end."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from odograph.errors import InputError, OdographError, printable
from odograph.recording.links import MOST_PATHS, Links, follow_links
from odograph.recording.model import FileFacts


def read_file_facts(path: Path) -> FileFacts:
    """What the file says of itself.

    Raises
    ------
    InputError
        It cannot be opened, or is not NWB 2 or later.
    """
    try:
        with h5py.File(path, "r") as file:
            version = _text(file.attrs.get("nwb_version")) or _text_of(file, "nwb_version")
            if version is None:
                raise InputError(
                    "HDF5, but not NWB: it names no NWB version",
                    file=str(path),
                    place="attribute nwb_version",
                    expected="an NWB file of version 2 or later",
                    remedy="check the path in the sessions table; convert the recording to NWB 2",
                )
            number = re.search(r"\d+", version)
            if number is None or int(number.group()) < 2:
                raise InputError(
                    f"NWB version {version}",
                    file=str(path),
                    place="attribute nwb_version",
                    expected="NWB 2.0 or later",
                    remedy="convert the file to NWB 2",
                )
            return FileFacts(
                path=path,
                nwb_version=version,
                identifier=_text_of(file, "identifier"),
                session_id=_text_of(file, "general/session_id"),
                session_start_time=_text_of(file, "session_start_time"),
                description=_text_of(file, "session_description"),
            )
    except OSError as error:
        raise _open_error(path, error) from error
    except OdographError:
        raise
    except Exception as error:
        raise _walk_error(path, error) from error


def check_is_hdf5(path: Path) -> None:
    """Refuse what is not there, is no file, is empty or is not HDF5."""
    recording = "an NWB file (HDF5)"
    check_path = "check the path in the sessions table"
    if not path.exists():
        raise InputError("there is no such file", file=str(path), expected=recording, remedy=check_path)
    if path.is_dir():
        raise InputError(
            "a folder, not a file",
            file=str(path),
            expected=recording,
            remedy="name the file; a recording kept as a Zarr folder has to be exported to HDF5 first",
        )
    try:
        with path.open("rb") as stream:
            head = stream.read(256)
    except OSError as error:
        raise _open_error(path, error) from error
    if not head:
        raise InputError("the file is empty", file=str(path), expected=recording, remedy="copy it anew")
    if head.startswith(b"version ") and b"git-lfs" in head:
        raise InputError(
            "a Git LFS pointer, not the recording itself",
            file=str(path),
            expected=recording,
            remedy="fetch the data: git lfs pull",
        )
    if not h5py.is_hdf5(path):
        raise InputError("not an HDF5 file", file=str(path), expected=recording, remedy=check_path)


def _open_error(path: Path, error: OSError) -> InputError:
    text = str(error)
    if isinstance(error, PermissionError) or "Permission denied" in text:
        found, remedy = "the file may not be read (permission denied)", "ask for permission to read it"
    elif "truncated" in text or "eof" in text:
        found = f"the file is truncated ({first_line(error)})"
        remedy = "copy it anew from its source and compare the sizes"
    elif "lock" in text:
        found = f"the file is locked ({first_line(error)})"
        remedy = (
            "close the program that writes it; on a network disk without locks set the environment "
            "variable HDF5_USE_FILE_LOCKING to FALSE"
        )
    else:
        found, remedy = f"the file cannot be opened ({first_line(error)})", "copy it anew from its source"
    return InputError(found, file=str(path), expected="an NWB file that is whole", remedy=remedy)


def links_of(path: Path) -> Links:
    """The links of the file.

    Raises
    ------
    InputError
        It cannot be walked, a link leads to a pipe or a device, or groups hold each other.
    """
    try:
        links = follow_links(path)
    except OSError as error:
        raise _open_error(path, error) from error
    except Exception as error:
        # Of damaged bookkeeping h5py raises whatever HDF5 stumbled over.
        raise _walk_error(path, error) from error
    for link in links.missing:
        if link.no_file:
            raise InputError(
                f"the link leads to what is no file: {link.describe()}",
                file=str(path),
                place=link.place,
                expected="a link to another HDF5 file; a pipe or a device would be waited for without end",
                remedy="remove the link, or let it name the file",
            )
    if links.hollow:
        raise InputError(
            "the data set declares far more than the file holds for it",
            file=str(path),
            place=links.hollow[0],
            expected="about as many data as the shape says",
            remedy="copy the file anew from its source, or write the data set in the shape of its data",
        )
    if links.paths >= MOST_PATHS:
        raise InputError(
            "its groups hold each other: there is no end of ways to reach them",
            file=str(path),
            expected="every group in one place, and soft links elsewhere",
            remedy="write the file anew with pynwb",
        )
    return links


def _walk_error(path: Path, error: Exception) -> InputError:
    return InputError(
        f"the file's structure cannot be walked ({first_line(error)})",
        file=str(path),
        expected="an NWB file that is whole",
        remedy="copy it anew from its source",
    )


def _text(value: Any) -> str | None:
    if isinstance(value, np.ndarray):
        value = value.ravel()[0] if value.size else None
    if isinstance(value, bytes):
        value = value.decode("utf-8", "replace")
    return printable(str(value)) if value is not None and not isinstance(value, h5py.Empty) else None


def _text_of(file: h5py.File, place: str) -> str | None:
    thing = file.get(place)
    return _text(thing[()]) if isinstance(thing, h5py.Dataset) and thing.size == 1 else None


def first_line(error: BaseException) -> str:
    """The first line of what an exception says."""
    text = str(error).strip()
    return text.splitlines()[0][:200] if text else type(error).__name__
