"""Sessions that cannot be used: told, left out, or a reason to stop."""

import json
import shutil
import subprocess
import sys

import pyarrow.parquet as pq
import pytest


def sessions_table(study):
    rows = pq.read_table(study.results / "population/sessions.parquet").to_pylist()
    return {row["session"]: row for row in rows}


def test_bad_sessions_leave_the_others_up(finished):
    rows = sessions_table(finished)
    assert (rows["broken"]["verdict"], rows["broken"]["stage"]) == ("fail", "intake")
    assert "truncated" in rows["broken"]["reason"]
    assert (rows["jump"]["verdict"], rows["jump"]["stage"]) == ("fail", "sync")
    assert "jumps" in rows["jump"]["reason"]
    assert rows["alpha"]["units_fitted"] == rows["beta"]["units_fitted"] == 5
    units = pq.read_table(finished.results / "population/units.parquet").to_pylist()
    assert {row["session"] for row in units} == {"alpha", "beta"}


def test_products_of_a_session_left_out_are_empty_and_say_why(finished):
    folder = finished.results / "sessions" / "jump"
    audit = json.loads((folder / "behaviour/audit.json").read_text())
    assert audit["verdict"] == "fail"
    assert "sync" in audit["findings"][0]["found"]
    assert pq.read_table(folder / "behaviour/behaviour.parquet").num_rows == 0
    assert pq.read_table(folder / "encoding/shard-0/units.parquet").num_rows == 0
    assert (folder / "session_quality.png").stat().st_size > 0
    assert (finished.results / "sessions/broken/session_quality.png").stat().st_size > 0


def test_a_session_left_out_is_named_in_the_summary_and_in_the_run(finished):
    lines = json.loads((finished.results / "population/summary.json").read_text())["lines"]
    assert any("jump" in line and "broken" in line for line in lines)
    assert "session broken cannot be used" in finished.first.text


def test_a_recording_that_is_gone_is_left_out_and_comes_back(study):
    hidden = study.folder / "hidden.nwb"
    shutil.move(study.folder / "recordings/sorrel_1.nwb", hidden)
    outcome = study.run()
    assert outcome.jobs == {
        "intake beta",
        "session_quality beta",
        "population",
        "population_figures",
        "report",
    }
    assert "no such file" in sessions_table(study)["beta"]["reason"]
    shutil.move(hidden, study.folder / "recordings/sorrel_1.nwb")
    outcome = study.run("results/population/sessions.parquet")
    assert outcome.jobs == {"intake beta", "population"}
    assert sessions_table(study)["beta"]["verdict"] == "pass"


def test_stop_ends_the_run_before_any_job_when_a_recording_cannot_be_read(study):
    study.settings["study"]["on_bad_session"] = "stop"
    outcome = study.run(status=1)
    assert outcome.jobs == set()
    assert "session broken cannot be used" in outcome.text
    assert "on_bad_session" in outcome.text


def test_stop_ends_the_run_at_the_stage_that_fails(study):
    study.settings["study"]["on_bad_session"] = "stop"
    del study.sessions["broken"], study.sessions["jump"]
    study.sessions["leap"] = {"nwb": "recordings/sorrel_2.nwb"}
    outcome = study.run(status=1)
    assert outcome.jobs == {"intake leap", "sync leap"}
    assert "the camera clock jumps" in outcome.text
    assert not (study.results / "sessions/leap/sync/clock.json").exists()


def test_no_session_left_is_an_error_that_names_them(study):
    study.sessions = {name: study.sessions[name] for name in ("broken", "jump")}
    outcome = study.run(status=1)
    assert outcome.jobs == {"population"}
    assert "2 of 2 sessions cannot be used" in outcome.text


@pytest.mark.parametrize(
    ("change", "told"),
    [
        (lambda study: study.settings["encoding"].update(fold=5), "folds"),
        (lambda study: study.settings["study"].update(shards_per_session=0), "shards_per_session"),
        (
            lambda study: study.sessions["alpha"].update({"behaviour.max_gap_s": "long"}),
            "behaviour.max_gap_s",
        ),
        (lambda study: study.sessions.update({"again": {"nwb": "recordings/bracken_1.nwb"}}), "bracken_1"),
    ],
)
def test_wrong_user_files_end_the_run_with_the_place_and_what_to_do(study, change, told):
    study.settings["encoding"] = {}
    change(study)
    outcome = study.run(status=1)
    assert outcome.jobs == set()
    assert told in outcome.text
    assert "what to do" in outcome.text
    assert "Traceback" not in outcome.text


def test_a_recording_that_changes_under_the_run_is_noticed(study):
    study.write_tables()
    shutil.copyfile(study.folder / "recordings/teasel_1.nwb", study.folder / "recordings/bracken_1.nwb")
    record = study.record("sessions/alpha/sync/record.json")
    cache = json.loads((study.results / "plan/cache.json").read_text())
    done = subprocess.run(
        [
            sys.executable, "-m", "odograph.steps.sync", "--session", "alpha",
            "--plan", "results/plan/sessions/alpha/sync.json",
            "--planned", cache["sessions"]["alpha"]["digests"]["sync"],
            "--settings", json.dumps(record["settings"]), "--code", record["code"]["sync"],
            "--outputs", "clock=clock.json", "residuals=residuals.parquet", "record=record.json",
        ],
        cwd=study.folder, env=study.environment(), capture_output=True, text=True,
    )  # fmt: skip
    assert done.returncode == 75
    assert "changed since this run was planned" in done.stderr
    assert not (study.folder / "clock.json").exists()
