"""Bringing recordings from object storage and web servers: only those that moved there, whole or not at all.

A note beside every local copy says what the recording looked like on its server. Equal looks mean that
nothing is fetched. What cannot be fetched is told as a finding, by address, and the others go on.
"""

from __future__ import annotations

import contextlib
import hashlib
import queue
import shutil
import sys
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

from odograph.errors import DiskFullError, InputError
from odograph.provenance.known import keep_known, read_known
from odograph.provenance.places import FETCHED, local_place
from odograph.provenance.remote import RefusedError, Remote, SilentError, Stamp, UnreachableError
from odograph.provenance.renaming import renamed_into_place

NOTE = "fetched.json"
#: What is added to the name of a copy that its server withdrew; it comes back with the recording.
WITHDRAWN = ".withdrawn"
_LOOKS_AT_ONCE = 16
_FETCHES_AT_ONCE = 4
_TRIES = 3
_SECONDS_BETWEEN_TRIES = 1.0
_PATIENCE_S = 120.0
_QUIET_SECONDS = 1.0
_SECONDS_BETWEEN_LINES = 5.0
_ROOM_LEFT = 100_000_000
_PIECE = 1 << 22


Sign = Callable[[], None]


class _LateError(Exception):
    """Nobody waits any more for what this thread does."""


class _MovedError(Exception):
    """The recording is not what it was when its fetching began."""


def fetch_recordings(
    remotes: Mapping[str, Remote], folder: str | Path = ".", *, patience_s: float = _PATIENCE_S
) -> dict[str, dict[str, Any]]:
    """Bring the local copies of recordings up to date.

    Parameters
    ----------
    remotes : mapping of str to Remote
        The recordings by address.
    folder : str or Path
        The study's folder.
    patience_s : float
        How long a server may say nothing before it counts as out of reach.

    Returns
    -------
    dict
        A finding for every address that there is no copy of, or none that may be used.

    Raises
    ------
    DiskFullError
        There is no room for what has to be fetched.
    """
    copies = {address: _Copy(address, Path(folder) / local_place(address)) for address in sorted(remotes)}
    servers = _Servers()
    looks = _at_once(
        lambda address, sign: servers.look(address, remotes[address], sign),
        list(copies),
        _LOOKS_AT_ONCE,
        patience_s,
        late=servers.late,
    )
    moved, failed = [], {}
    for address, look in looks.items():
        if isinstance(look, Exception):
            failed[address] = look
        elif not copies[address].is_of(look):
            moved.append(address)
    _see_room([looks[address].size or 0 for address in moved], Path(folder))
    progress = _Progress({address: looks[address].size for address in moved})
    fetched = _at_once(
        lambda address, sign: _fetch(remotes[address], looks[address], copies[address], sign, progress),
        moved,
        _FETCHES_AT_ONCE,
        patience_s,
        tell=progress.tell,
    )
    failed |= {address: answer for address, answer in fetched.items() if isinstance(answer, Exception)}
    return _findings(failed, copies)


def _findings(failed: Mapping[str, Exception], copies: Mapping[str, _Copy]) -> dict[str, dict[str, Any]]:
    findings = {}
    for address, error in sorted(failed.items()):
        if isinstance(error, UnreachableError) and copies[address].is_whole():
            print(f"odograph: {address}: {error.found}; the copy of before is used", file=sys.stderr)
            continue
        if isinstance(error, OSError):
            raise _not_written(copies[address], error) from error
        if not isinstance(error, InputError):
            raise error
        if isinstance(error, RefusedError):
            copies[address].withdraw()
        findings[address] = error.finding() | {"file": address}
    return findings


def _not_written(copy: _Copy, error: OSError) -> InputError:
    return InputError(
        f"the copy of {copy.address} cannot be written ({error.strerror})",
        file=str(copy.path),
        expected="a folder that can be written to",
        remedy="see to the folder, then run snakemake again",
    )


