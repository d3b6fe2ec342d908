"""The speed benchmark runs, and its table has the form that is promised; the figures are not judged here."""

import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

SCRIPT = Path(__file__).with_name("encoding_speed.py")
MEASURED = (
    "selection of one unit",
    "70 fits at fixed penalties",
    "one smoothing-selected fit",
    "shift test of one term, its null fit included: plane",
    "shift test of one term, its null fit included: circle",
    "shift test of one term, its null fit included: line",
    "shift test of one term, its null fit included: category",
    "500 units of one",
    "selection: time per bin",
    "all of the analysis: time per bin",
    "all of the analysis: time per unit",
    "peak memory of a shard",
)
WORDS = {True: "yes", False: "NO", None: "-"}


def run(folder: Path, environment: dict[str, str]) -> tuple[subprocess.CompletedProcess, dict]:
    file = folder / "table.json"
    command = [sys.executable, str(SCRIPT), "--quick", "--json", str(file)]
    done = subprocess.run(
        command, capture_output=True, text=True, check=False, env=environment, cwd=folder, timeout=300
    )
    assert file.exists(), done.stderr
    return done, json.loads(file.read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def ran(tmp_path_factory):
    # Without a PATH no Rscript is found: what is missing is left out, and the rest goes on.
    return run(tmp_path_factory.mktemp("speed"), os.environ | {"PATH": ""})


def test_every_figure_is_in_the_table(ran):
    _, table = ran
    for what in MEASURED:
        assert any(line["what"].startswith(what) for line in table["lines"]), what


def test_the_printed_table_is_the_written_one(ran):
    done, table = ran
    printed = done.stdout.splitlines()
    head = next(line for line in printed if line.startswith("what "))
    places = [head.index(name) for name in ("what", "asked", "measured", "holds")]
    rows = printed[printed.index(head) + 2 :][: len(table["lines"])]
    for row, line in zip(rows, table["lines"], strict=True):
        cells = [row[a:b].strip() for a, b in zip(places, [*places[1:], None], strict=True)]
        assert cells == [line["what"], line["asked"], line["measured"], WORDS[line["holds"]]]
    for note in table["notes"]:
        assert f"- {note}" in printed


def test_the_status_is_1_when_a_line_does_not_hold(ran):
    done, table = ran
    assert done.returncode == int(any(line["holds"] is False for line in table["lines"]))
    assert table["holds"] == (done.returncode == 0)
    assert table["quick"] is True


def test_what_cannot_be_measured_is_said_and_fails_nothing(ran):
    _, table = ran
    missing = [line for line in table["lines"] if line["measured"] == "not measured"]
    assert [line["what"].rpartition(": ")[2] for line in missing] == ["time", "fitted rates"]
    assert all(line["holds"] is None for line in missing)
    for line in missing:
        assert any(note.startswith(f"{line['what']}: not measured") for note in table["notes"])


def test_what_is_measured_comes_as_a_number_too(ran):
    _, table = ran
    for line in table["lines"]:
        if line["measured"] not in ("not measured", "failed"):
            assert line["value"] > 0, line["what"]


def test_the_machine_and_the_versions_are_told(ran):
    done, table = ran
    facts = table["facts"]
    assert re.search(r"\d+ cores, ", facts["machine"])
    for name in ("Python", "numpy", "scipy", "numba", "odograph"):
        assert re.search(rf"\b{name} \d+\.\d+", facts["versions"]), name
    assert "mgcv" not in facts["versions"]
    assert f"machine: {facts['machine']}" in done.stdout
