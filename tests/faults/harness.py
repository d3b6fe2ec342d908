"""What happens when things break? Each fault is made for real, and the study has to end in the same bytes.

    python tests/faults/harness.py [--passes 3] [--case NAME ...] [--quick] [--json FILE] [--seed 1]

A small study (three minutes of one recording) is run once undisturbed. Then each case breaks something while,
or before, the workflow runs, and runs it again, with `--unlock` after a killed head and nothing else done by
hand. All products, the fits in the store and the run root are compared with those of the undisturbed run. It
ends with status 1 when a line does not hold. Cases that need a small file system of their own are left out,
with a word, where none can be mounted. What a cluster can do is in tests/faults/slurm_faults.py.
"""

from __future__ import annotations

import argparse
import shutil
import sys
import tempfile
import time
import traceback
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import clocks
import damaged
import full_disk
import killed
import neighbours
import replaced
from laboratory import TESTS, Happening, Laboratory, load

tables = load(TESTS / "benchmarks" / "benchmark_table.py")

#: By name: the case, and whether the quick version has it.
CASES: dict[str, tuple[Callable[[Laboratory], Iterator[Happening]], bool]] = {
    "killed": (killed.killed, True),
    "after-a-change": (killed.after_a_change, False),
    "orphaned": (killed.orphaned, False),
    "stopped": (killed.stopped, False),
    "full-disk": (full_disk.full_disk, True),
    "full-folder": (full_disk.whole_folder, False),
    "two-runs": (neighbours.two_runs, True),
    "shared-store": (neighbours.shared_store, False),
    "clocks": (clocks.clocks, False),
    "other-head": (clocks.other_head, False),
    "late": (clocks.late, False),
    "damaged": (damaged.damaged, True),
    "replaced": (replaced.replaced, False),
}
WIDEST = 100


@dataclass(frozen=True)
class FaultLine(tables.Line):
    """A line that says of the bytes as well."""

    same: bool | None = None


class FaultTable(tables.Table):
    """Case, what was done, what happened, same bytes, holds."""

    def tell(self, happening: Happening) -> None:
        """Add a line."""
        what = happening.what
        self.lines.append(
            FaultLine(what, happening.done, happening.happened, happening.holds, None, happening.same)
        )
        told = {True: "holds", False: "DOES NOT HOLD", None: "not made"}[happening.holds]
        at = time.perf_counter() - self.started
        print(f"[{at:6.1f} s] {what}: {told}: {happening.happened}", file=sys.stderr, flush=True)

    def text(self, facts: dict[str, str]) -> str:
        """The table as printed."""
        words = {True: "yes", False: "NO", None: "-"}
        rows = [("case", "what was done", "what happened", "same bytes", "holds")]
        for line in self.lines:
            happened = line.measured if len(line.measured) <= WIDEST else line.measured[: WIDEST - 3] + "..."
            rows.append((line.what, line.asked, happened, words[line.same], words[line.holds]))
        return self.laid_out(rows, facts)


def main() -> int:
    """Make the faults that the command line names."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--passes", type=int, default=1, help="how often, each with another seed (1)")
    parser.add_argument("--case", nargs="+", choices=CASES, metavar="NAME", help=f"of {', '.join(CASES)}")
    parser.add_argument("--quick", action="store_true", help="the version of the test suite")
    parser.add_argument("--json", type=Path, metavar="FILE", help="write the table to this file as well")
    parser.add_argument("--seed", type=int, default=1, help="of moments and of what is damaged (1)")
    options = parser.parse_args()
    folder = Path(tempfile.mkdtemp(prefix="faults-"))
    try:
        return _passes(Laboratory(folder, options.quick, options.seed), options)
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _passes(lab: Laboratory, options: argparse.Namespace) -> int:
    status = 0
    for number in range(options.passes):
        lab.seed = options.seed + number
        title = "What happens when things break" + (f", pass {number + 1}" if options.passes > 1 else "")
        table = FaultTable(title, quick=options.quick, seed=lab.seed)
        _make(lab, table, options.case)
        status |= table.finish(options.json)
        print(flush=True)
    return status


def _make(lab: Laboratory, table: FaultTable, names: list[str] | None) -> None:
    for name, (case, in_quick) in CASES.items():
        if name not in (names or CASES) or (lab.quick and not in_quick and not names):
            continue
        try:
            for happening in case(lab):
                table.tell(happening)
        except Exception as error:
            traceback.print_exc()
            table.tell(Happening(f"the case {name}", "", f"{type(error).__name__}: {error}", None, False))


if __name__ == "__main__":
    sys.exit(main())