@dataclass(frozen=True)
class _Copy:
    """The local copy of a recording, and the note beside it."""

    address: str
    path: Path

    def is_of(self, stamp: Stamp) -> bool:
        """Whether it is a copy of what now lies at its address; one that was withdrawn comes back."""
        note = read_known(self.path.parent / NOTE)
        if not stamp.tells or note.get("stamp") != stamp.facts():
            return False
        aside = self.path.with_name(self.path.name + WITHDRAWN)
        if not self.path.exists() and note.get("local") == _local(aside):
            aside.replace(self.path)
        return note.get("local") == _local(self.path) is not None

    def is_whole(self) -> bool:
        """Whether there is a copy, and nobody touched it since it was fetched."""
        return read_known(self.path.parent / NOTE).get("local") == _local(self.path) is not None

    def withdraw(self) -> None:
        """Set it aside: its server does not stand for it any more, and perhaps nobody else has it."""
        if self.path.exists():
            self.path.replace(self.path.with_name(self.path.name + WITHDRAWN))

    def note(self, stamp: Stamp) -> None:
        """Say what it is a copy of."""
        document = {"address": self.address, "stamp": stamp.facts(), "local": _local(self.path)}
        keep_known(self.path.parent / NOTE, document)
        self.path.with_name(self.path.name + WITHDRAWN).unlink(missing_ok=True)


def _local(path: Path) -> list[int] | None:
    try:
        stat = path.stat()
    except OSError:
        return None
    return [stat.st_size, stat.st_mtime_ns]


def _fetch(remote: Remote, look: Stamp, copy: _Copy, sign: Sign, progress: _Progress) -> None:
    """Fetch one recording; again when it changes meanwhile."""

    def came(number: int) -> None:
        sign()
        progress.came(copy.address, number)

    def copy_to(path: Path) -> None:
        progress.begin(copy.address)
        remote.copy_to(path, came)

    for _ in range(_TRIES):
        try:
            with renamed_into_place(copy.path, sign) as temporary:
                _stubborn(partial(copy_to, temporary), sign)
                now = _stubborn(remote.stamp, sign)
                if now.facts() != look.facts():
                    raise _MovedError
                _check(temporary, look, sign)
        except _MovedError:
            look = now
            continue
        copy.note(look)
        progress.end(copy.address)
        return
    raise RefusedError(
        f"the recording changed {_TRIES} times while it was fetched",
        expected="a recording that nobody writes to",
        remedy="wait until it is uploaded, then run snakemake again",
    )


def _check(path: Path, look: Stamp, sign: Sign) -> None:
    """See that what came is what the server has."""
    size = path.stat().st_size
    if look.size is not None and size != look.size:
        raise RefusedError(
            f"{size} bytes came of {look.size}",
            expected="the whole recording",
            remedy="run snakemake again; if it stays so, look at the server",
        )
    for name, wanted in (("md5", look.md5), ("sha256", look.sha256)):
        if wanted is not None and (found := _digest(path, name, sign)) != wanted:
            raise RefusedError(
                f"what came has the {name} checksum {found}",
                expected=f"{wanted}, as the server says",
                remedy="run snakemake again; if it stays so, upload the recording anew",
            )


def _digest(path: Path, name: str, sign: Sign) -> str:
    digest = hashlib.new(name, usedforsecurity=False)
    with path.open("rb") as file:
        while piece := file.read(_PIECE):
            digest.update(piece)
            sign()
    return digest.hexdigest()


def _stubborn(work: Callable[[], Any], sign: Sign) -> Any:
    """Try again what a server may do at the next try."""
    for left in reversed(range(_TRIES)):
        sign()
        try:
            return work()
        except UnreachableError:
            if not left:
                raise
            time.sleep(_SECONDS_BETWEEN_TRIES)
    return None


class _Servers:
    """Servers that gave no answer: they are not asked for every single recording."""

    def __init__(self) -> None:
        self._silent: dict[str, SilentError] = {}

    def look(self, address: str, remote: Remote, sign: Sign) -> Stamp:
        """What a recording looks like on its server."""
        server = self._server(address)
        if server in self._silent:
            raise self._silent[server]
        try:
            return _stubborn(remote.stamp, sign)
        except SilentError as error:
            self._silent[server] = error
            raise

    def late(self, address: str, error: SilentError) -> None:
        """Note that nothing came from a server for too long."""
        self._silent[self._server(address)] = error

    @staticmethod
    def _server(address: str) -> str:
        parts = urlsplit(address)
        return parts.scheme.lower() if parts.scheme.lower() == "s3" else parts.netloc.lower()


