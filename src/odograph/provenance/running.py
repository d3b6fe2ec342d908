"""Which run holds a study's folder: one at a time, and its jobs know whether it is still the one.

A run locks ``results/plan/run.lock`` from its planning to its end. The operating system takes the lock back
when the process ends, however it ends, so a lock that is held means a run that is alive. The file says which
process on which machine. Every run has a number greater than those before it, which its jobs inherit in their
environment: a job that outlived its run sees the number of the next one and writes no product any more.
"""

from __future__ import annotations

import contextlib
import fcntl
import json
import os
import socket
import sys
import time
from collections.abc import Iterator, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import IO, Any

from odograph.errors import ChangedInputError, InputError
from odograph.provenance.layout import PLAN
from odograph.provenance.renaming import disk_full_told
from odograph.provenance.time_stamps import set_back_stamps

RUN_LOCK = PLAN / "run.lock"
PLANNING_LOCK = PLAN / "planning.lock"
ENGINE_LOCKS = Path(".snakemake") / "locks"
NUMBER = "ODOGRAPH_RUN"
# What makes the engine only look at the study, however often and beside whatever run.
_LOOKING = (
    *("-n", "--dry-run", "--dryrun", "--dag", "--rulegraph", "--filegraph", "--d3dag", "--summary", "-S"),
    *("--detailed-summary", "-D", "--lint", "--list-rules", "--list", "-l", "--list-target-rules", "--lt"),
    *("--list-input-changes", "--list-params-changes", "--list-code-changes", "--print-compilation"),
    "--report",
)

# The lock lasts as long as its file is open.
_held: dict[str, IO[str]] = {}


def only_looks(arguments: Sequence[str]) -> bool:
    """Whether a command line of the engine makes it look at the study and run nothing."""
    return any(
        argument in _LOOKING
        or (argument[:1] == "-" and argument[1:2] != "-" and argument[1:] in ("np", "nr"))
        for argument in arguments
    )


@contextlib.contextmanager
def planning(arguments: Sequence[str], main_process: bool = True) -> Iterator[bool]:
    """Plan alone: others that plan at this moment wait, and a second run is refused.

    Parameters
    ----------
    arguments : sequence of str
        The command line of the engine. One that only looks never holds the folder.
    main_process : bool
        False in a job that parses the workflow again: it belongs to a run that holds the folder.

    Yields
    ------
    bool
        Whether to plan. Not while another run is at work: what it was planned with must stay as it is.

    Raises
    ------
    InputError
        Another run is at work in this folder, and this is to be one, too.
    """
    if not main_process or str(RUN_LOCK.absolute()) in _held:
        yield main_process
        return
    looks = only_looks(arguments)
    with _alone():
        file = _open(RUN_LOCK)
        if not _lock(file, fcntl.LOCK_EX | fcntl.LOCK_NB):
            holder = _told(_read(file))
            file.close()
            if not looks:
                raise _refusal(holder, "--unlock" in arguments)
            print(f"odograph: {holder} is at work in this folder; this is its plan", file=sys.stderr)
            yield False
            return
        if looks:
            file.close()
        else:
            _hold(file, "--unlock" in arguments)
        yield True


def still_in_charge() -> None:
    """See that the run that this job belongs to is the last one of its folder.

    Raises
    ------
    ChangedInputError
        Another run began since.
    """
    own = os.environ.get(NUMBER, "")
    if not own.isdecimal():
        return
    try:
        now = int(json.loads(RUN_LOCK.read_bytes())["run"])
    except (OSError, ValueError, KeyError, TypeError):
        return
    # A smaller number is what a network file system still shows of the run before.
    if now > int(own):
        raise ChangedInputError(
            "another run of this study began while this job, which an earlier one had started, was at work",
            expected="the run that started it to be the last one",
            remedy="nothing: the later run makes what is missing; fits that are done are kept",
        )


def refuse_beside_a_run(folder: Path) -> None:
    """See that no run is at work in a study's folder.

    Raises
    ------
    InputError
        One is.
    """
    if not (folder / RUN_LOCK).is_file():
        return
    with (folder / RUN_LOCK).open("r+", encoding="utf-8", errors="replace") as file:
        if not _lock(file, fcntl.LOCK_EX | fcntl.LOCK_NB):
            raise _refusal(_told(_read(file)), unlocking=False)


def _hold(file: IO[str], unlocking: bool) -> None:
    before = _read(file)
    if ENGINE_LOCKS.is_dir() and any(ENGINE_LOCKS.iterdir()) and not unlocking:
        print(
            f"odograph: {_told(before)} was killed, and its lock is still there; no run is alive here, so "
            "`snakemake --unlock` with the options of this call takes it away",
            file=sys.stderr,
        )
    number = max(time.time_ns() // 1_000_000, _number(before) + 1)
    note = {
        "run": number,
        "host": socket.gethostname(),
        "process": os.getpid(),
        "started": datetime.now(UTC).isoformat(timespec="seconds"),
    }
    # In place: a file of another inode would be another lock.
    with disk_full_told(RUN_LOCK):
        file.seek(0)
        file.write(json.dumps(note, sort_keys=True).ljust(200) + "\n")
        file.flush()
    os.environ[NUMBER] = str(number)
    _held[str(RUN_LOCK.absolute())] = file
    set_back_stamps(os.fstat(file.fileno()).st_mtime_ns)


@contextlib.contextmanager
def _alone() -> Iterator[None]:
    with _open(PLANNING_LOCK) as file:
        if not _lock(file, fcntl.LOCK_EX | fcntl.LOCK_NB):
            print("odograph: waiting for another planning in this folder", file=sys.stderr, flush=True)
            _lock(file, fcntl.LOCK_EX)
        yield


def _open(path: Path) -> IO[str]:
    with disk_full_told(path):
        path.parent.mkdir(parents=True, exist_ok=True)
        return os.fdopen(
            os.open(path, os.O_RDWR | os.O_CREAT, 0o666), "r+", encoding="utf-8", errors="replace"
        )


def _lock(file: IO[str], how: int) -> bool:
    try:
        fcntl.flock(file, how)
    except BlockingIOError:
        return False
    except OSError:
        # A file system without locks: the engine's own remains.
        return True
    return True


def _read(file: IO[str]) -> dict[str, Any]:
    try:
        file.seek(0)
        note = json.loads(file.read(4096))
    except ValueError:
        return {}
    return note if isinstance(note, dict) else {}


def _number(note: dict[str, Any]) -> int:
    return note["run"] if isinstance(note.get("run"), int) else 0


def _told(note: dict[str, Any]) -> str:
    if not {"process", "host", "started"} <= note.keys():
        return "a run"
    return f"a run (process {note['process']} on {note['host']}, begun {note['started']})"


def _refusal(holder: str, unlocking: bool) -> InputError:
    remedy = "wait until it is done, or stop it (one Ctrl-C, or `kill` with the number of its process)"
    if unlocking:
        remedy += "; its lock is in use and stays"
    else:
        remedy += "; `snakemake --unlock` is for a run that was killed, and this one lives"
    return InputError(
        f"{holder} is at work in this folder",
        file=str(RUN_LOCK),
        expected="one run at a time",
        remedy=remedy,
    )
