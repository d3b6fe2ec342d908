"""Unpacking a zip file that somebody else made: nothing may land outside or be what it is not."""

from __future__ import annotations

import shutil
import stat
import tempfile
import unicodedata
import zipfile
import zlib
from pathlib import Path, PurePosixPath

from odograph.errors import InputError

LARGEST_RATIO = 200  # of unpacked to packed bytes; what compresses better is a bomb
LARGEST_MEMBERS = 1_000_000
_CHUNK = 1 << 20


def unpack(source: Path, target: Path) -> Path:
    """Unpack a zip file into a new folder.

    Parameters
    ----------
    source : Path
        The zip file.
    target : Path
        The folder to make; it must not be there. It appears only when everything was unpacked.

    Returns
    -------
    Path
        The folder with the content: `target`, or its only folder.

    Raises
    ------
    InputError
        The file is no zip file, or a member has an absolute path, leads outside, is a link or a device, is
        there twice (also when only upper and lower case differ, or the way of writing an accent), is
        encrypted, is larger than it says, or all together swell beyond reason or beyond what the disk holds.
    """
    if target.exists():
        raise InputError("it is there already", file=str(target), remedy="name a folder that is not there")
    target.parent.mkdir(parents=True, exist_ok=True)
    try:
        with zipfile.ZipFile(source) as archive:
            members = archive.infolist()
            check_members(members, source)
            _check_room(members, target.parent, source)
            with tempfile.TemporaryDirectory(dir=target.parent, prefix=f".{target.name}.") as name:
                content = Path(name) / "content"
                content.mkdir()
                for member in members:
                    if not member.is_dir():
                        _extract(archive, member, content, source)
                content.rename(target)
    # NotImplementedError is what zipfile raises of a member that is packed in a way it does not know.
    except (zipfile.BadZipFile, zlib.error, EOFError, NotImplementedError) as error:
        raise InputError(
            f"it cannot be unpacked ({error})",
            file=str(source),
            expected="a zip file that is whole",
            remedy="fetch it again",
        ) from error
    except OSError as error:
        raise InputError(
            f"it cannot be unpacked ({error.strerror or error})",
            file=str(source),
            expected="a zip file that can be read, and a folder that can be written",
            remedy="look at the rights and the free space of both",
        ) from error
    inside = list(target.iterdir())
    return inside[0] if len(inside) == 1 and inside[0].is_dir() else target


def check_members(members: list[zipfile.ZipInfo], source: Path) -> None:
    """Refuse a zip file with a member that must not be unpacked; see `unpack`."""
    if len(members) > LARGEST_MEMBERS:
        raise _refused(f"{len(members)} members", "", source)
    seen: dict[str, str] = {}
    for member in members:
        name = member.orig_filename
        parts = PurePosixPath(name).parts
        kind = stat.S_IFMT(member.external_attr >> 16)
        if "\0" in name or "\\" in name or ":" in (parts[0] if parts else ""):
            raise _refused("a name that means another place on some systems", name, source)
        if not parts or name.startswith("/") or ".." in parts:
            raise _refused("a path that leads outside", name, source)
        if kind not in (0, stat.S_IFREG, stat.S_IFDIR):
            raise _refused("a link or a device", name, source)
        if member.flag_bits & 0x1:
            raise _refused("an encrypted member", name, source)
        folded = _folded(name)
        if folded in seen:
            raise _refused(f"the same name twice (also {seen[folded]!r})", name, source)
        seen[folded] = name
        if member.file_size > LARGEST_RATIO * max(member.compress_size, 1) and member.file_size > _CHUNK:
            raise _refused("more bytes than so few can stand for", name, source)
    files = {folded for folded, name in seen.items() if not name.endswith("/")}
    for folded, name in seen.items():
        if any(str(parent) in files for parent in PurePosixPath(folded).parents):
            raise _refused("a file that is a folder as well", name, source)
    total, packed = sum(member.file_size for member in members), source.stat().st_size
    if total > LARGEST_RATIO * packed and total > _CHUNK:
        raise _refused(f"{total} bytes in {packed}, more than so few can stand for,", "", source)


def _folded(name: str) -> str:
    """A name as the least discerning disk keeps it."""
    return unicodedata.normalize("NFC", unicodedata.normalize("NFC", name.rstrip("/")).casefold())


def _check_room(members: list[zipfile.ZipInfo], folder: Path, source: Path) -> None:
    needed, free = sum(member.file_size for member in members), shutil.disk_usage(folder).free
    if needed > free:
        raise InputError(
            f"it unpacks to {needed / 1e6:,.0f} MB",
            file=str(source),
            expected=f"no more than the {free / 1e6:,.0f} MB that are free",
            remedy="make room, or unpack on another disk",
        )


def _extract(archive: zipfile.ZipFile, member: zipfile.ZipInfo, target: Path, source: Path) -> None:
    place = target / PurePosixPath(member.filename)
    place.parent.mkdir(parents=True, exist_ok=True)
    left = member.file_size
    with archive.open(member) as read, place.open("xb") as write:
        while chunk := read.read(_CHUNK):
            left -= len(chunk)
            if left < 0:
                raise _refused("more bytes than it says", member.filename, source)
            write.write(chunk)
    if left:
        raise _refused("fewer bytes than it says", member.filename, source)


def _refused(found: str, member: str, source: Path) -> InputError:
    return InputError(
        f"it holds {found}",
        file=str(source),
        place=member or None,
        expected="plain files below one folder, as `odograph archive` writes them",
        remedy="do not unpack it by other means; ask where it came from",
    )
