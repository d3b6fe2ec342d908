"""Damaged recordings and records by the thousand; nothing but plain errors may come of reading them.

    python tests/fuzzing/fuzz.py --what recording --minutes 10 --seed 1
    python tests/fuzzing/fuzz.py --what records --minutes 10 --seed 1

Every case is read in a process that is started anew when it dies or hangs. Reported are exceptions that are
no plain error, errors that lack a fact, readings of more than 20 seconds, and deaths of the process. The
library that reads HDF5 may die of a damaged file or go round in circles for ever; then the planning's own
survey has to turn that into a finding, which is tried at once. Status 1 when anything was reported; the cases
are printed as JSON, to be kept in `seeds/`.
"""

from __future__ import annotations

import argparse
import contextlib
import importlib
import json
import os
import random
import re
import select
import signal
import subprocess
import sys
import tempfile
import time
import traceback
from collections import Counter
from pathlib import Path
from typing import Any

LONGEST_S = 20.0
STARTING_S = 120.0
MEMORY_BYTES = 3 << 30


# ---- the process that reads


def work(kind: str, folder: Path) -> None:
    """Read one case after the other, as the lines of the standard input name them."""
    import resource

    resource.setrlimit(resource.RLIMIT_AS, (MEMORY_BYTES, MEMORY_BYTES))
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    run = runner(kind)
    answers, sys.stdout = sys.stdout, sys.stderr
    answers.write('{"ended": "ready"}\n')
    answers.flush()
    for line in sys.stdin:
        answers.write(json.dumps(run(json.loads(line), folder)) + "\n")
        answers.flush()


def runner(kind: str) -> Any:
    """A function that runs one case and tells how it ended: `read`, `refused` or `wrong` with the reason."""
    reading = importlib.import_module("reading" if kind == "recording" else "record_reading")
    write = reading.write_recording if kind == "recording" else reading.write_records

    def run(case: dict[str, Any], folder: Path) -> dict[str, str]:
        try:
            path = write(case, folder)
            return {"ended": reading.read_case(case, path)}
        except reading.WrongError as error:
            return {"ended": "wrong", "why": str(error)[:2000]}
        except BaseException as error:
            frames = traceback.extract_tb(error.__traceback__)
            own = [f"{Path(frame.filename).name}:{frame.lineno}" for frame in frames][-6:]
            return {"ended": "wrong", "why": f"{type(error).__name__}: {str(error)[:600]} ({' '.join(own)})"}

    return run


class Reader:
    """A process that reads cases; it is replaced when it dies or hangs."""

    def __init__(self, kind: str, folder: Path) -> None:
        self.kind, self.folder = kind, folder
        self.process: subprocess.Popen[bytes] | None = None
        self._left = b""

    def run(self, case: dict[str, Any]) -> dict[str, str]:
        """Read one case."""
        if self.process is None:
            self._start()
        self.process.stdin.write(json.dumps(case).encode() + b"\n")
        self.process.stdin.flush()
        answer = self._answer(LONGEST_S)
        if answer is not None:
            return answer
        hung = self.process.poll() is None and not self._died()
        status = self.stop()
        return {"ended": "hung"} if hung else {"ended": "died", "why": f"status {status}"}

    def _start(self) -> None:
        log = (self.folder / "log").open("wb")
        self.process = subprocess.Popen(
            [sys.executable, __file__, "--what", self.kind, "--work-in", str(self.folder)],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=log,
            env=dict(os.environ, OMP_NUM_THREADS="1", OPENBLAS_NUM_THREADS="1"),
        )
        log.close()
        self._left = b""
        if self._answer(STARTING_S) is None:
            raise SystemExit("the reading process does not start:\n" + (self.folder / "log").read_text())

    def _died(self) -> bool:
        with contextlib.suppress(subprocess.TimeoutExpired):
            self.process.wait(1.0)
        return self.process.poll() is not None

    def _answer(self, seconds: float) -> dict[str, str] | None:
        end = time.monotonic() + seconds
        stream = self.process.stdout.fileno()
        while b"\n" not in self._left:
            left = end - time.monotonic()
            if left <= 0 or not select.select([stream], [], [], left)[0]:
                return None
            part = os.read(stream, 1 << 16)
            if not part:
                return None
            self._left += part
        line, self._left = self._left.split(b"\n", 1)
        return json.loads(line)

    def stop(self) -> int | None:
        """End the process; returns its status."""
        if self.process is None:
            return None
        if not self._died():
            self.process.send_signal(signal.SIGKILL)
        status = self.process.wait()
        self.process.stdin.close()
        self.process.stdout.close()
        self.process = None
        return status


