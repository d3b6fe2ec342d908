"""`odograph verify [FOLDER]`: is everything still what the records say."""

from __future__ import annotations

import argparse
import json
import sys
from dataclasses import asdict
from pathlib import Path

from odograph.errors import OdographError, printable

EXIT_OK, EXIT_BREACH, EXIT_NO_INPUT = 0, 1, 66

_EXAMPLES = """\
examples:
  odograph verify                      the study in this folder
  odograph verify /archive/study       another folder that holds `results` and `config`
  odograph verify --root root:4860a8   also that the run root is the one printed in a paper
  odograph verify --remove             remove what is damaged; the next run makes it again

exit codes: 0 everything holds, 1 something does not, 66 no results there
"""


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "verify",
        help="is everything still what the records say",
        description="Compute every digest again: of products, records, settings, code and recordings, and of "
        "the run root that ties the records together. What does not hold is told with what it means.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument(
        "folder", metavar="FOLDER", nargs="?", type=Path, default=Path(), help="the study (here)"
    )
    parser.add_argument(
        "--root", metavar="ROOT", help="the run root that it should have, or its first digits"
    )
    parser.add_argument(
        "--no-recordings", action="store_true", help="leave out the recordings, which take longest to read"
    )
    parser.add_argument(
        "--remove",
        action="store_true",
        help="remove results that are damaged, with their records, so that the next run makes them again",
    )
    parser.add_argument("--json", action="store_true", help="write one JSON document instead of text")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Verify the study in `args.folder`; returns the exit code."""
    from odograph.provenance.root import ROOT
    from odograph.provenance.running import refuse_beside_a_run
    from odograph.provenance.verify import verify

    folder = args.folder.parent if args.folder.name == "results" else args.folder
    try:
        found = verify(folder, recordings=not args.no_recordings)
    except OdographError as error:
        print(error.message(), file=sys.stderr)
        return EXIT_NO_INPUT
    if args.root and not _digits(found.root).startswith(_digits(args.root)):
        found.add(
            ROOT, f"the run root is {found.root}, not {args.root}", "these are the results of another run"
        )
    damaged = found.damaged
    if args.remove:
        refuse_beside_a_run(folder)
        for file in damaged:
            (folder / file).unlink(missing_ok=True)
    if args.json:
        document = {"schema_version": 1, **asdict(found), "holds": not found.breaches}
        print(json.dumps(document, indent=1, sort_keys=True))
    else:
        print(printable(_text(found)))
        if damaged:
            print(f"\n{_remedy(len(damaged), args.remove)}")
    return EXIT_BREACH if found.breaches else EXIT_OK


def _remedy(files: int, removed: bool) -> str:
    number = f"{files} file{'s' if files > 1 else ''}"
    if removed:
        return f"{number} of the results removed; run snakemake to make them again"
    return (
        f"what to do: `odograph verify --remove` removes {number} of the results; snakemake makes them again"
    )


def _digits(root: str | None) -> str:
    return (root or "").removeprefix("root:").lower()


def _text(found) -> str:
    lines = [f"{found.root or 'no run root'}"]
    checked = f"{found.records} records, {found.products} products, {found.recordings} files of recordings"
    lines.append(f"checked: {checked}, {found.bytes_read / 1e6:,.1f} MB")
    if found.code and found.code["commit"]:
        changed = ", with changes that were not committed" if found.code["modified"] else ""
        lines.append(f"made at commit {found.code['commit'][:12]}{changed}")
    if not found.breaches:
        return "\n".join([*lines, "everything is what the records say"])
    number = len(found.breaches)
    lines += ["", f"{number} {'thing does' if number == 1 else 'things do'} not hold"]
    for breach in found.breaches:
        lines += [f"  {breach.file}", f"    {breach.found}", f"    {breach.meaning}"]
    return "\n".join(lines)
