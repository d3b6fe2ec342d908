"""A small version of the calibration: false positives, coverage, bias and power on a few seeded units."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

SCRIPT = Path(__file__).with_name("calibration.py")


@pytest.fixture(scope="module")
def table(tmp_path_factory):
    folder = tmp_path_factory.mktemp("calibration")
    file = folder / "table.json"
    done = subprocess.run(
        [sys.executable, str(SCRIPT), "--quick", "--json", str(file)],
        capture_output=True, text=True, check=False, env=os.environ, cwd=folder, timeout=400,
    )  # fmt: skip
    assert file.exists(), done.stderr
    found = json.loads(file.read_text(encoding="utf-8"))
    assert done.returncode == int(not found["holds"])
    return found


def lines(table, start):
    chosen = [line for line in table["lines"] if line["what"].startswith(start)]
    assert chosen, start
    return chosen


def test_intervals_of_all_shares_meet_what_is_asked(table):
    """The units are seeded, so that the same ones are judged each time."""
    judged = [line for line in table["lines"] if line["holds"] is not None]
    assert len(judged) > 40
    assert [line["what"] for line in judged if not line["holds"]] == []


def test_false_positives_of_all_tests_together(table):
    """380 tests at 5 %: between 2 % and 9 % (beyond that, P < 0.5 % by the binomial distribution)."""
    values = [line["value"] for line in lines(table, "false positives at 5 %")]
    assert len(values) == 19
    assert 0.02 <= sum(values) / len(values) <= 0.09


def test_power_grows_with_spikes_and_depth(table):
    power = {line["what"]: line["value"] for line in lines(table, "power at 5 %")}

    def of(depth, spikes):
        return power[f"power at 5 %: head_direction of depth {depth}, {spikes} spikes"]

    assert of(0.8, 3000) == of(0.8, 1000) == 1
    assert of(0.2, 100) <= of(0.2, 1000)
    assert of(0.2, 100) <= of(0.8, 100)


def test_gains_are_recovered(table):
    for line in lines(table, "mean "):
        true = float(line["what"].split()[-1])
        assert abs(line["value"] - true) < 0.15, line
