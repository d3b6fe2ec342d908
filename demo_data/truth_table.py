"""The truth beside the recordings, as tab-separated tables: one row per unit, and one per camera clock."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping
from dataclasses import fields
from pathlib import Path

from simulate_units import UnitTruth, unit_truths
from study_plan import SessionPlan

TRUTH_COLUMNS = tuple(field.name for field in fields(UnitTruth))
CLOCK_COLUMNS = ("session", "camera_ahead_s", "drift_ppm", "clock_jump_s")


def write_truth(folder: Path, plan: SessionPlan) -> None:
    """Put one session into `folder`/truth.tsv and clocks.tsv; sessions without a recording there go."""
    units = [truth.row() for truth in unit_truths(plan)]
    clock = {name: getattr(plan, name) for name in CLOCK_COLUMNS}
    _replace_session(folder / "truth.tsv", TRUTH_COLUMNS, plan.session, units)
    _replace_session(folder / "clocks.tsv", CLOCK_COLUMNS, plan.session, [clock])


def read_truth(path: Path) -> list[dict[str, str]]:
    """Rows of a truth table, values as text."""
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file, delimiter="\t"))


def _replace_session(
    path: Path, columns: Iterable[str], session: str, new_rows: Iterable[Mapping[str, object]]
) -> None:
    rows = read_truth(path) if path.is_file() else []
    kept = [
        row for row in rows if row["session"] != session and path.with_name(f"{row['session']}.nwb").is_file()
    ]
    kept += [{name: str(value) for name, value in row.items()} for row in new_rows]
    kept.sort(key=lambda row: (row["session"], int(row.get("unit", 0))))
    text = io.StringIO()
    writer = csv.DictWriter(text, tuple(columns), delimiter="\t", lineterminator="\n")
    writer.writeheader()
    writer.writerows(kept)
    unfinished = path.with_name(f"unfinished_{path.name}")
    unfinished.write_text(text.getvalue(), encoding="utf-8")
    unfinished.replace(path)
