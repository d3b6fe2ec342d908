"""Where a recording lies on this machine: where the sessions table says; of an address, its local copy."""

from __future__ import annotations

import hashlib
import re
from pathlib import Path
from urllib.parse import unquote, urlsplit

from odograph.settings.addresses import is_address, same_address

FETCHED = Path("results") / "recordings"
_LONGEST_NAME = 120


def local_place(nwb: str) -> str:
    """The path of a recording, relative to the study's folder.

    Parameters
    ----------
    nwb : str
        A path, which comes back as it is, or an address. Every address has a place of its own: the folder is
        named by a digest of it, the file as at the address.
    """
    if not is_address(nwb):
        return nwb
    address = same_address(nwb)
    digest = hashlib.sha256(address.encode()).hexdigest()
    return (FETCHED / digest[:2] / digest[2:14] / _file_name(address)).as_posix()


def _file_name(address: str) -> str:
    """The last part of an address as a file's name; it ends in .nwb, so it is no record's name."""
    last = [part for part in urlsplit(address).path.split("/") if part][-1]
    name = re.sub(r"[^A-Za-z0-9._-]+", "_", unquote(last)).lstrip(".")[-_LONGEST_NAME:]
    return name if name.lower().endswith(".nwb") and len(name) > len(".nwb") else f"{name or 'recording'}.nwb"
