"""Reading many recordings at once in processes of their own, for the planning."""

from __future__ import annotations

import json
import os
import queue
import subprocess
import sys
import threading
import time
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

_READER = "odograph.steps.survey_recordings"
_QUIET_SECONDS = 1.0
_SECONDS_BETWEEN_LINES = 5.0
# A damaged file may send its reader round in circles for ever. Voltage is not read, so even a large file on a
# slow disk is done long before this.
_PATIENCE_S = 120.0
_PATIENCE_S_PER_BYTE = 1 / 2e6


@dataclass(frozen=True)
class Request:
    """One recording to survey.

    Parameters
    ----------
    session : str
        Name of the session.
    nwb : str
        Path of the recording.
    settings : str
        Its intake settings as canonical JSON.
    address : str, optional
        Where it was fetched from; the path is then that of its local copy.
    """

    session: str
    nwb: str
    settings: str
    address: str | None = None

    @property
    def name(self) -> str:
        """The recording as the sessions table names it."""
        return self.address or self.nwb


def survey(
    requests: Sequence[Request], workers: int | None = None, *, patience_s: float | None = None
) -> dict[str, dict[str, Any]]:
    """Read recordings and digest their signals and units.

    A process that dies, or reads for longer than its file can take, takes only that recording with it. When
    the survey takes more than a second, its progress is told on the error stream.

    Parameters
    ----------
    requests : sequence of Request
        The recordings.
    workers : int, optional
        Processes; by default as many as there are processors, at most eight.
    patience_s : float, optional
        How long one recording may take; by default two minutes and a second for every 2 MB.

    Returns
    -------
    dict
        By session: ``signals`` and ``units`` (digests by name), ``inventory`` (digest) and ``links`` (other
        files read), or ``error`` (a finding) and ``settled`` (whether reading again would end the same).
    """
    if not requests:
        return {}
    processors = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    workers = min(workers or min(processors, 8), len(requests))
    waiting: queue.SimpleQueue[Request] = queue.SimpleQueue()
    for request in requests:
        waiting.put(request)
    answers: dict[str, dict[str, Any]] = {}
    threads = [
        threading.Thread(target=_serve, args=(waiting, answers, patience_s), daemon=True)
        for _ in range(workers)
    ]
    for thread in threads:
        thread.start()
    _tell_progress(threads, answers, len(requests))
    return answers


def _serve(
    waiting: queue.SimpleQueue[Request], answers: dict[str, dict[str, Any]], patience_s: float | None
) -> None:
    process: subprocess.Popen[str] | None = None
    try:
        while True:
            try:
                request = waiting.get_nowait()
            except queue.Empty:
                return
            if process is None:
                process = _start()
            patience = patience_s or _patience_s(request)
            impatient = threading.Timer(patience, process.kill)
            impatient.start()
            answer = _ask(process, request)
            in_time = impatient.is_alive()
            impatient.cancel()
            if answer is None:
                answer = _died(request, process.wait(), None if in_time else patience)
                process = None
            answers[request.session] = answer
    finally:
        if process is not None:
            process.stdin.close()
            process.wait()
            process.stdout.close()


def named_in_finding(finding: Mapping[str, Any], file: str, name: str) -> dict[str, Any]:
    """A finding that names a recording as the sessions table does, in place of the file that was read."""
    return {key: text.replace(file, name) if isinstance(text, str) else text for key, text in finding.items()}


def _start() -> subprocess.Popen[str]:
    environment = dict(os.environ, OMP_NUM_THREADS="1", OPENBLAS_NUM_THREADS="1")
    return subprocess.Popen(  # noqa: S603 (this Python and a module of this package)
        [sys.executable, "-m", _READER],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
        env=environment,
    )


def _ask(process: subprocess.Popen[str], request: Request) -> dict[str, Any] | None:
    try:
        process.stdin.write(json.dumps(asdict(request)) + "\n")
        process.stdin.flush()
        line = process.stdout.readline()
    except OSError:
        return None
    return json.loads(line) if line.endswith("\n") else None


def _patience_s(request: Request) -> float:
    try:
        return _PATIENCE_S + Path(request.nwb).stat().st_size * _PATIENCE_S_PER_BYTE
    except OSError:
        return _PATIENCE_S


def _died(request: Request, status: int, patience: float | None) -> dict[str, Any]:
    how = f"signal {-status}" if status < 0 else f"status {status}"
    found = f"the process that read the recording ended abruptly ({how})"
    if patience is not None:
        found = f"the recording was still being read after {patience:.0f} s, and its reading was ended"
    return {
        "error": {
            "level": "fail",
            "file": request.nwb,
            "place": None,
            "found": found,
            "expected": "a recording that can be read to its end",
            "remedy": "copy the file anew if it is damaged; see that the machine has memory left",
        },
        "settled": False,
    }


def _tell_progress(threads: Sequence[threading.Thread], answers: dict[str, Any], total: int) -> None:
    start = time.monotonic()
    next_line = start + _QUIET_SECONDS
    told = False
    for thread in threads:
        while thread.is_alive():
            thread.join(0.05)
            now = time.monotonic()
            if now >= next_line:
                done = len(answers)
                left = f", about {(now - start) / done * (total - done):.0f} s left" if done else ""
                print(
                    f"odograph: reading recordings that are new or were touched: {done} of {total}{left}",
                    file=sys.stderr,
                    flush=True,
                )
                told, next_line = True, now + _SECONDS_BETWEEN_LINES
    if told:
        seconds = time.monotonic() - start
        print(f"odograph: {total} recordings read in {seconds:.1f} s", file=sys.stderr, flush=True)
