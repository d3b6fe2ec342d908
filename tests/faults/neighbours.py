"""Two runs in one folder at the same time, and two studies that share one store."""

from __future__ import annotations

import json
from collections.abc import Iterator

from laboratory import Happening, Laboratory, Study, judged, kept, processes_of, until

RUN_LOCK = "plan/run.lock"


def two_runs(lab: Laboratory) -> Iterator[Happening]:
    """A second run begins while the first plans or works; the recording may have changed in between."""
    cases = [("while units are fitted", _fitting, False)]
    if not lab.quick:
        cases += [("while it plans", _planning, False), ("while units are fitted", _fitting, True)]
    for moment, reached, replaced in cases:
        study = lab.fresh("two-runs", short=True)
        first = study.start(cores=1)
        until(lambda study=study, reached=reached: reached(study), first)
        if replaced:
            lab.resort(study)
        second, looked, unlocked = study.run(), study.run("-n"), study.run("--unlock")
        outcome = study.end(first)
        named = f"process {first.pid} on "
        told = second.status != 0 and second.says(named, "is at work in this folder", "wait until it is done")
        safe = unlocked.status != 0 and unlocked.says(named, "its lock is in use and stays")
        beside = looked.status == 0 and looked.says(named, "this is its plan")
        happened = f"the second {'was told which process works there' if told else 'WAS NOT TOLD'}"
        happened += (
            f", --unlock {'refused' if safe else 'NOT REFUSED'}, -n {'looked on' if beside else 'FAILED'}"
        )
        happened += f"; the first ended with {outcome.status}"
        # A recording that was replaced under the first run may end it with code 75: run again.
        first_holds = outcome.status == 0 or (replaced and outcome.says("changed since this run was planned"))
        number, last = study.again()
        holds = told and safe and beside and first_holds and number == 1 and last.status == 0
        done = (
            "the recording replaced, then a second run" if replaced else "a second run, --unlock, a dry run"
        )
        of = "resorted" if replaced else "first"
        yield judged(lab, study, f"two runs, {moment}", done, happened, holds, of=of)


def _planning(study: Study) -> bool:
    return _noted(study) and bool(processes_of(study, "survey_recordings"))


def _fitting(study: Study) -> bool:
    return _noted(study) and bool(list(study.results.glob("store/??/*.npz")))


def _noted(study: Study) -> bool:
    try:
        return "process" in json.loads((study.results / RUN_LOCK).read_text())
    except (OSError, ValueError):
        return False


def shared_store(lab: Laboratory) -> Iterator[Happening]:
    """Two studies whose results/store is one folder run at the same time, the same fits among theirs."""
    store = lab.folder / "shared store"
    store.mkdir()
    other = lab.undisturbed("other", short=True)
    studies = [lab.fresh("shares", True), lab.fresh("shares-too", True, sync=other.study.settings["sync"])]
    for study in studies:
        study.results.mkdir()
        (study.results / "store").symlink_to(store, target_is_directory=True)
    runs = [study.start(cores=1) for study in studies]
    outcomes = [study.end(run) for study, run in zip(studies, runs, strict=True)]
    dropped = studies[0].odograph("store", "--drop")
    whole = studies[0].odograph("store", "--check").status == 0
    refused = dropped.status != 0 and dropped.says("shared", "--results")
    needed = kept(studies[1]).keys() >= other.fits.keys()
    happened = (
        f"ended with {outcomes[0].status} and {outcomes[1].status}, {len(kept(studies[0]))} fits, all whole"
    )
    happened += f"; --drop {'asks for every study' if refused else 'DROPPED'}"
    holds = outcomes[0].status == outcomes[1].status == 0 and whole and refused and needed
    for study, of in zip(studies, ("first", "other"), strict=True):
        yield judged(
            lab, study, f"one store, study {of}", "both run at the same time", happened, holds, of=of
        )
