"""The quick version of the fault harness holds: one test for each of its lines."""

import json
import subprocess
import sys
from pathlib import Path

import pytest

pytestmark = pytest.mark.long

HARNESS = Path(__file__).with_name("harness.py")
LINES = {
    "kill -9 over the run": True,
    "disk full: encoding": None,
    "disk full: afterwards": True,
    "two runs, while units are fitted": True,
    "damaged: shard table": True,
}


@pytest.fixture(scope="module")
def table(tmp_path_factory):
    folder = tmp_path_factory.mktemp("faults")
    file = folder / "table.json"
    command = [sys.executable, str(HARNESS), "--quick", "--json", str(file)]
    done = subprocess.run(command, capture_output=True, text=True, check=False, cwd=folder)
    assert file.exists(), done.stderr
    found = json.loads(file.read_text(encoding="utf-8"))
    assert done.returncode == int(not found["holds"]), done.stderr
    return {line["what"]: line for line in found["lines"]}


@pytest.mark.parametrize("what", LINES)
def test_a_study_outlives_the_fault(table, what):
    if "disk full" in table:
        assert "cannot be mounted" in table["disk full"]["measured"]
        if what.startswith("disk full"):
            pytest.skip(table["disk full"]["measured"])
    line = table[what]
    assert line["holds"] is True, line["measured"]
    assert line["same"] is LINES[what]


def test_no_line_is_missing(table):
    assert set(table) - {"disk full"} == set(LINES) - (
        {k for k in LINES if "disk" in k} if "disk full" in table else set()
    )
