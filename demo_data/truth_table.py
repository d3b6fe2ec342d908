"""The truth beside the recordings: one row per unit, as a tab-separated table."""

from __future__ import annotations

import csv
import io
from dataclasses import fields
from pathlib import Path

from simulate_units import UnitTruth, unit_truths
from study_plan import SessionPlan

TRUTH_COLUMNS = tuple(field.name for field in fields(UnitTruth))


def write_truth(folder: Path, plan: SessionPlan) -> Path:
    """Put one session's units into `folder`/truth.tsv; rows of sessions without a recording there go."""
    path = folder / "truth.tsv"
    rows = read_truth(path) if path.is_file() else []
    rows = [row for row in rows if row["session"] != plan.session and _recorded(folder, row["session"])]
    rows += [{name: str(value) for name, value in truth.row().items()} for truth in unit_truths(plan)]
    rows.sort(key=lambda row: (row["session"], int(row["unit"])))
    text = io.StringIO()
    writer = csv.DictWriter(text, TRUTH_COLUMNS, delimiter="\t", lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    unfinished = path.with_name("truth.unfinished")
    unfinished.write_text(text.getvalue(), encoding="utf-8")
    unfinished.replace(path)
    return path


def _recorded(folder: Path, session: str) -> bool:
    return (folder / f"{session}.nwb").is_file()


def read_truth(path: Path) -> list[dict[str, str]]:
    """Rows of a truth table, values as text."""
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file, delimiter="\t"))
