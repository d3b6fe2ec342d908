"""No room on the disk, in every stage: said, nothing half-written taken for whole, the next run right."""

from __future__ import annotations

import contextlib
import errno
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path

from laboratory import Happening, Laboratory, Outcome, Study, held_still, judged, until, workers_of

from odograph.provenance.plan import STEPS

QUICK_STAGES = ("encoding",)
MEGABYTES = 24
CODE = "exit status 74"
TOLD = ("no space left on the disk", "MB are free", "what to do: make room")
NOT_HERE = "not made here: a small file system cannot be mounted (that takes root)"


@contextlib.contextmanager
def small_disk(at: Path) -> Iterator[bool]:
    """Mount a small file system in memory; False where that is not allowed."""
    at.mkdir(parents=True, exist_ok=True)
    options = f"size={MEGABYTES}m"
    command = ["mount", "-t", "tmpfs", "-o", options, "tmpfs", str(at)]
    mounted = (
        shutil.which("mount") and subprocess.run(command, capture_output=True, check=False).returncode == 0
    )
    try:
        yield bool(mounted)
    finally:
        if mounted:
            subprocess.run(["umount", "-l", str(at)], check=True)


@contextlib.contextmanager
def no_room(disk: Path) -> Iterator[None]:
    """Fill a disk to the last byte."""
    filler = disk / ".filler"
    with filler.open("wb", buffering=0) as file:
        for size in (1 << 20, 1 << 12, 1):
            try:
                while True:
                    file.write(b"\0" * size)
            except OSError as error:
                if error.errno != errno.ENOSPC:
                    raise
    try:
        yield
    finally:
        filler.unlink()


def full_disk(lab: Laboratory) -> Iterator[Happening]:
    """Fill the disk when a stage begins, make room when it has failed, run on to the next stage."""
    study = lab.fresh("full-disk")
    with small_disk(study.results) as mounted:
        if not mounted:
            yield Happening("disk full", "every stage", NOT_HERE, None, None)
            return
        if not lab.quick:
            with no_room(study.results):
                outcome = study.run()
            begun = list(study.results.rglob("*.json"))
            said = outcome.status != 0 and outcome.says(*TOLD) and not begun
            yield Happening("disk full: planning", "filled before the first run", _told(outcome), None, said)
        for stage in QUICK_STAGES if lab.quick else STEPS:
            yield _in_stage(study, stage)
        number, outcome = study.again()
        happened = f"room made; run {number} ended with {outcome.status}"
        yield judged(lab, study, "disk full: afterwards", "filler removed", happened, number == 1)


def _in_stage(study: Study, stage: str) -> Happening:
    """Run until the stage begins, hold it still, fill the disk, let it go on."""
    run = study.start("--until", stage, cores=1)
    met = until(lambda: bool(workers_of(study, stage)), run)
    with held_still(workers_of(study, stage)):
        filled = contextlib.ExitStack()
        filled.enter_context(no_room(study.results))
    with filled:
        outcome = study.end(run)
    said = met and outcome.status != 0 and outcome.says(*TOLD, CODE)
    half = [*study.results.rglob(".*.tmp*")]
    happened = _told(outcome) + (f"; left {half[0].name}" if half else "")
    done = "filled when the stage began"
    return Happening(f"disk full: {stage}", done, happened, None, said and not half)


def _told(outcome: Outcome) -> str:
    told = next((line.strip() for line in outcome.text.splitlines() if TOLD[0] in line), "NOT TOLD")
    return f"ended with {outcome.status}: {Path(told).name}"


def whole_folder(lab: Laboratory) -> Iterator[Happening]:
    """The whole study on a disk that fills while units are fitted, the engine's own files among it."""
    study = lab.fresh("full-folder")
    kept = study.folder.with_name("kept")
    study.folder.rename(kept)
    with small_disk(study.folder) as mounted:
        if not mounted:
            yield Happening("disk full: whole folder", "engine's files, too", NOT_HERE, None, None)
            return
        shutil.copytree(kept, study.folder, dirs_exist_ok=True)
        study.run("--until", "behaviour")
        with no_room(study.folder):
            outcome = study.run()
        number, last = study.again()
        happened = f"ended with {outcome.status}; room made: run {number} ended with {last.status}"
        done = "filled before the fits, the engine's own files on it"
        yield judged(
            lab, study, "disk full: whole folder", done, happened, outcome.status != 0 and number == 1
        )
