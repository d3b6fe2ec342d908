"""Clocks that differ, time stamps that go backwards, and products that appear late."""

from __future__ import annotations

import os
import random
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
        for number, path in enumerate(products[: 2 * third]):
            _shift(path, minutes if number < third else -minutes)
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
    for path in [path for path in study.results.rglob("*") if path.is_file()]:
        _shift(path, 1)
    study.settings = other.study.settings
    first = study.run("--until", "sync")
    number, outcome = study.again()
    said = first.says("lie in the future")
    happened = f"ended with {first.status} and {outcome.status}, {'said' if said else 'NOT SAID'}"
    done = "made with a clock a minute ahead, then other settings, stopped after sync, run on"
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


def _shift(path: Path, minutes: int) -> None:
    stamp = path.stat().st_mtime_ns + minutes * MINUTE_NS
    os.utime(path, ns=(stamp, stamp))
