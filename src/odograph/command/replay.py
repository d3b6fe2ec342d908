"""`odograph replay ARCHIVE`: run an archived analysis again and compare."""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections import Counter
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

from odograph.errors import OdographError

if TYPE_CHECKING:
    from odograph.provenance.archive.agreement import Agreement

EXIT_OK, EXIT_DIFFERS, EXIT_NO_INPUT, EXIT_NOT_RUN = 0, 1, 66, 69

_EXAMPLES = """\
examples:
  odograph replay study-2026.zip                       recordings are enclosed
  odograph replay study-2026.zip --data recordings     recordings lie in a folder, found by name and digest
  odograph replay study-2026 --environment here        with the libraries of the present environment

Whole numbers and texts must be the same; other numbers may differ by 1e-9, or by 1e-6 of the larger. A figure
agrees when it carries the identifier of its record and all that it was drawn from agrees.

exit codes: 0 every table and figure agrees, 1 something differs, 66 no archive, not whole, or no recordings,
69 the environment could not be built or the workflow did not run through
"""

_WHY = {
    "inputs": "recordings or the sessions table",
    "settings": "settings",
    "code": "the code of the steps",
    "software": "versions of libraries",
    "machine": "the processor or the operating system, as nothing that the records name differs",
}


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "replay",
        help="run an archived analysis again and compare",
        description="Check the package, build the environment it names, run the analysis anew in a folder of "
        "its own and compare each table number by number and each figure by what it was drawn from. The "
        "archive's own code is run: replay only what you trust.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("archive", metavar="ARCHIVE", type=Path, help="a folder or a zip file")
    parser.add_argument(
        "--data", metavar="FOLDER", type=Path, help="where recordings lie that are not enclosed"
    )
    parser.add_argument(
        "--into", metavar="FOLDER", type=Path, default=Path("replay"), help="the folder to make (replay)"
    )
    parser.add_argument(
        "--environment", choices=("new", "borrowed", "here"), default="new",
        help="a new one with the archived versions; a new one that borrows the libraries of the present one "
        "that have those versions, which needs no network; or the present one, whatever its versions (new)",
    )  # fmt: skip
    parser.add_argument("--cores", type=int, default=os.cpu_count() or 1, help="jobs at a time (all)")
    parser.add_argument(
        "--relative", type=float, default=1e-6, help="numbers agree within this share of the larger (1e-6)"
    )
    parser.add_argument("--absolute", type=float, default=1e-9, help="or within this amount (1e-9)")
    parser.add_argument("--json", action="store_true", help="write one JSON document instead of text")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Replay the archive; returns the exit code."""
    from odograph.provenance.archive import replay
    from odograph.provenance.archive.agreement import compare_runs, software_differences
    from odograph.provenance.root import read_root

    def tell(text: str) -> None:
        print(f"odograph: {text}", file=sys.stderr)

    try:
        args.into.mkdir(parents=True)
        work = args.into.resolve()
        bag = replay.open_archive(args.archive, work)
        study = work / "study"
        study.mkdir()
        replay.lay_out(bag, study, args.data)
        if args.environment == "here":
            programs = Path(sys.executable).parent
        else:
            borrowed = args.environment == "borrowed"
            programs = replay.build_environment(study, work / "environment", tell, borrowed=borrowed)
        tell(f"running the analysis in {study}")
        replay.run_workflow(study, programs, args.cores, replay.run_environment(study, programs), tell)
        found = compare_runs(bag / "data", study, args.relative, args.absolute)
        software = software_differences(bag / "data", study)
        roots = [read_root(folder)["root"] for folder in (bag / "data", study)]
    except FileExistsError:
        print(f"{args.into}: it is there already\n  what to do: name another with --into", file=sys.stderr)
        return EXIT_NO_INPUT
    except replay.ReplayError as error:
        print(error.message(), file=sys.stderr)
        return EXIT_NOT_RUN
    except OdographError as error:
        print(error.message(), file=sys.stderr)
        return EXIT_NO_INPUT
    agrees = all(one.agrees for one in found)
    if args.json:
        document = {
            "schema_version": 1, "agrees": agrees, "roots": roots, "software": software,
            "relative": args.relative, "absolute": args.absolute, "products": [asdict(one) for one in found],
        }  # fmt: skip
        print(json.dumps(document, indent=1, sort_keys=True))
    else:
        print("\n".join(report(found, software, roots, (args.relative, args.absolute))))
    return EXIT_OK if agrees else EXIT_DIFFERS


def report(
    found: list[Agreement],
    software: dict[str, tuple[str, str]],
    roots: list[str],
    within: tuple[float, float],
) -> list[str]:
    """What agrees, what differs and by how much, and what it comes with, as lines of text."""
    counts = Counter(one.verdict for one in found)
    lines = [f"{len(found)} products: " + ", ".join(f"{counts[name]} {name}" for name in sorted(counts))]
    lines.append("the run root is the same" if roots[0] == roots[1] else f"the run root is now {roots[1]}")
    close = [one for one in found if one.verdict == "within tolerance"]
    if close:
        worst = max(close, key=lambda one: one.largest)
        lines.append(
            f"largest difference within tolerance ({within[0]:g} of the larger, or {within[1]:g}): "
            f"{worst.largest:.2g} of the larger, in {worst.path}"
        )
    lines += [f"  {name} {old} then, {new} now" for name, (old, new) in software.items()]
    wrong = [one for one in found if not one.agrees]
    if not wrong:
        return [*lines, "every table and figure agrees"]
    first = [one for one in wrong if one.begins]
    lines.append(f"{len(wrong)} differ; where that begins:")
    lines += [f"  {one.path}: {one.detail}" for one in first[:20]]
    lines += [f"  and {len(first) - 20} more"] if len(first) > 20 else []
    rest = [one for one in wrong if not one.begins]
    if rest:
        lines.append("what was made from these and differs as well:")
        lines += [f"  {one.path}: {one.detail}" for one in rest[:20]]
        lines += [f"  and {len(rest) - 20} more"] if len(rest) > 20 else []
    causes = {cause for one in first for cause in one.causes}
    real = [why for cause, why in _WHY.items() if cause in causes - {"software", "machine"}]
    if real:
        lines.append(f"a real difference, not one of the machine: other {', '.join(real)}")
    for cause in ("software", "machine"):
        if cause in causes and not real:
            lines.append(f"it may come from {_WHY[cause]}; no input, setting or code differs")
    return lines
