"""The same tables whatever the number of cores and of shards, and whether or not a run was killed."""

import json
import os
import shutil
import signal
import subprocess
import time

import pytest

UP_TO = "results/population/units.parquet"


@pytest.fixture(scope="module")
def killed(finished, tmp_path_factory):
    """The same study run from nothing on one core in three shards, killed at a fit, and run to its end."""
    study = type(finished)(tmp_path_factory.mktemp("killed") / "study")
    study.folder.mkdir()
    shutil.copytree(finished.folder / "recordings", study.folder / "recordings")
    study.settings["study"]["shards_per_session"] = 3
    study.write_tables()
    run = subprocess.Popen(
        study.command(UP_TO, cores=1),
        cwd=study.folder,
        env=study.environment(),
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        start_new_session=True,
    )
    try:
        while run.poll() is None and not store_of(study):
            time.sleep(0.02)
    finally:
        # The whole group at once: the head, its jobs, everything.
        os.killpg(run.pid, signal.SIGKILL)
        run.wait()
    study.kept = store_of(study)
    study.run("--unlock", cores=1)
    study.last = study.run(UP_TO, cores=1)
    return study


def store_of(study):
    return {file.stem for file in (study.results / "store").glob("??/*.npz") if file.name[0] != "."}


def test_the_run_was_killed_between_fits(killed, finished):
    assert 0 < len(killed.kept) < len(store_of(finished))
    assert "population" in killed.last.jobs


def test_all_tables_are_the_same_bytes(killed, finished):
    assert killed.tables() == finished.tables()
    assert {"population/units.parquet", "population/units.tsv", "population/summary.json"} <= set(
        killed.tables()
    )


def test_fits_made_before_the_kill_were_not_made_again(killed):
    made = {}
    for file in killed.results.glob("sessions/*/encoding/shard-*/record.json"):
        record = json.loads(file.read_text())
        made |= {
            (record["keys"]["session"], row["unit"]): row["made"] for row in record["run"].get("units", ())
        }
    assert list(made.values()).count("restored") == len(killed.kept)


def test_the_store_holds_the_same_fits(killed, finished):
    assert store_of(killed) == store_of(finished)
    for name in store_of(killed):
        one = (killed.results / "store" / name[:2] / f"{name}.npz").read_bytes()
        assert one == (finished.results / "store" / name[:2] / f"{name}.npz").read_bytes()


def test_fewer_shards_leave_nothing_of_the_others_behind(study):
    study.settings["study"]["shards_per_session"] = 1
    before = study.tables()
    outcome = study.run()
    assert {job for job in outcome.jobs if job.startswith("encoding")} == {
        f"encoding {session} 0" for session in ("alpha", "beta", "jump")
    }
    assert study.tables() == before
    assert [path.name for path in (study.results / "sessions/alpha/encoding").iterdir()] == ["shard-0"]
    assert not list((study.results / "sessions/alpha/cards").glob("shard-1*"))
    assert {
        row["made"] for row in study.record("sessions/alpha/encoding/shard-0/record.json")["run"]["units"]
    } == {"restored"}
