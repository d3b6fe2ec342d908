"""`odograph compare OLD NEW`: what changed between two runs, and which conclusions followed."""

from __future__ import annotations

import argparse
import json
import sys
from collections import Counter
from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from odograph.errors import InputError, OdographError, printable

EXIT_SAME, EXIT_DIFFERENT, EXIT_NO_INPUT = 0, 1, 66
_MOST_LINES = 25

_EXAMPLES = """\
examples:
  odograph compare ../study-before .                    two study folders
  odograph compare archive/data . --figure compare.png  an unpacked archive and the present study
  odograph compare old new --old-data first-sorting     where the old recordings lie now

Units are matched across sortings by their spikes, which are read from the recordings. Where those of a run
cannot be read any more, units are matched by number and digest, and the page says so.

exit codes: 0 the same units with the same conclusions, 1 not so, 66 no results
"""


def add_parser(subparsers: argparse._SubParsersAction[argparse.ArgumentParser]) -> None:
    """Add the command to the parser of `odograph`."""
    parser = subparsers.add_parser(
        "compare",
        help="what changed between two runs, and which conclusions followed",
        description="Compare two runs of a study: what went into them, what became of the units, which "
        "conclusions changed, and which change of the inputs each follows from.",
        epilog=_EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("old", metavar="OLD", type=Path, help="a study's folder, or an archive's `data`")
    parser.add_argument("new", metavar="NEW", type=Path, help="the other")
    parser.add_argument("--old-data", metavar="FOLDER", type=Path, help="where the old recordings lie now")
    parser.add_argument("--new-data", metavar="FOLDER", type=Path, help="where the new recordings lie now")
    parser.add_argument(
        "--table", metavar="FILE", type=Path, help="write the changed conclusions, tab-separated"
    )
    parser.add_argument("--figure", metavar="FILE", type=Path, help="draw it (.png, .svg or .pdf)")
    parser.add_argument("--json", action="store_true", help="write one JSON document instead of text")
    parser.set_defaults(run=run)


@dataclass(frozen=True)
class Comparison:
    """All that is told of two runs."""

    differences: list[Any]
    relations: dict[str, list[Any]]
    by_number: list[str]
    changes: list[Any]
    composition: list[dict[str, Any]]

    @property
    def regrouped(self) -> list[Any]:
        """Units that are not one to one, about which one run says what the other cannot."""
        one_to_one = ("same", "changed")
        return [one for some in self.relations.values() for one in some if one.kind not in one_to_one]


def run(args: argparse.Namespace) -> int:
    """Compare two runs; returns the exit code."""
    try:
        found = compare(args.old, args.new, args.old_data, args.new_data)
        if args.figure:
            _draw(found, args.figure)
    except OdographError as error:
        print(error.message(), file=sys.stderr)
        return EXIT_NO_INPUT
    if args.table:
        from odograph.provenance.files import write_tsv

        columns = ("session", "before", "after", "what", "was", "now", "because")
        write_tsv(args.table, {name: [getattr(one, name) for one in found.changes] for name in columns})
    if args.json:
        print(json.dumps({"schema_version": 1, **_plain(asdict(found))}, indent=1, sort_keys=True))
    else:
        print(printable("\n".join(_text(found))))
    return EXIT_DIFFERENT if found.changes or found.regrouped else EXIT_SAME


def compare(old: Path, new: Path, old_data: Path | None = None, new_data: Path | None = None) -> Comparison:
    """Compare two studies' folders; see the command's help.

    Raises
    ------
    InputError
        One of them has no results.
    """
    from odograph.provenance.compare.conclusions import changed_conclusions, composition_changes
    from odograph.provenance.compare.differences import input_differences, run_inputs
    from odograph.provenance.compare.sortings import relate_sessions
    from odograph.provenance.files import read_table

    old, new = (folder.parent if folder.name == "results" else folder for folder in (old, new))
    inputs = run_inputs(old), run_inputs(new)
    differences = input_differences(*inputs)
    relations, by_number = relate_sessions((old, new), inputs, (old_data, new_data))
    units = [read_table(folder / "results/population/units.parquet") for folder in (old, new)]
    parts = [read_table(folder / "results/population/composition.parquet") for folder in (old, new)]
    changes = changed_conclusions(*units, relations, differences)
    return Comparison(differences, relations, by_number, changes, composition_changes(*parts))


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if hasattr(value, "item"):
        value = value.item()
    return None if isinstance(value, float) and value != value else value


def _draw(found: Comparison, target: Path) -> None:
    from odograph.figures.compare import draw_comparison
    from odograph.settings.figures import FiguresSettings

    if target.suffix not in (".png", ".svg", ".pdf"):
        raise InputError(
            f"{target.suffix!r} is no kind of figure", file=str(target), expected=".png, .svg or .pdf"
        )
    changed = len({(one.session, one.after) for one in found.changes})
    figure = draw_comparison(found.composition, _counts(found.relations), changed, FiguresSettings())
    figure.savefig(target)


def _counts(relations: Mapping[str, list[Any]]) -> dict[str, int]:
    from odograph.provenance.compare.match import KINDS

    counts = Counter(one.kind for some in relations.values() for one in some)
    return {kind: counts[kind] for kind in KINDS}


def _text(found: Comparison) -> Iterator[str]:
    units = len({(one.session, one.after) for one in found.changes})
    if found.changes:
        yield f"{units} {'unit has' if units == 1 else 'units have'} another conclusion"
    elif found.regrouped:
        yield "no unit that both runs have has another conclusion"
    else:
        yield "every conclusion is the same"
    for one in found.changes[:_MOST_LINES]:
        number = f"unit {one.before}" + (f" (now {one.after})" if one.after != one.before else "")
        yield f"  {one.session} {number}: {one.what} {one.was or 'none'} -> {one.now or 'none'}"
        yield f"      because of {one.because}"
    if len(found.changes) > _MOST_LINES:
        yield f"  and {len(found.changes) - _MOST_LINES} more (--table FILE writes all)"
    yield ""
    yield "what became of the units"
    yield "  " + ", ".join(f"{count} {kind}" for kind, count in _counts(found.relations).items() if count)
    for session, some in sorted(found.relations.items()):
        for one in some:
            if one.kind != "same":
                before, after = (", ".join(map(str, side)) or "none" for side in (one.before, one.after))
                yield f"  {session}: {one.kind}: {before} -> {after} ({one.shared} spikes shared)"
    if found.by_number:
        yield f"  matched by number and digest, their recordings cannot be read: {', '.join(found.by_number)}"
    yield ""
    yield "shares of the fitted units"
    for row in found.composition:
        if row["kind"] == "includes":
            yield f"  {row['category']}: {_share(row, 'before')} -> {_share(row, 'after')}"
    yield ""
    yield "what went in" if found.differences else "nothing but units differs in what went in"
    for one in found.differences:
        of = f" of {one.session}" if one.session and one.kind != "session" else ""
        yield f"  {one.kind} {one.what}{of}: {_short(one.before)} -> {_short(one.after)}"


def _share(row: Mapping[str, Any], side: str) -> str:
    if row[f"{side}_k"] is None or not row[f"{side}_n"]:
        return "none"
    text = f"{row[f'{side}_k']} of {row[f'{side}_n']} ({100 * row[f'{side}_share']:.0f} %"
    low, high = row[f"{side}_low"], row[f"{side}_high"]
    if low is not None and low == low:
        text += f", {100 * low:.0f} to {100 * high:.0f} %"
    return f"{text})"


def _short(value: str | None) -> str:
    if value is None:
        return "none"
    return value[7:19] if value.startswith("sha256:") else value if len(value) < 60 else f"{value[:57]}..."
