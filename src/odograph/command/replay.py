"""`odograph replay ARCHIVE`: run an archived analysis again and compare."""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections import Counter
from dataclasses import asdict
from pathlib import Path

from odograph.errors import OdographError

EXIT_OK, EXIT_DIFFERS, EXIT_NO_INPUT = 0, 1, 66

_EXAMPLES = """\
examples:
  odograph replay study-2026.zip                       recordings are enclosed
  odograph replay study-2026.zip --data recordings     recordings lie in a folder, found by name and digest
  odograph replay study-2026 --environment here        with the libraries of this environment

exit codes: 0 every table and figure agrees, 1 something differs, 66 no archive, not whole, or no recordings
"""


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "replay",
        help="run an archived analysis again and compare",
        description="Check the package, build the environment it names, run the analysis anew in a folder of "
        "its own and compare each table number by number and each figure by what it was drawn from.",
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
        "--environment", choices=("new", "here"), default="new",
        help="a new one with the archived versions, or the present one (new)",
    )  # fmt: skip
    parser.add_argument("--cores", type=int, default=os.cpu_count() or 1, help="jobs at a time (all)")
    parser.add_argument(
        "--relative", type=float, default=1e-6, help="numbers agree within this share of the larger (1e-6)"
    )
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
        if args.environment == "new":
            programs = replay.build_environment(study, work / "environment", tell)
        else:
            programs = Path(sys.executable).parent
        tell(f"running the analysis in {study}")
        replay.run_workflow(study, programs, args.cores, _environment(study, programs))
        found = compare_runs(bag / "data", study, args.relative)
        software = software_differences(bag / "data", study)
        roots = [read_root(folder)["root"] for folder in (bag / "data", study)]
    except FileExistsError:
        print(f"{args.into}: it is there already\n  what to do: name another with --into", file=sys.stderr)
        return EXIT_NO_INPUT
    except OdographError as error:
        print(error.message(), file=sys.stderr)
        return EXIT_NO_INPUT
    agrees = all(one.agrees for one in found)
    if args.json:
        document = {
            "schema_version": 1, "agrees": agrees, "roots": roots, "software": software,
            "products": [asdict(one) for one in found],
        }  # fmt: skip
        print(json.dumps(document, indent=1, sort_keys=True))
    else:
        print("\n".join(_text(found, software, roots, args.relative)))
    return EXIT_OK if agrees else EXIT_DIFFERS


def _environment(study: Path, programs: Path) -> dict[str, str]:
    own = {name: value for name, value in os.environ.items() if not name.startswith("SNAKEMAKE")}
    path = os.pathsep.join([str(programs), own.get("PATH", "")])
    return own | {"PATH": path, "PYTHONPATH": str(study / "src")}


def _text(found, software, roots, relative) -> list[str]:
    counts = Counter(one.verdict for one in found)
    lines = [", ".join(f"{counts[name]} {name}" for name in sorted(counts))]
    lines.append("the run root is the same" if roots[0] == roots[1] else "the run root is another one")
    within = [one for one in found if one.verdict == "within tolerance"]
    if within:
        worst = max(within, key=lambda one: one.largest)
        lines.append(f"largest difference within {relative:g}: {worst.largest:.2g}, in {worst.path}")
    wrong = [one for one in found if not one.agrees]
    for one in wrong[:20]:
        lines.append(f"  {one.path}: {one.detail}")
    if len(wrong) > 20:
        lines.append(f"  and {len(wrong) - 20} more")
    for name, (old, new) in software.items():
        lines.append(f"  {name} {old} then, {new} now")
    if wrong:
        lines.append(
            "libraries differ: the differences may come from them"
            if software
            else "the libraries are the same: what differs comes from the processor, recordings or code"
        )
    else:
        lines.append("every table and figure agrees")
    return lines
