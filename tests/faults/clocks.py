"""Clocks that differ, time stamps that go backwards, and products that appear late."""

from __future__ import annotations

import os
import random
import time
from collections.abc import Iterator
from pathlib import Path

from laboratory import Happening, Laboratory, Study, judged

MINUTE_NS = 60_000_000_000
SHIFTS = {"60 s": 1, "a day": 1440}
LATE_S = 3


def clocks(lab: Laboratory) -> Iterator[Happening]:
    """Move the time stamps of products of single stages, and of all of them, and run again."""
    draw = random.Random(lab.seed)  # noqa: S311 (which products move, no secret)
    for name, minutes in SHIFTS.items():
        study = lab.copy("clocks", short=True)
        products = sorted(path for path in study.results.rglob("*") if _is_product(study, path))
        third = len(products) // 3
        draw.shuffle(products)
        _as_if_just_made(study)
        for number, path in enumerate(products[: 2 * third]):
            _shift(path, (minutes if number < third else -minutes) * MINUTE_NS)
        number, outcome = study.again()
        rest = study.run()
        quiet = rest.says("Nothing to be done")
        happened = f"run {number} ended with {outcome.status}"
        happened += f", then {'nothing' if quiet else 'STILL SOMETHING'} to do"
        done = f"a third of the products {name} ahead, a third behind (seed {lab.seed})"
        yield judged(lab, study, "time stamps", done, happened, number == 1 and quiet)


def other_head(lab: Laboratory) -> Iterator[Happening]:
    """A study made on a machine whose clock is ahead goes on, with other settings, on one that is not."""
    other = lab.undisturbed("other", short=True)
    study = lab.copy("other-head", short=True)
    _as_if_just_made(study)
    for path in _files(study):
        _shift(path, MINUTE_NS)
    study.settings = other.study.settings
    first = study.run("--until", "behaviour")
    number, outcome = study.again()
    said = first.says("lie in the future")
    happened = f"ended with {first.status} and {outcome.status}, {'said' if said else 'NOT SAID'}"
    done = "made with a clock a minute ahead, then other settings, stopped after behaviour, run on"
    holds = first.status == 0 and number == 1 and said
    yield judged(lab, study, "a head with another clock", done, happened, holds, of="other")


def late(lab: Laboratory) -> Iterator[Happening]:
    """Products appear seconds after their jobs have ended, as on a network file system."""
    study = lab.fresh("late", short=True)
    study.environment = {"PYTHONPATH": str(Path(__file__).with_name("late")), "LATE_S": str(LATE_S)}
    number, outcome = study.again()
    happened = f"run {number} ended with {outcome.status}"
    done = f"every product appears {LATE_S} s after its job"
    yield judged(lab, study, "delayed view", done, happened, number == 1 and outcome.status == 0)


def _is_product(study: Study, path: Path) -> bool:
    apart = {study.results / "plan", study.results / "store"}
    return path.is_file() and not apart & set(path.parents)


def _files(study: Study) -> list[Path]:
    return [path for path in study.results.rglob("*") if path.is_file()]


def _as_if_just_made(study: Study) -> None:
    """Move all time stamps so that the latest is now."""
    since = time.time_ns() - max(path.stat().st_mtime_ns for path in _files(study))
    for path in _files(study):
        _shift(path, since)


def _shift(path: Path, by_ns: int) -> None:
    stamp = path.stat().st_mtime_ns + by_ns
    os.utime(path, ns=(stamp, stamp))
