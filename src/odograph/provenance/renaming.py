"""Writing by rename: under a name of its own beside the target, flushed, renamed; whole or not at all.

A writer that is killed leaves its temporary file behind. The next one that writes the same target removes it,
when it can tell that its writer is gone: by the process on this machine, by its age on another.
"""

from __future__ import annotations

import contextlib
import errno
import os
import re
import secrets
import shutil
import socket
from collections.abc import Callable, Iterator
from pathlib import Path

from odograph.errors import DiskFullError

_OLD_SECONDS = 86_400.0
_TEMPORARY = re.compile(r"\.(?P<stem>.+)\.(?P<host>[^.]+)-(?P<process>\d+)-[0-9a-f]{8}\.tmp(\.[^.]+)?")
_FULL = (errno.ENOSPC, errno.EDQUOT)


@contextlib.contextmanager
def renamed_into_place(path: str | Path, allowed: Callable[[], None] | None = None) -> Iterator[Path]:
    """Give a temporary name beside `path`; when the block ends well, flush it to disk and rename it.

    Parameters
    ----------
    path : str or Path
        The file to write. Its folder is made when missing.
    allowed : callable, optional
        Asked at the last moment before the rename; it raises when the file must not be written.

    Yields
    ------
    Path
        Where to write. It ends in the same suffix as `path`.

    Raises
    ------
    DiskFullError
        There is no room for the file; what stood under `path` before is still there.
    """
    target = Path(path)
    temporary = target.with_name(
        f".{target.stem}.{_host()}-{os.getpid()}-{secrets.token_hex(4)}.tmp{target.suffix}"
    )
    try:
        with disk_full_told(target):
            target.parent.mkdir(parents=True, exist_ok=True)
            yield temporary
            with temporary.open("rb") as handle:
                os.fsync(handle.fileno())
            for left in leftovers(target.parent, target.stem):
                left.unlink(missing_ok=True)
            if allowed is not None:
                allowed()
            temporary.replace(target)
    finally:
        temporary.unlink(missing_ok=True)


@contextlib.contextmanager
def disk_full_told(path: str | Path) -> Iterator[None]:
    """Tell a full disk as what it is: which file, how much is free, what to do.

    Raises
    ------
    DiskFullError
        In place of the operating system's error.
    """
    try:
        yield
    except OSError as error:
        if error.errno not in _FULL:
            raise
        raise disk_full(path, error) from error


def is_full(error: BaseException | None) -> bool:
    """Whether an error, or one that it came from, says that the disk or a quota is full."""
    while error is not None:
        if isinstance(error, DiskFullError) or (isinstance(error, OSError) and error.errno in _FULL):
            return True
        error = error.__cause__ or error.__context__
    return False


def disk_full(path: str | Path, error: BaseException) -> DiskFullError:
    """The error of a file that there is no room for."""
    quota = getattr(error, "errno", None) == errno.EDQUOT
    return DiskFullError(
        "the disk quota is used up" if quota else "no space left on the disk",
        file=str(path),
        expected=f"room for the file; {_free(Path(path))}",
        remedy="make room, then run snakemake again: nothing half written is taken for whole, and fits that "
        "are done are kept (`odograph store --drop` removes those that no result needs)",
    )


def _free(path: Path) -> str:
    folder = next((folder for folder in path.absolute().parents if folder.is_dir()), Path("/"))
    try:
        usage, files = shutil.disk_usage(folder), os.statvfs(folder)
    except OSError:
        return "how much is free cannot be told"
    if files.f_files and not files.f_favail:
        return "the file system can hold no more files"
    return f"{usage.free / 1e6:,.1f} of {usage.total / 1e6:,.1f} MB are free on it"


def leftovers(folder: str | Path, stem: str | None = None) -> list[Path]:
    """Temporary files in a folder whose writers are gone, sorted.

    Parameters
    ----------
    folder : str or Path
        Where to look; not below it.
    stem : str, optional
        Only those that were to become a file of this stem.
    """
    found = []
    with os.scandir(folder) as entries:
        for entry in entries:
            if entry.name[0] != "." or (named := _TEMPORARY.fullmatch(entry.name)) is None:
                continue
            if (stem is None or named["stem"] == stem) and _is_gone(
                named["host"], int(named["process"]), entry
            ):
                found.append(Path(entry.path))
    return sorted(found)


def _is_gone(host: str, process: int, entry: os.DirEntry[str]) -> bool:
    if host == _host():
        try:
            os.kill(process, 0)
        except ProcessLookupError:
            return True
        except PermissionError:
            return False
        return False
    # A process of another machine cannot be asked; no file takes a day to write.
    with contextlib.suppress(OSError):
        now = max(other.stat().st_mtime for other in Path(entry.path).parent.iterdir())
        return now - entry.stat().st_mtime > _OLD_SECONDS
    return False


def _host() -> str:
    return re.sub(r"[^A-Za-z0-9_]", "_", socket.gethostname()) or "host"
