"""Two runs in one folder at the same time, and two studies that share one store."""

from __future__ import annotations

import json
import subprocess
from collections.abc import Iterator

from laboratory import Happening, Laboratory, Outcome, Study, held_still, judged, kept, processes_of, until

RUN_LOCK = "plan/run.lock"


def two_runs(lab: Laboratory) -> Iterator[Happening]:
    """A second run begins while the first plans or works; the recording may have changed in between."""
    yield _second_run(lab, replaced=False)
    if not lab.quick:
        yield _second_run(lab, replaced=True)
        yield _while_it_plans(lab)


def _second_run(lab: Laboratory, replaced: bool) -> Happening:
    study = lab.fresh("two-runs", short=True)
    first = study.start(cores=1)
    until(lambda: _noted(study) and bool(list(study.results.glob("store/??/*.npz"))), first)
    if replaced:
        lab.resort(study)
    # Held still, it works as long as the others need.
    with held_still([first.pid]):
        second, looked, unlocked = study.run(), study.run("-n"), study.run("--unlock")
    outcome = study.end(first)
    told, named = _is_told(second, first), f"process {first.pid} on "
    safe = unlocked.status != 0 and unlocked.says(named, "its lock is in use and stays")
    beside = looked.status == 0 and looked.says(named, "this is its plan")
    happened = f"the second {'told of' if told else 'NOT TOLD OF'} the first"
    happened += f", --unlock {'refused' if safe else 'NOT REFUSED'}, -n {'looked on' if beside else 'FAILED'}"
    happened += f"; the first ended with {outcome.status}"
    # A recording that was replaced under the first run may end it with code 75: run again.
    in_order = outcome.status == 0 or (replaced and outcome.says("changed since this run was planned"))
    number, last = study.again()
    holds = told and safe and beside and in_order and number == 1 and last.status == 0
    done = "the recording replaced, " * replaced + "a second run, a dry run, --unlock"
    of = "resorted" if replaced else "first"
    return judged(lab, study, "two runs, while units are fitted", done, happened, holds, of=of)


def _while_it_plans(lab: Laboratory) -> Happening:
    study = lab.fresh("two-plannings", short=True)
    first = study.start(cores=1)
    until(lambda: _noted(study) and bool(processes_of(study, "survey_recordings")), first)
    second = study.run()
    told, outcome = _is_told(second, first), study.end(first)
    happened = (
        f"the second {'told of' if told else 'NOT TOLD OF'} the first, which ended with {outcome.status}"
    )
    return judged(
        lab, study, "two runs, while it plans", "a second run", happened, told and outcome.status == 0
    )


def _is_told(second: Outcome, first: subprocess.Popen[str]) -> bool:
    words = (f"process {first.pid} on ", "is at work in this folder", "wait until it is done", "--unlock")
    return second.status != 0 and second.says(*words)


def _noted(study: Study) -> bool:
    try:
        return "process" in json.loads((study.results / RUN_LOCK).read_text())
    except (OSError, ValueError):
        return False


def shared_store(lab: Laboratory) -> Iterator[Happening]:
    """Two studies whose results/store is one folder make the same fits at the same time."""
    store = lab.folder / f"store of pass {lab.seed}"
    store.mkdir()
    studies = [lab.fresh(name, short=True) for name in ("shares", "shares-too")]
    for study in studies:
        study.results.mkdir()
        (study.results / "store").symlink_to(store, target_is_directory=True)
    runs = [study.start(cores=1) for study in studies]
    outcomes = [study.end(run) for study, run in zip(studies, runs, strict=True)]
    dropped = studies[0].odograph("store", "--drop")
    whole = studies[0].odograph("store", "--check").status == 0
    refused = dropped.status != 0 and dropped.says("shared", "--results")
    happened = f"ended with {outcomes[0].status} and {outcomes[1].status}, {len(kept(studies[0]))} fits"
    happened += f", {'all' if whole else 'NOT ALL'} whole; --drop {'asks for both' if refused else 'DROPPED'}"
    holds = outcomes[0].status == outcomes[1].status == 0 and whole and refused
    for number, study in enumerate(studies, start=1):
        yield judged(
            lab, study, f"one store, study {number} of 2", "both run at the same time", happened, holds
        )