# ---- the search


def is_told(case: dict[str, Any], path: Path) -> str | None:
    """Whether the planning turns a recording that kills or stops its reader into a finding; if not, why."""
    from base_recordings import SETTINGS
    from reading import WrongError, check_facts

    from odograph.provenance.survey import Request, survey

    settings = json.dumps(SETTINGS[case["base"]][case["settings"]])
    error = survey([Request("walk", str(path), settings)], workers=1, patience_s=15.0)["walk"].get("error")
    if error is None:
        return "the survey reads it"
    try:
        check_facts(error)
    except WrongError as wrong:
        return str(wrong)
    return None


def search(kind: str, minutes: float, seed: int, most: int | None = None) -> int:
    """Try new cases for some minutes, or `most` of them; returns how many were reported."""
    new_case = importlib.import_module("recording_cases" if kind == "recording" else "record_damage").new_case
    ended: Counter[str] = Counter()
    reported: Counter[str] = Counter()
    start = told = time.monotonic()
    number = 0
    with tempfile.TemporaryDirectory() as name:
        reader = Reader(kind, Path(name))
        while time.monotonic() - start < 60 * minutes and (most is None or number < most):
            case = new_case(random.Random(f"{seed} {number}"))
            answer = reader.run(case)
            ended[answer["ended"]] += 1
            if answer["ended"] in ("hung", "died"):
                print(f"case {number} {answer['ended']}: {json.dumps(case)}", file=sys.stderr, flush=True)
            why = _complaint(kind, case, answer, Path(name))
            if why is not None:
                kind_of_fault = re.sub(r"[\d\W]+", " ", why)[:40]
                reported[kind_of_fault] += 1
                if reported[kind_of_fault] <= 2:
                    print(f"case {number}: {why}\n  {json.dumps(case)}", flush=True)
            number += 1
            if time.monotonic() - told > 30:
                told = time.monotonic()
                print(f"{number} cases in {told - start:.0f} s: {dict(ended)}", file=sys.stderr, flush=True)
        reader.stop()
    total = sum(reported.values())
    seconds = time.monotonic() - start
    print(f"{kind}, seed {seed}: {number} cases in {seconds:.0f} s: {dict(sorted(ended.items()))}")
    print(f"{total} to report" + "".join(f"\n  {count} x {why}" for why, count in reported.most_common()))
    return total


def _complaint(kind: str, case: dict[str, Any], answer: dict[str, str], folder: Path) -> str | None:
    if answer["ended"] in ("read", "refused"):
        return None
    if answer["ended"] == "wrong":
        return answer["why"]
    if kind == "recording":
        why = is_told(case, folder / "recording.nwb")
        return f"{answer['ended']}: {why}" if why is not None else None
    return f"{answer['ended']}: {answer.get('why', '')}"


def main() -> int:
    """The command."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--what", choices=("recording", "records"), required=True)
    parser.add_argument("--minutes", type=float, default=10.0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--cases", type=int, help="stop after so many cases")
    parser.add_argument("--work-in", type=Path, help=argparse.SUPPRESS)
    arguments = parser.parse_args()
    if arguments.work_in is not None:
        work(arguments.what, arguments.work_in)
        return 0
    return 1 if search(arguments.what, arguments.minutes, arguments.seed, arguments.cases) else 0


if __name__ == "__main__":
    sys.exit(main())
