"""`odograph trace PRODUCT`: from a figure, table or record back to the recordings and the settings."""

from __future__ import annotations

import argparse
import contextlib
import json
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from odograph.errors import InputError, OdographError, printable

EXIT_OK, EXIT_DATA, EXIT_NO_INPUT = 0, 65, 66
_MOST_UNITS = 12

_EXAMPLES = """\
examples:
  odograph trace results/figures/composition.png       a figure
  odograph trace results/population/units.tsv          a table
  odograph trace 3f9c20a1b7de                          the digits in the margin of a figure
  odograph trace paper/figure2.pdf --results results   a figure that was copied elsewhere
  odograph trace results/figures/speed_gains.png --row bracken_1 12   one point of it: a unit of a session
  odograph trace results/report.html --format prov     as W3C PROV-JSON, for other programs

exit codes: 0 traced, 65 traced with problems (something changed since), 66 no such product or record
"""


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "trace",
        help="what stands behind a figure or table",
        description="Walk the records from a product back to the signals in the recordings, the settings "
        "that were read and the code that ran, and say whether any of it changed since.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument(
        "target", metavar="PRODUCT", help="a figure, table, page or record, or a record's digits"
    )
    parser.add_argument(
        "--results", type=Path, default=Path("results"), help="folder of the results (results)"
    )
    parser.add_argument(
        "--row", nargs=2, metavar=("SESSION", "UNIT"), help="only what leads to one unit: a point, a row"
    )
    parser.add_argument(
        "--format",
        choices=("text", "json", "prov"),
        default="text",
        help="text, JSON or W3C PROV-JSON (text)",
    )
    parser.add_argument(
        "--all",
        action="store_true",
        help="show every setting, not only those that are not the default or changed since",
    )
    parser.add_argument("--json", action="store_true", help="the same as --format json")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Trace the product named by `args.target`; returns the exit code."""
    from odograph.command.setting_places import with_places
    from odograph.provenance.trace import find_start, of_row, trace

    form = "json" if args.json else args.format
    try:
        found = trace(find_start(args.target, args.results), args.results)
        if args.row:
            found = of_row(found, args.row[0], _unit(args.row[1]))
    except OdographError as error:
        if form == "json":
            print(json.dumps({"schema_version": 1, "problems": [error.message()]}, indent=1))
        print(error.message(), file=sys.stderr)
        return EXIT_NO_INPUT
    settings = with_places(found.settings(), args.results.resolve().parent)
    if form == "prov":
        from odograph.provenance.prov_export import prov_json

        print(prov_json(found), end="")
    elif form == "json":
        print(json.dumps(found.document() | {"settings": settings}, indent=1, sort_keys=True))
    else:
        print(printable("\n".join(text_lines(found, settings, args.results, everything=args.all))))
    return EXIT_DATA if found.problems else EXIT_OK


def _unit(text: str) -> int:
    if not text.isdecimal():
        raise InputError(f"{text!r} is no unit", place="--row", expected="SESSION UNIT, the unit a number")
    return int(text)


def text_lines(
    found: Any, settings: list[dict[str, Any]], results: Path, *, everything: bool = False
) -> Iterator[str]:
    """The trace in words."""
    start = found.start
    yield str(start.path or start.file) + (f", unit {found.row[1]} of {found.row[0]}" if found.row else "")
    record = start.record
    yield f"  record {_short(record['record_id'])}, rule {record['rule']}{_keys(record['keys'])}"
    yield f"  made {record['run']['started'][:19].replace('T', ' ')} UTC on {record['run']['host']}"
    yield ""
    yield "made by, the last first"
    yield from _chain(found)
    yield ""
    yield "from the recordings"
    yield from _sources(found, results)
    yield ""
    yield from _settings(settings, everything)
    yield ""
    versions = record["software"]
    yield "with " + ", ".join(f"{name} {versions[name]}" for name in sorted(versions, key=_software_order))
    yield ""
    if found.problems:
        yield "does not fit"
        yield from (f"  {problem}" for problem in found.problems)
    else:
        yield "every product on the way is as it was when it was read"


def _chain(found: Any) -> Iterator[str]:
    """One line for every rule on the way, with the number of its records and their code."""
    by_rule: dict[str, list[dict[str, Any]]] = {}
    for record in found.records.values():
        by_rule.setdefault(record["rule"], []).append(record)
    for rule, records in by_rule.items():
        digests = {record["code"].get(rule, "unknown") for record in records}
        code = sorted(digest.removeprefix("sha256:")[:12] for digest in digests)
        sessions = {record["keys"].get("session") for record in records} - {None}
        number = (
            f"{len(records)} records of {len(sessions)} sessions"
            if len(records) > 1
            else (f"record {_short(records[0]['record_id'])}{_keys(records[0]['keys'])}")
        )
        yield f"  {rule:<19} {number}; code {', '.join(code)}"


def _is_there(session: str, file: str, results: Path) -> bool:
    """Whether a recording is where the workflow last found it; records tell only names of files elsewhere."""
    from odograph.provenance.files import read_json

    with contextlib.suppress(OdographError, KeyError):
        file = read_json(results / "plan" / "sessions" / session / "source.json")["nwb"]
    return (results.resolve().parent / file).is_file()


def _sources(found: Any, results: Path) -> Iterator[str]:
    for session, facts in found.sources().items():
        missing = "" if _is_there(session, facts["file"], results) else "   (not there now)"
        yield f"  session {session}: {facts['file']}{missing}"
        for name, signal in sorted(facts["signals"].items()):
            yield f"    {name:<18} {_short(signal['digest'])}  {signal['place'] or ''}".rstrip()
        units = facts["units"]
        if len(units) == 1:
            ((unit, digest),) = units.items()
            yield f"    {f'unit {unit}':<18} {_short(digest)}"
        elif units:
            named = ", ".join(str(unit) for unit in sorted(units)[:_MOST_UNITS])
            more = f" and {len(units) - _MOST_UNITS} more" if len(units) > _MOST_UNITS else ""
            yield f"    {f'{len(units)} units':<18} {named}{more}"


def _settings(settings: list[dict[str, Any]], everything: bool) -> Iterator[str]:
    own = [row for row in settings if row["value"] != row["default"]]
    telling = [row for row in settings if row["value"] != row["default"] or row["now"] != row["value"]]
    shown = settings if everything else telling
    yield f"with {len(settings)} settings read, {len(own)} of them not the default" + (
        "" if everything else " (--all shows every one)"
    )
    width = max((len(row["setting"]) for row in shown), default=0)
    for row in shown:
        line = f"  {row['setting']:<{width}}  {json.dumps(row['value'], ensure_ascii=False)}"
        if sum(other["setting"] == row["setting"] for other in settings) > 1:
            line += f"   for {', '.join(row['sessions'] or ['the study'])}"
        if row["value"] != row["now"]:
            line += f"   (the configuration now says {json.dumps(row['now'], ensure_ascii=False)})"
        yield line + (f"   {row['line']}" if row["line"] else "")


def _keys(keys: dict[str, Any]) -> str:
    return "".join(f", {name} {value}" for name, value in keys.items())


def _short(identifier: str) -> str:
    return identifier.rpartition(":")[2][:12]


def _software_order(name: str) -> tuple[int, str]:
    return (("odograph", "python").index(name) if name in ("odograph", "python") else 2, name)
