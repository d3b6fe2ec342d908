"""What happens to a study on Slurm when things break; each case must end in the bytes of an undisturbed run.

    python tests/faults/slurm_faults.py [--passes 3] [--case NAME] [--json FILE]

Starts a small Slurm (tests/cluster/slurm.py says what it needs) in a temporary folder, runs a small study
through the Slurm profile once for each case, breaks something while the units are fitted, and compares every
product with a run on this machine. A pass takes about ten minutes, most of them spent waiting for the engine
to ask Slurm how its jobs are.
"""

from __future__ import annotations

import argparse
import contextlib
import os
import re
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from laboratory import SMALL, TESTS, load

#: A head whose controller went away would wait for ever.
LIMIT_S = 600
KINDS = (".parquet", ".tsv", ".npz", ".png")


slurm = load(TESTS / "cluster" / "slurm.py")
tables = load(TESTS / "benchmarks" / "benchmark_table.py")


@dataclass
class Run:
    """A study at work on the cluster.

    Parameters
    ----------
    study : Study
        Its folder holds the recordings.
    cluster : Cluster
    options : tuple of str
        Further options of the engine.
    """

    study: Any
    cluster: Any
    options: tuple[str, ...] = ()
    head: subprocess.Popen[str] | None = None
    log: Path = field(init=False)

    def __post_init__(self) -> None:
        self.log = self.study.folder / "head.log"

    def command(self, *arguments: str) -> list[str]:
        """The command line of the engine with the Slurm profile."""
        command = self.study.command(*arguments, *self.options)
        command[command.index("--profile") + 1] = str(TESTS.parent / "workflow" / "profiles" / "slurm")
        at = command.index("--cores")
        del command[at : at + 2]
        return [*command, "--slurm-init-seconds-before-status-checks", "2", "--latency-wait", "10"]

    def start(self, *arguments: str) -> None:
        """Start the head in a session of its own; what it prints is added to `log`."""
        with self.log.open("a") as file:
            self.head = subprocess.Popen(
                self.command(*arguments),
                cwd=self.study.folder,
                env={**self.study.environment(), "SLURM_CONF": self.cluster.environment["SLURM_CONF"]},
                stdout=file,
                stderr=subprocess.STDOUT,
                start_new_session=True,
                text=True,
            )

    def end(self, *arguments: str) -> int:
        """Start if nothing runs, and wait for the head; 124 when it took too long and was killed."""
        if self.head is None:
            self.start(*arguments)
        try:
            return self.head.wait(LIMIT_S)
        except subprocess.TimeoutExpired:
            os.killpg(self.head.pid, signal.SIGKILL)
            return 124
        finally:
            self.head.wait()
            self.head = None

    def jobs(self, name: str = "") -> dict[str, str]:
        """State by number of the jobs that the head told it submitted, those whose group is `name`."""
        told = re.findall(r"SLURM jobid (\d+) \(log: \S*/slurm_logs/(\w+?)/", self.log.read_text())
        states = dict(
            line.split() for line in self.cluster.ask("squeue", "-t", "all", "-h", "-o", "%i %T").splitlines()
        )
        return {job: states.get(job, "") for job, group in told if name in group}

    def wait_for_fits(self) -> str:
        """Wait until a shard's job is fitting, and give its number."""
        end = time.monotonic() + LIMIT_S
        while time.monotonic() < end and self.head.poll() is None:
            running = [job for job, state in self.jobs("encoding").items() if state == "RUNNING"]
            if running and fitting(self.study.folder):
                return running[0]
            time.sleep(0.1)
        raise RuntimeError(f"no job came to fit units; see {self.log}")

    def asked_mb(self, job: str) -> int:
        """Memory that a job asked for."""
        return int(re.search(r"mem=(\d+)M", self.cluster.ask("scontrol", "show", "job", job))[1])


def processes(*words: str) -> Iterator[int]:
    """The processes whose command line holds all these words."""
    for folder in Path("/proc").glob("[0-9]*"):
        with contextlib.suppress(OSError):
            line = (folder / "cmdline").read_bytes().replace(b"\0", b" ").decode(errors="replace")
            if all(word in line for word in words):
                yield int(folder.name)


def fitting(folder: Path) -> list[int]:
    """The processes that fit units for the study in a folder."""
    found = []
    for pid in processes("python", "-m odograph.steps.encoding --session"):
        with contextlib.suppress(OSError):
            if Path(f"/proc/{pid}/cwd").resolve() == folder.resolve():
                found.append(pid)
    return found


# The cases: each breaks something, and gives what happened and whether that is as it should be


def undisturbed(run: Run) -> tuple[str, bool]:
    """nothing breaks"""
    status = run.end()
    return f"status {status}, {len(run.jobs())} jobs", status == 0


def job_cancelled(run: Run) -> tuple[str, bool]:
    """a job is cancelled while it fits"""
    run.start()
    job = run.wait_for_fits()
    asked = run.asked_mb(job)
    run.cluster.ask("scancel", job)
    status = run.end()
    again = [other for other in run.jobs("encoding") if int(other) > int(job)]
    more = [run.asked_mb(other) for other in again]
    return (
        f"status {status}, tried again asking for {max(more, default=0)} instead of {asked} MB",
        status == 0 and 2 * asked in more,
    )


