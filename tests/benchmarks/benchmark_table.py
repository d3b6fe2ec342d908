"""What the benchmarks share: one table with `what`, `asked`, `measured`, `holds`, the machine, the options.

A benchmark builds a `Table`, adds lines to it as they are measured, and ends with `finish`:

    options = read_options(__doc__)
    use_one_thread()
    table = Table("Encoding: speed", quick=options.quick)
    table.add("the selection of one unit", "0.3 s or less", "0.21 s", holds=True)
    sys.exit(table.finish(options.json))
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import shutil
import subprocess
import sys
import time
from collections.abc import Sequence
from dataclasses import asdict, dataclass, field
from importlib import metadata
from pathlib import Path

NOT_MEASURED = "not measured"
THREADS = {f"{library}_NUM_THREADS": "1" for library in ("OMP", "OPENBLAS", "MKL", "NUMBA")}
PACKAGES = ("odograph", "numpy", "scipy", "numba", "scikit-learn", "glum")


@dataclass(frozen=True)
class Line:
    """One line of the table; `holds` is None where nothing was asked or nothing could be measured."""

    what: str
    asked: str
    measured: str
    holds: bool | None
    value: float | None = None


@dataclass
class Table:
    """A benchmark's table, told on standard error while it grows and printed once at the end."""

    title: str
    quick: bool = False
    seed: int | None = None
    lines: list[Line] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    started: float = field(default_factory=time.perf_counter)

    def add(
        self, what: str, asked: str, measured: str, holds: bool | None, value: float | None = None
    ) -> None:
        """Add a line.

        Parameters
        ----------
        what, asked, measured : str
            As printed.
        holds : bool or None
            Whether what was measured is what was asked; None: nothing was asked.
        value : float, optional
            The measured figure as a number, for the JSON file.
        """
        holds = None if holds is None else bool(holds)
        self.lines.append(Line(what, asked, measured, holds, None if value is None else float(value)))
        print(
            f"[{time.perf_counter() - self.started:6.1f} s] {what}: {measured}", file=sys.stderr, flush=True
        )

    def skip(self, what: str, asked: str, why: str) -> None:
        """Add a line that could not be measured here, with the reason as a note."""
        self.add(what, asked, NOT_MEASURED, None)
        self.note(f"{what}: {NOT_MEASURED}, {why}")

    def note(self, text: str) -> None:
        """Add a sentence below the table."""
        self.notes.append(text)

    @property
    def status(self) -> int:
        """0, or 1 when a line does not hold."""
        return int(any(line.holds is False for line in self.lines))

    def text(self, facts: dict[str, str]) -> str:
        """The table as printed."""
        rows = [("what", "asked", "measured", "holds")]
        rows += [(line.what, line.asked, line.measured, _word(line.holds)) for line in self.lines]
        return self.laid_out(rows, facts)

    def laid_out(self, rows: Sequence[Sequence[str]], facts: dict[str, str]) -> str:
        """Rows in columns, the first one the head, between title, notes and facts."""
        widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
        lines = [
            "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)) for row in rows
        ]
        lines.insert(1, "  ".join("-" * width for width in widths))
        head = [self.title + (" (quick)" if self.quick else ""), ""]
        tail = ["", *(f"- {note}" for note in self.notes)] if self.notes else []
        told = ["", *(f"{name}: {value}" for name, value in facts.items())]
        return "\n".join(line.rstrip() for line in [*head, *lines, *tail, *told])

    def finish(self, json_file: Path | None) -> int:
        """Print the table, write it as JSON if asked, and give the exit status."""
        facts = machine_facts() | {"took": f"{time.perf_counter() - self.started:.0f} s"}
        if self.seed is not None:
            facts["seed"] = str(self.seed)
        print(self.text(facts), flush=True)
        if json_file is not None:
            content = {
                "title": self.title,
                "quick": self.quick,
                "lines": [asdict(line) for line in self.lines],
                "notes": self.notes,
                "facts": facts,
                "holds": self.status == 0,
            }
            json_file.write_text(json.dumps(content, indent=2) + "\n", encoding="utf-8")
        return self.status


def _word(holds: bool | None) -> str:
    return {True: "yes", False: "NO", None: "-"}[holds]


def read_options(description: str | None) -> argparse.Namespace:
    """Command line of a benchmark: `--quick` and `--json FILE`."""
    parser = argparse.ArgumentParser(
        description=description, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument(
        "--quick", action="store_true", help="a smaller version: checks the benchmark, not the figures"
    )
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the table to this file as well")
    return parser.parse_args()


def use_one_thread() -> None:
    """Start this program anew with one thread for every numeric library, unless it runs so already."""
    if any(os.environ.get(name) != value for name, value in THREADS.items()):
        sys.stdout.flush()
        os.execve(sys.executable, [sys.executable, *sys.argv], os.environ | THREADS)


def machine_facts() -> dict[str, str]:
    """Processor, memory, load, operating system and versions."""
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count()
    facts = {
        "machine": f"{_processor()}, {cores} cores, {_memory()}",
        "system": platform.platform(terse=True),
    }
    if hasattr(os, "getloadavg"):
        facts["load"] = f"{os.getloadavg()[0]:.1f} in the last minute (other programs share the machine)"
    versions = [f"Python {platform.python_version()}"]
    versions += [f"{name} {version}" for name in PACKAGES if (version := installed(name))]
    if r := r_versions():
        versions.append(r)
    return facts | {"versions": ", ".join(versions)}


def installed(package: str) -> str | None:
    """Version of an installed package, or None."""
    try:
        return metadata.version(package)
    except metadata.PackageNotFoundError:
        return None


def r_versions() -> str | None:
    """`R 4.x.y, mgcv 1.x-y` where Rscript and mgcv are found, else None."""
    if shutil.which("Rscript") is None:
        return None
    code = "cat(as.character(getRversion()), as.character(packageVersion('mgcv')))"
    done = subprocess.run(["Rscript", "-e", code], capture_output=True, text=True, check=False)
    if done.returncode != 0:
        return None
    r, mgcv = done.stdout.split()
    return f"R {r}, mgcv {mgcv}"


def _processor() -> str:
    info = Path("/proc/cpuinfo")
    if info.exists():
        for line in info.read_text(encoding="utf-8").splitlines():
            if line.startswith("model name"):
                return line.partition(":")[2].strip()
    return platform.processor() or platform.machine()


def _memory() -> str:
    try:
        total = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")
    except (ValueError, AttributeError, OSError):
        return "memory unknown"
    return f"{total / 2**30:.0f} GB"
