"""The benchmark of scale runs, on a few small sessions, and has the form that is promised."""

import json
import subprocess
import sys
from pathlib import Path

import pytest

pytestmark = pytest.mark.long

SCRIPT = Path(__file__).with_name("scale.py")
MEASURED = (
    "first run, stand-in fits, sessions: 1",
    "files for each unit, sessions: 1",
    "entries of the largest folder of ours, 300 sessions (by rule)",
    "nothing to do, sessions: 1",
    "nothing to do, sessions: 2",
    "planning 1 new sessions (reading them)",
    "population of 10 units",
    "report of 10 units",
    "one unit of 2 sessions changed",
)


@pytest.fixture(scope="module")
def table(tmp_path_factory):
    folder = tmp_path_factory.mktemp("scale")
    file = folder / "table.json"
    done = subprocess.run(
        [sys.executable, str(SCRIPT), "--quick", "--json", str(file)],
        capture_output=True, text=True, check=False, cwd=folder, timeout=900,
    )  # fmt: skip
    assert file.exists(), done.stderr[-4000:]
    return {line["what"]: line for line in json.loads(file.read_text(encoding="utf-8"))["lines"]}


@pytest.mark.parametrize("what", MEASURED)
def test_every_figure_is_in_the_table(table, what):
    assert table[what]["value"] > 0


def test_the_growth_is_told(table):
    assert table["nothing to do: each further session"]["measured"].endswith("up to 2")


def test_one_unit_was_fitted_again_and_no_other(table):
    assert "1 unit fitted" in table["one unit of 2 sessions changed"]["measured"]


def test_what_does_not_depend_on_the_machine_holds(table):
    assert table["one unit of 2 sessions changed"]["holds"]
    assert table["entries of the largest folder of ours, 300 sessions (by rule)"]["holds"]
