"""One run at a time in a folder, jobs that outlive theirs, and time stamps in the future."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from odograph.errors import ChangedInputError, InputError
from odograph.provenance import running
from odograph.provenance.files import write_text
from odograph.provenance.running import NUMBER, RUN_LOCK, only_looks, planning, still_in_charge
from odograph.provenance.time_stamps import set_back_stamps

HOLD = """
import sys
from odograph.provenance.running import planning
with planning(sys.argv[1:]) as alone:
    print(alone, flush=True)
sys.stdin.read()
"""


@pytest.fixture(autouse=True)
def folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv(NUMBER, raising=False)
    yield tmp_path
    for file in running._held.values():
        file.close()
    running._held.clear()
    os.environ.pop(NUMBER, None)


@pytest.fixture
def other():
    """Another process that holds the folder like a run, until it is ended."""
    process = subprocess.Popen(
        [sys.executable, "-c", HOLD], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    assert process.stdout.readline() == "True\n"
    yield process
    process.kill()
    process.communicate()


def test_a_second_run_is_told_which_process_holds_the_folder(other):
    with pytest.raises(InputError) as caught, planning([]):
        pass
    message = str(caught.value)
    assert f"process {other.pid} on {os.uname().nodename}" in message
    assert "wait until it is done" in message and "--unlock" in message


def test_the_lock_of_a_live_run_is_not_taken_away(other):
    with pytest.raises(InputError, match="its lock is in use and stays"), planning(["--unlock"]):
        pass


def test_looking_beside_a_run_takes_its_plan(other, capsys):
    with planning(["-n"]) as alone:
        assert not alone
    assert f"process {other.pid}" in capsys.readouterr().err


def test_looking_holds_nothing(capsys):
    with planning(["--dry-run"]) as alone:
        assert alone
    code = [sys.executable, "-c", HOLD]
    assert subprocess.run(code, stdin=subprocess.DEVNULL, capture_output=True, text=True).stdout == "True\n"


def test_a_run_that_was_killed_holds_nothing_and_unlocking_is_named(other, capsys):
    locks = Path(".snakemake/locks")
    locks.mkdir(parents=True)
    (locks / "0.input.lock").write_text("results/root.json\n")
    other.kill()
    other.wait()
    with planning([]) as alone:
        assert alone
    told = capsys.readouterr().err
    assert f"process {other.pid}" in told and "--unlock" in told
    assert json.loads(RUN_LOCK.read_text())["process"] == os.getpid()


def test_parsing_twice_in_one_process_is_one_run():
    for _ in range(2):
        with planning([]) as alone:
            assert alone


def test_a_job_plans_nothing(other):
    with planning([], main_process=False) as alone:
        assert not alone


def test_numbers_rise_even_when_the_clock_goes_back():
    with planning([]):
        first = int(os.environ[NUMBER])
    for file in running._held.values():
        file.close()
    running._held.clear()
    note = json.loads(RUN_LOCK.read_text())
    RUN_LOCK.write_text(json.dumps(note | {"run": first + 10**9}))
    with planning([]):
        assert int(os.environ[NUMBER]) == first + 10**9 + 1


@pytest.mark.parametrize("content", ["", "{", "[]", '{"run": "x"}', "\x00" * 50])
def test_a_damaged_note_stops_nobody(content):
    RUN_LOCK.parent.mkdir(parents=True)
    RUN_LOCK.write_text(content)
    os.environ[NUMBER] = "5"
    still_in_charge()
    with planning([]) as alone:
        assert alone
    assert int(os.environ[NUMBER]) > 5


def test_a_job_that_outlived_its_run_writes_nothing(folder):
    with planning([]):
        pass
    write_text("results/product.json", "new", still_in_charge)
    os.environ[NUMBER] = str(int(os.environ[NUMBER]) - 1)
    with pytest.raises(ChangedInputError, match="another run of this study began"):
        write_text("results/product.json", "old", still_in_charge)
    assert Path("results/product.json").read_text() == "new"
    assert sorted(path.name for path in Path("results").iterdir()) == ["plan", "product.json"]


def test_a_delayed_view_of_the_run_before_stops_no_job():
    with planning([]):
        pass
    os.environ[NUMBER] = str(int(os.environ[NUMBER]) + 1)
    still_in_charge()


def test_a_job_of_no_run_is_left_alone():
    still_in_charge()


@pytest.mark.parametrize(
    "arguments, looks",
    [
        (["-n"], True),
        (["--cores", "2", "--dry-run"], True),
        (["-np"], True),
        (["--summary"], True),
        (["--unlock"], False),
        (["--cores", "2"], False),
        (["--nocolor", "--notemp"], False),
        ([], False),
    ],
)
def test_what_only_looks(arguments, looks):
    assert only_looks(arguments) is looks


def test_stamps_in_the_future_are_set_to_now_in_their_order(capsys):
    now = 1_700_000_000_000_000_000
    minute = 60_000_000_000
    stamps = {
        "results/sessions/a/behaviour/audit.json": now - minute,
        "results/sessions/a/sync/clock.json": now + minute,
        "results/sessions/a/sync/record.json": now + minute,
        "results/population/units.parquet": now + 1440 * minute,
        "results/store/ab/kept.npz": now + minute,
    }
    for name, stamp in stamps.items():
        write_text(name, name)
        os.utime(name, ns=(stamp, stamp))
    assert set_back_stamps(now) == 3
    after = {name: Path(name).stat().st_mtime_ns for name in stamps}
    assert list(after.values()) == [now - minute, now, now, now + 1, now + minute]
    assert "3 products lie in the future, by up to 86,400 s" in capsys.readouterr().err
    assert set_back_stamps(now + 10) == 0


def test_a_run_sets_back_what_lies_in_the_future():
    write_text("results/population/summary.json", "{}")
    ahead = Path("results/population/summary.json").stat().st_mtime_ns + 10**12
    os.utime("results/population/summary.json", ns=(ahead, ahead))
    with planning([]):
        assert Path("results/population/summary.json").stat().st_mtime_ns < ahead - 10**11
