"""`odograph summary`: what a run found, in ten lines."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

from odograph.errors import OdographError

EXIT_OK, EXIT_NO_INPUT = 0, 66

_EXAMPLES = """\
examples:
  odograph summary                       of the results in this folder
  odograph summary --results ../results  of others
  odograph summary --json                the numbers behind the lines

exit codes: 0 told, 66 there are no finished results
"""


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "summary",
        help="what a run found, in ten lines",
        description="Say what a finished run found: sessions and units used, and what the units encode.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument(
        "--results", type=Path, default=Path("results"), help="folder of the results (results)"
    )
    parser.add_argument("--json", action="store_true", help="write one JSON document instead of text")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Print the summary of the results in `args.results`; returns the exit code."""
    from odograph.provenance.files import read_json

    try:
        summary = read_json(args.results / "population" / "summary.json")
    except OdographError as error:
        print(error.message(), file=sys.stderr)
        return EXIT_NO_INPUT
    if args.json:
        print(json.dumps({"schema_version": 1} | summary, indent=1, sort_keys=True))
    else:
        print("\n".join(summary["lines"]))
    return EXIT_OK
