"""The head, all of a run, or one of its workers killed at seeded moments; and a run that is asked to stop."""

from __future__ import annotations

import os
import random
import signal
import time
from collections.abc import Iterator

from laboratory import Happening, Laboratory, Study, judged, kill_all, processes_of, until, workers_of

MOMENTS, QUICK_MOMENTS = 25, 2
# Over how much of an undisturbed run a moment is drawn; more would let most runs end before it.
SPAN = 0.35
TARGETS = ("all of the run", "the head alone", "a worker")


def killed(lab: Laboratory) -> Iterator[Happening]:
    """Kill at seeded moments, unlock, run again, kill again.

    Every run goes on where the one before was killed, so that the moments fall anywhere between planning and
    the root. Whenever the study comes to its end its bytes are compared, and it begins from nothing.
    """
    draw = random.Random(lab.seed)  # noqa: S311 (moments, no secrets)
    whole = lab.undisturbed()
    moments = QUICK_MOMENTS if lab.quick else MOMENTS
    targets = [TARGETS[(number + 1) % len(TARGETS)] for number in range(moments)]
    draw.shuffle(targets)
    study = lab.fresh("killed")
    kills = dict.fromkeys(TARGETS, 0)
    ends, bad, unlocked, runs = 0, [], [], 0
    while targets:
        runs += 1
        if (unlock := study.unlock()) is not None and unlock.status != 0:
            bad.append(f"unlocking ended with {unlock.status}")
        run = study.start()
        moment = draw.uniform(0.0, SPAN * whole.seconds)
        begun = time.monotonic()
        until(lambda begun=begun, moment=moment: time.monotonic() - begun >= moment, run)
        if run.poll() is None and _kill(targets[-1], study, run):
            kills[targets.pop()] += 1
            unlocked.append(_told_to_unlock(study))
        outcome = study.end(run)
        if outcome.status == 0:
            ends += 1
            bad += _compared(lab, study)
            study.forget()
    number, _ = study.again()
    bad += _compared(lab, study)
    told = ", ".join(f"{name} {count}" for name, count in kills.items())
    happened = f"killed {told} times; {ends + 1} times at the end, {runs + number} runs"
    happened += "; " + "; ".join(sorted(set(bad))) if bad else ""
    if not all(unlocked):
        happened += "; a lock was left without a word of --unlock"
    done = f"SIGKILL at {moments} moments (seed {lab.seed}), unlocked, run again"
    yield judged(lab, study, "kill -9 over the run", done, happened, not bad and all(unlocked))


def _kill(target: str, study: Study, run) -> bool:
    if target == "a worker":
        if not until(lambda: bool(workers_of(study)), run):
            return False
        for number in workers_of(study)[:1]:
            os.kill(number, signal.SIGKILL)
        return True
    if target == "the head alone":
        run.kill()
        return True
    os.killpg(run.pid, signal.SIGKILL)
    run.wait()
    kill_all(study)
    return True


def _told_to_unlock(study: Study) -> bool:
    """Whether a run that finds the lock of a killed one says how to take it away."""
    locks = study.folder / ".snakemake" / "locks"
    if not locks.is_dir() or not any(locks.iterdir()) or processes_of(study, "snakemake --snakefile"):
        return True
    if study.asked:
        return True
    study.asked = True
    outcome = study.run()
    return outcome.status != 0 and outcome.says("was killed", "--unlock")


def _compared(lab: Laboratory, study: Study) -> list[str]:
    # Workers that outlived their head must not spoil what the next run made.
    while workers_of(study):
        time.sleep(0.05)
    return [f"not the same: {name}" for name in lab.undisturbed().differences(study)[:3]]


def stopped(lab: Laboratory) -> Iterator[Happening]:
    """Ask the head to stop while it works: it ends in order, nothing stays locked, the next run goes on."""
    for number, name in ((signal.SIGINT, "SIGINT"), (signal.SIGTERM, "SIGTERM")):
        study = lab.fresh(f"stopped-{name}", short=True)
        run = study.start()
        until(lambda study=study: bool(list(study.results.glob("store/??/*.npz"))), run)
        os.kill(run.pid, number)
        outcome = study.end(run)
        left = study.folder / ".snakemake" / "locks"
        in_order = outcome.status != 0 and not (left.is_dir() and any(left.iterdir()))
        orphans = len(workers_of(study))
        again, last = study.again()
        happened = (
            f"ended with {outcome.status}, {'unlocked' if in_order else 'LOCKED'}, {orphans} workers left"
        )
        happened += f"; run again {again} time{'s' if again > 1 else ''}"
        holds = in_order and orphans == 0 and again == 1 and last.status == 0
        yield judged(lab, study, f"{name} to the head", "while units were fitted", happened, holds)


def after_a_change(lab: Laboratory) -> Iterator[Happening]:
    """A setting of sync is changed in a finished study, and the job after it is killed amid old results."""
    warned = lab.undisturbed("warned")
    study = lab.copy("changed")
    study.settings = warned.study.settings
    run = study.start(cores=1)
    met = until(lambda: bool(workers_of(study, "behaviour")), run) and _kill("a worker", study, run)
    study.end(run)
    number, outcome = study.again()
    happened = f"run {number} ended with {outcome.status}"
    done = "a setting of sync changed in a finished study, then SIGKILL to behaviour"
    holds = met and number == 1 and outcome.status == 0
    yield judged(lab, study, "kill -9 amid old results", done, happened, holds, of="warned")


def orphaned(lab: Laboratory) -> Iterator[Happening]:
    """A worker that outlives its head writes after the next run, which has other settings, wrote."""
    other = lab.undisturbed("other", short=True)
    differ = bool(other.differences(lab.undisturbed("first", short=True).study))
    study = lab.fresh("orphaned", short=True)
    run = study.start()
    until(lambda: bool(workers_of(study, "behaviour")), run)
    orphans = workers_of(study, "behaviour")
    for orphan in orphans:
        os.kill(orphan, signal.SIGSTOP)
    run.kill()
    run.wait()
    study.settings = other.study.settings
    number, outcome = study.again()
    for orphan in orphans:
        os.kill(orphan, signal.SIGCONT)
    while workers_of(study):
        time.sleep(0.05)
    happened = f"the next run ended with {outcome.status}; compared once the old worker had ended"
    done = "head killed, its worker held still, the next run with other settings, the worker let go"
    holds = differ and bool(orphans) and number == 1 and outcome.status == 0
    yield judged(lab, study, "an orphan of behaviour", done, happened, holds, of="other")