def worker_killed(run: Run) -> tuple[str, bool]:
    """kill -9 of the process that fits"""
    run.start()
    job = run.wait_for_fits()
    for pid in fitting(run.study.folder):
        os.kill(pid, signal.SIGKILL)
    status = run.end()
    again = [other for other in run.jobs("encoding") if int(other) > int(job)]
    return f"status {status}, {len(again)} jobs after it", status == 0 and bool(again)


def out_of_memory(run: Run) -> tuple[str, bool]:
    """a job takes more memory than it asked for"""
    run.options = ("--set-resources", "encoding:mem_mb=260 * 4 ** (attempt - 1)", "cards:mem_mb=260")
    status = run.end()
    states = run.jobs("encoding")
    asked = {job: run.asked_mb(job) for job in states}
    killed = [job for job, state in states.items() if state in ("FAILED", "OUT_OF_MEMORY")]
    said = sum("exceeded memory limit" in log.read_text() for log in slurm_logs(run.study.folder))
    holds = status == 0 and bool(killed) and max(asked.values()) == 1040
    return (
        f"status {status}, {len(killed)} jobs killed for it at 260 MB ({said} logs say so), then 1040 MB",
        holds,
    )


def node_lost(run: Run) -> tuple[str, bool]:
    """a node is lost while a job on it fits"""
    run.start()
    job = run.wait_for_fits()
    node = run.cluster.ask("squeue", "-h", "-j", job, "-o", "%N")
    run.cluster.stop_daemon(f"slurmd.{node}", signal.SIGKILL)
    # What the controller does by itself once the node has not answered for some time.
    run.cluster.ask("scontrol", "update", f"nodename={node}", "state=down", "reason=lost")
    status = run.end()
    lost = [job for job, state in run.jobs("encoding").items() if state == "NODE_FAIL"]
    run.cluster.start()
    return f"status {status}, {len(lost)} jobs lost with {node}", status == 0 and bool(lost)


def head_killed(run: Run) -> tuple[str, bool]:
    """kill -9 of the head; its jobs run on; --unlock, run again"""
    run.start()
    run.wait_for_fits()
    os.killpg(run.head.pid, signal.SIGKILL)
    run.head.wait()
    run.head = None
    locked = run.end()
    said = "--unlock" in run.log.read_text()
    unlocked = run.end("--unlock")
    status = run.end()
    return (
        f"status {locked}, then {unlocked} for --unlock, then {status}; the message names --unlock: "
        + ("yes" if said else "no"),
        locked != 0 and said and (unlocked, status) == (0, 0),
    )


CASES: tuple[Callable[[Run], tuple[str, bool]], ...] = (
    undisturbed,
    job_cancelled,
    worker_killed,
    out_of_memory,
    node_lost,
    head_killed,
)


def slurm_logs(folder: Path) -> list[Path]:
    """What Slurm kept of the jobs that failed."""
    return sorted((folder / ".snakemake" / "slurm_logs").rglob("*.log"))


def products(study: Any) -> dict[str, bytes]:
    """The bytes of every table, array and figure, by name."""
    return {
        str(file.relative_to(study.results)): file.read_bytes()
        for file in study.results.rglob("*")
        if file.suffix in KINDS and not file.is_relative_to(study.results / "store")
    }


def new_study(folder: Path, recordings: Path) -> Any:
    """A study of two sessions in two shards each."""
    study = SMALL.Study(folder)
    study.sessions = {name: study.sessions[name] for name in ("alpha", "beta")}
    folder.mkdir(parents=True)
    shutil.copytree(recordings, folder / "recordings")
    study.write_tables()
    return study


def main() -> int:
    """Run the cases and print the table."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--passes", type=int, default=1, help="how often every case is run (default 1)")
    parser.add_argument("--case", choices=[case.__name__ for case in CASES], help="only this one")
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the table to this file as well")
    given = parser.parse_args()
    tables.use_one_thread()
    table = tables.Table("Faults on a Slurm cluster")
    with tempfile.TemporaryDirectory(prefix="slurm-") as place:
        # The daemon that signs messages wants its folder open to all.
        Path(place).chmod(0o755)
        cluster = slurm.Cluster(Path(place) / "cluster")
        try:
            cluster.start()
        except slurm.NoClusterError as error:
            print(error, file=sys.stderr)
            return 1
        try:
            run_cases(Path(place), cluster, given, table)
        finally:
            cluster.stop()
    return table.finish(given.json)


def run_cases(place: Path, cluster: Any, given: argparse.Namespace, table: Any) -> None:
    """Every case as often as asked, each in a study of its own, compared with a run on this machine."""
    SMALL.make_recordings(place / "recordings")
    here = new_study(place / "here", place / "recordings")
    here.run()
    expected = products(here)
    for number in range(1, given.passes + 1):
        for case in CASES:
            if given.case not in (None, case.__name__):
                continue
            study = new_study(place / f"{case.__name__}-{number}", place / "recordings")
            what, holds = case(Run(study, cluster))
            found = products(study)
            different = {name for name in expected | found if expected.get(name) != found.get(name)}
            same = "same bytes" if not different else f"{len(different)} of {len(expected)} products differ"
            what_broke = (case.__doc__ or "").strip()
            if given.passes > 1:
                what_broke += f", pass {number}"
            table.add(what_broke, "same bytes, no other step", f"{what}; {same}", holds and not different)
            if different or not holds:
                print((study.folder / "head.log").read_text()[-4000:], file=sys.stderr)


if __name__ == "__main__":
    sys.exit(main())
