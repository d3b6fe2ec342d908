"""`odograph look FILE`: what a recording holds, and the lines of configuration that would read it."""

from __future__ import annotations

import argparse
import json
import sys
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from odograph.errors import OdographError, SettingsError, printable

EXIT_OK, EXIT_DATA, EXIT_NO_INPUT, EXIT_SETTINGS = 0, 65, 66, 78

_EXAMPLES = """\
examples:
  odograph look recording.nwb            what is in the file, and lines to paste into config/config.yaml
  odograph look recording.nwb --json     the same for a program

exit codes: 0 the file can be used, 65 it cannot as it is, 66 there is no such file
"""


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "look",
        help="look into a recording before a run",
        description="Say what an NWB recording holds: tracking, head direction, frame pulses, units and "
        "their columns, and what is wrong with it. Ends with the lines of configuration that would read it. "
        "Raw voltage is not read and the file is not changed.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("file", type=Path, metavar="FILE", help="an NWB file")
    parser.add_argument("--json", action="store_true", help="write one JSON document instead of text")
    parser.set_defaults(run=run)


def run(args: argparse.Namespace) -> int:
    """Look into the file named by `args.file`; returns the exit code."""
    try:
        # pynwb is loaded here, after the arguments were found to be right.
        from odograph.recording.survey import survey

        found = survey(args.file)
    except OdographError as error:
        if args.json:
            print(json.dumps({"verdict": "fail", "findings": [error.finding()]}, indent=2, sort_keys=True))
        print(error.message(), file=sys.stderr)
        if isinstance(error, SettingsError):
            return EXIT_SETTINGS
        return EXIT_DATA if args.file.exists() else EXIT_NO_INPUT
    if args.json:
        print(json.dumps(found, indent=2, sort_keys=True))
    else:
        print(printable("\n".join(text_lines(args.file, found))))
    return EXIT_DATA if found["verdict"] == "fail" else EXIT_OK


def text_lines(path: Path, found: Mapping[str, Any]) -> Iterator[str]:
    """The survey of a recording as lines of text."""
    yield f"{path}  NWB {found['file']['nwb_version']}"
    for name in ("session_id", "session_start_time", "description"):
        if found["file"][name]:
            yield f"  {name}: {found['file'][name]}"
    subject = {name: value for name, value in found["subject"].items() if value}
    yield "  subject: " + (", ".join(f"{name} {value}" for name, value in subject.items()) or "not named")
    for title, key in (
        ("tracking", "tracking"),
        ("measured head direction", "directions"),
        ("may be frame pulses", "pulses"),
    ):
        yield from _section(title, [_series_line(entry) for entry in found[key]])
    yield from _section(
        "arena", [f"{entry['place']}: {entry['corners']} corners" for entry in found["arenas"]]
    )
    yield from _section("units", [line for entry in found["units"] for line in _unit_lines(entry)])
    yield ""
    yield f"read with the settings below: {found['verdict']}"
    for entry in found["findings"]:
        yield from _finding_lines(entry)
    yield ""
    yield "lines for config/config.yaml (check them; they follow the names and counts in the file):"
    yield ""
    yield from configuration_lines(found["proposed"], found["choices"])


def _section(title: str, lines: list[str]) -> Iterator[str]:
    yield ""
    yield title
    yield from (f"  {line}" for line in lines or ["none"])


def _series_line(entry: Mapping[str, Any]) -> str:
    facts = [entry["kind"]]
    if entry["shape"]:
        facts.append(" x ".join(map(str, entry["shape"])))
    if entry["unit"]:
        facts.append(entry["unit"])
    if entry["rate_hz"]:
        facts.append(f"{entry['rate_hz']:.4g} Hz")
    if entry.get("events") is not None:
        facts.append(f"{entry['events']} events")
    return f"{entry['place']}: {', '.join(facts)}"


def _unit_lines(entry: Mapping[str, Any]) -> Iterator[str]:
    parts = [f"{entry['units']} units", f"{entry['spikes']} spikes"]
    if entry["observed_intervals"]:
        parts.append("with observed intervals")
    if entry["electrodes"]:
        parts.append("with electrodes")
    yield f"{entry['place']}: {', '.join(parts)}"
    for column in entry["columns"]:
        yield f"  column {column['column']}: {column['values']}"


def _finding_lines(entry: Mapping[str, Any]) -> Iterator[str]:
    place = f"{entry['place']}: " if entry["place"] else ""
    yield f"  {entry['level']}: {place}{entry['found']}"
    if entry["expected"]:
        yield f"    expected: {entry['expected']}"
    if entry["remedy"]:
        yield f"    what to do: {entry['remedy']}"


def configuration_lines(proposed: Mapping[str, Any], choices: Mapping[str, list[str]]) -> Iterator[str]:
    """Settings of intake as YAML; what the user has to choose stands there as a comment."""
    yield "intake:"
    for key, value in proposed.items():
        yield f"  {key}: {json.dumps(value, ensure_ascii=False) if _needs_quotes(value) else value}"
    for key, candidates in choices.items():
        yield f"  # {key}: choose one of {', '.join(candidates)}"
    if not proposed and not choices:
        yield "  {}"


def _needs_quotes(value: Any) -> bool:
    # A place is plain in YAML unless it has a blank, a colon, a sign of its own, or reads as another type.
    text = str(value)
    plain = text.replace("/", "").replace("_", "").replace("-", "").replace(".", "")
    return (
        not plain.isalnum()
        or not text[0].isalpha()
        or text.lower() in ("null", "true", "false", "yes", "no", "on", "off")
    )