def _at_once(
    work: Callable[[str, Sign], Any],
    addresses: Sequence[str],
    workers: int,
    patience_s: float,
    *,
    late: Callable[[str, SilentError], None] = lambda address, error: None,
    tell: Callable[[], None] = lambda: None,
) -> dict[str, Any]:
    """Do the same for many addresses, several at a time; an answer may be the exception that ended it.

    A library may wait for ever. So a thread gives signs of life, and one that gives none for too long is
    left behind: its next sign ends it.
    """
    waiting, answers = list(reversed(addresses)), {}
    lock, signs = threading.Lock(), {}
    done: queue.SimpleQueue[tuple[str, Any]] = queue.SimpleQueue()

    def sign(address: str) -> None:
        with lock:
            if address not in signs:
                raise _LateError
            signs[address] = time.monotonic()

    def run(address: str) -> None:
        try:
            done.put((address, work(address, partial(sign, address))))
        except Exception as error:  # told by whoever asked
            done.put((address, error))

    while waiting or signs:
        while waiting and len(signs) < workers:
            address = waiting.pop()
            signs[address] = time.monotonic()
            threading.Thread(target=run, args=(address,), daemon=True).start()
        with contextlib.suppress(queue.Empty):
            address, answer = done.get(timeout=0.1)
            with lock:
                if signs.pop(address, None) is not None:
                    answers[address] = answer
        with lock:
            ended = time.monotonic() - patience_s
            for address in [address for address, seen in signs.items() if seen < ended]:
                del signs[address]
                answers[address] = _too_late(patience_s)
                late(address, answers[address])
        tell()
    return answers


def _too_late(patience_s: float) -> SilentError:
    return SilentError(
        f"nothing came from the server for {patience_s:.0f} s",
        expected="an answer",
        remedy="see that the host's name and the network are right, then run snakemake again",
    )


def _see_room(sizes: Sequence[int], folder: Path) -> None:
    free = shutil.disk_usage(folder).free
    if sum(sizes) + _ROOM_LEFT > free and sizes:
        raise DiskFullError(
            f"{len(sizes)} recordings of {sum(sizes) / 1e6:,.0f} MB have to be fetched",
            file=str(folder / FETCHED),
            expected=f"room for them; {free / 1e6:,.0f} MB are free",
            remedy="make room, or make that folder a link to one on a larger disk; then run snakemake again",
        )


class _Progress:
    """What came and how fast, told on the error stream when it takes more than a second."""

    def __init__(self, sizes: Mapping[str, int | None]) -> None:
        self._sizes = sizes
        self._came = dict.fromkeys(sizes, 0)
        self._begun: dict[str, float] = {}
        self._done = 0
        self._start = time.monotonic()
        self._next = self._start + _QUIET_SECONDS

    def begin(self, address: str) -> None:
        """Fetching a recording begins, perhaps anew."""
        self._came[address] = 0
        self._begun[address] = time.monotonic()

    def came(self, address: str, number: int) -> None:
        """Some bytes came; the parts of one object come in threads, and a few bytes lost here do no harm."""
        self._came[address] += number

    def end(self, address: str) -> None:
        """A recording is whole."""
        self._done += 1
        seconds = time.monotonic() - self._begun[address]
        if seconds > _QUIET_SECONDS:
            size = self._came[address] / 1e6
            print(
                f"odograph: fetched {address}: {size:,.1f} MB in {seconds:.1f} s, {size / seconds:,.1f} MB/s",
                file=sys.stderr,
                flush=True,
            )

    def tell(self) -> None:
        """Say how far it is."""
        now = time.monotonic()
        if now < self._next:
            return
        self._next = now + _SECONDS_BETWEEN_LINES
        came, size = sum(self._came.values()), sum(size or 0 for size in self._sizes.values())
        speed = came / (now - self._start)
        left = f", about {(size - came) / speed:,.0f} s left" if speed and size > came else ""
        print(
            f"odograph: fetching recordings: {self._done} of {len(self._sizes)}, {came / 1e6:,.1f} of "
            f"{size / 1e6:,.1f} MB, {speed / 1e6:,.1f} MB/s{left}",
            file=sys.stderr,
            flush=True,
        )
