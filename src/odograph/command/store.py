"""`odograph store`: how much the kept fits take, and dropping those that no result needs."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

EXIT_OK, EXIT_USAGE, EXIT_DAMAGED, EXIT_NO_INPUT = 0, 64, 65, 66

_EXAMPLES = """\
examples:
  odograph store              how many fits there are, their size, how many the results need
  odograph store --check      read every fit and see that it is whole
  odograph store --drop       remove the fits that no current result needs

Studies may share a store: make results/store of each a link to one folder. To drop from it, name all of them:
  odograph store --drop --results one/results --results two/results

exit codes: 0 done, 64 the store is shared and only one study named, 65 a fit is damaged (with --check; it is
made again when it is needed), 66 no store
"""


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "store",
        help="how much the kept fits take",
        description="Every unit's fit is kept under a key made of all that decides it, so that an edit that "
        "is taken back, or a run that was killed, computes nothing twice. What is kept can be dropped at any "
        "time; at worst it is computed again.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument(
        "--results",
        type=Path,
        action="append",
        help="folder of the results (results); once for each study that shares the store",
    )
    parser.add_argument("--check", action="store_true", help="read every fit and see that it is whole")
    parser.add_argument("--drop", action="store_true", help="remove the fits that no current result needs")
    parser.add_argument("--json", action="store_true", help="write one JSON document instead of text")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Survey the store, check it or drop from it; returns the exit code."""
    from odograph.provenance.housekeeping import damaged_fits, drop, left_by_killed, survey_store

    results, *others = args.results or [Path("results")]
    folder = results / "store"
    if not folder.is_dir():
        print(f"{folder}: there is no store\n  what to do: name the results with --results", file=sys.stderr)
        return EXIT_NO_INPUT
    if args.drop and folder.is_symlink() and not others:
        print(
            f"{folder}: the store is shared, and other studies may need what this one does not\n"
            "  what to do: name the results of all studies that share it, each with --results",
            file=sys.stderr,
        )
        return EXIT_USAGE
    found = survey_store(results, *others)
    damaged = damaged_fits(folder) if args.check else []
    if args.drop:
        drop([*found.unneeded, *left_by_killed(folder)])
    if args.json:
        document = {
            "schema_version": 1,
            "fits": found.fits,
            "bytes": found.bytes,
            "needed": found.fits - len(found.unneeded),
            "unneeded": len(found.unneeded),
            "unneeded_bytes": found.unneeded_bytes,
            "dropped": args.drop,
            "damaged": [path.name for path in damaged],
        }
        print(json.dumps(document, indent=1, sort_keys=True))
    else:
        print(f"{found.fits} fits, {found.bytes / 1e6:,.1f} MB")
        verb = "dropped" if args.drop else "not needed by any current result"
        print(f"{len(found.unneeded)} of them, {found.unneeded_bytes / 1e6:,.1f} MB, {verb}")
        for path in damaged:
            print(f"damaged: {path} (it is dropped and made again when it is needed)")
        if args.check and not damaged:
            print("all of them are whole")
    return EXIT_DAMAGED if damaged else EXIT_OK
