"""The harness of the steps: exit codes, logs, verdicts, and the record at the end."""

import json
import logging
import os
from pathlib import Path

import pytest

from odograph.errors import ChangedInputError, DiskFullError, InputError, SettingsError
from odograph.provenance import records
from odograph.provenance.canonical import digest_text
from odograph.provenance.files import write_json
from odograph.provenance.fingerprint import code_fingerprint
from odograph.provenance.records import RecordDraft
from odograph.provenance.step import failure_in, left_out_because, refuse_if_failed, run_step

RULE = "sync"
FAILED = {
    "verdict": "fail",
    "findings": [
        {"level": "note", "place": None, "found": "a note", "expected": None, "remedy": None},
        {"level": "fail", "place": "clock", "found": "it jumps", "expected": "a line", "remedy": "mend it"},
    ],
}


@pytest.fixture
def here(tmp_path, monkeypatch):
    """A folder with a planned session; what the harness does to the process is undone."""
    monkeypatch.chdir(tmp_path)
    root = logging.getLogger()
    handlers, level, environment = list(root.handlers), root.level, dict(os.environ)
    plan("leave_out")
    yield tmp_path
    for handler in set(root.handlers) - set(handlers):
        root.removeHandler(handler)
        handler.close()
    root.setLevel(level)
    logging.captureWarnings(False)
    os.environ.clear()
    os.environ.update(environment)


def plan(on_bad_session):
    source = {"nwb": "one.nwb", "intake": {}, "on_bad_session": on_bad_session}
    write_json("results/plan/sessions/one/source.json", source)
    write_json("plan.json", {"signals": {}})


def run(work, leave_out=None, **changes):
    options = {
        "--session": "one",
        "--plan": "plan.json",
        "--planned": digest_text(Path("plan.json").read_text()),
        "--settings": json.dumps({"sync": {"max_bend_ms": 3.0}}),
        "--code": code_fingerprint(f"odograph.steps.{RULE}"),
        "--log": "logs/sync/one.log",
    } | changes
    arguments = [part for option in options.items() for part in option]
    return run_step(
        RULE, work, leave_out, [*arguments, "--outputs", "clock=out/clock.json", "record=out/record.json"]
    )


def write_clock(step):
    step.write_json("clock", {"verdict": "pass"})


def refuse(error):
    def work(step):
        raise error

    return work


def test_a_step_that_ends_well_leaves_its_products_and_their_record(here):
    assert run(write_clock) == 0
    record = json.loads(Path("out/record.json").read_text())
    assert record["rule"] == RULE
    assert record["keys"] == {"session": "one"}
    assert record["settings"] == {"sync": {"max_bend_ms": 3.0}}
    assert [product["path"] for product in record["products"]] == ["out/clock.json"]
    assert record["record_id"] in Path("logs/sync/one.log").read_text()


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (InputError("bad data"), 65),
        (SettingsError("bad setting"), 78),
        (ChangedInputError("it changed"), 75),
        (ZeroDivisionError("a bug"), 70),
        (KeyboardInterrupt(), 130),
    ],
)
def test_exit_codes_tell_what_went_wrong(here, error, code):
    assert run(refuse(error)) == code
    log = Path("logs/sync/one.log").read_text()
    assert (str(error) or "stopped") in log
    assert ("Traceback" in log) == (code == 70)
    assert not Path("out/record.json").exists()


def test_data_that_cannot_be_used_leave_the_session_out(here, capsys):
    def leave_out(step, error):
        step.write_json("clock", {"verdict": "fail", "findings": [error.finding()]})

    assert run(refuse(InputError("bad data", place="there")), leave_out) == 0
    assert json.loads(Path("out/clock.json").read_text())["findings"][0]["found"] == "bad data"
    assert Path("out/record.json").exists()
    assert "session one is left out" in capsys.readouterr().err


@pytest.mark.parametrize("error", [ChangedInputError("it changed"), SettingsError("bad setting")])
def test_only_bad_data_leave_a_session_out(here, error):
    assert run(refuse(error), lambda step, error: step.write_json("clock", {})) in (75, 78)
    assert not Path("out/clock.json").exists()


def test_stop_makes_bad_data_an_error(here):
    plan("stop")
    assert run(refuse(InputError("bad data")), lambda step, error: step.write_json("clock", {})) == 65
    assert run(lambda step: refuse_if_failed(step, FAILED)) == 65
    assert "it jumps" in Path("logs/sync/one.log").read_text()
    plan("leave_out")
    assert run(lambda step: (refuse_if_failed(step, FAILED), write_clock(step))) == 0


def test_a_plan_or_code_that_changed_ends_the_job(here):
    assert run(write_clock, **{"--planned": "sha256:other"}) == 75
    assert run(write_clock, **{"--code": "sha256:other"}) == 75
    assert not Path("out/clock.json").exists()


def test_linear_algebra_uses_one_thread(here):
    seen = {}
    assert run(lambda step: seen.update(os.environ) or write_clock(step)) == 0
    assert seen["OMP_NUM_THREADS"] == seen["OPENBLAS_NUM_THREADS"] == "1"


def test_the_reason_of_a_failure_is_handed_on():
    assert failure_in(FAILED).found == "it jumps"
    finding = left_out_because("sync", FAILED)
    assert finding["level"] == "fail"
    assert "sync" in finding["found"]
    assert "it jumps" in finding["found"]


@pytest.mark.parametrize(
    "error, status",
    [(DiskFullError("no room"), 74), (ChangedInputError("changed"), 75), (OSError(28, "full"), 74)],
)
def test_no_session_is_left_out_for_a_fault_of_the_run(here, error, status):
    def work(step):
        raise error

    def leave_out(step, error):
        raise AssertionError("the session is not at fault")

    assert run(work, leave_out) == status
    assert not Path("out/clock.json").exists()


@pytest.mark.parametrize("damage", ["product", "record"])
def test_a_damaged_input_is_removed_and_made_again_by_the_next_run(here, damage):
    made = RecordDraft("intake", keys={}, settings={}, code={})
    write_json("up/inventory.json", {"verdict": "pass"})
    made.add_product("up/inventory.json")
    made.write("up/record.json")
    damaged = Path("up/inventory.json" if damage == "product" else "up/record.json")
    damaged.write_text(damaged.read_text().replace("pass", "fail").replace("intake", "sync"))
    records._producers_in.cache_clear()

    def leave_out(step, error):
        raise AssertionError("the session is not at fault")

    assert run(lambda step: step.use("up/inventory.json"), leave_out) == 75
    assert not damaged.exists() and len(list(Path("up").iterdir())) == 1
    told = Path("logs/sync/one.log").read_text()
    assert f"{damaged}: " in told and "it was removed" in told and "run snakemake again" in told


def test_a_job_that_outlived_its_run_writes_no_product(here, monkeypatch):
    write_json("results/plan/run.lock", {"run": 8})
    monkeypatch.setenv("ODOGRAPH_RUN", "7")
    assert run(lambda step: step.write_json("clock", {})) == 75
    assert not Path("out/clock.json").exists() and not Path("out/record.json").exists()


def test_a_new_log_leaves_the_one_of_a_job_that_still_writes_alone(here):
    assert run(lambda step: step.write_json("clock", {})) == 0
    with Path("logs/sync/one.log").open("a") as orphan:
        assert run(lambda step: step.write_json("clock", {})) == 0
        orphan.write("from before")
    assert "from before" not in Path("logs/sync/one.log").read_text()


def test_inputs_that_are_missing_are_named(here):
    assert run(lambda step: step.use("nowhere.json")) == 75
    assert "nowhere.json" in Path("logs/sync/one.log").read_text()
