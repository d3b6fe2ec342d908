"""The study of the other tests through a real Slurm: the same bytes as on one machine, in fewer jobs."""

import os
import re
import shutil
import subprocess
import tempfile
from pathlib import Path

import pytest
from slurm import Cluster, NoClusterError

ROOT = Path(__file__).parents[2]
#: A head whose controller went away would wait for ever.
LIMIT_S = 420


@pytest.fixture(scope="module")
def cluster():
    # Not below the temporary folder of the tests: the path of a socket may have 107 characters.
    folder = Path(tempfile.mkdtemp(prefix="slurm-"))
    found = Cluster(folder)
    try:
        found.start()
    except NoClusterError as error:
        if os.environ.get("ODOGRAPH_NEEDS_SLURM"):
            raise
        pytest.skip(f"no Slurm here: {error}")
    yield found
    found.stop()
    shutil.rmtree(folder, ignore_errors=True)


@pytest.fixture(scope="module")
def on_slurm(cluster, finished, tmp_path_factory):
    """The finished study's recordings and settings, run from nothing on the cluster."""
    study = type(finished)(tmp_path_factory.mktemp("slurm") / "study")
    study.folder.mkdir()
    shutil.copytree(finished.folder / "recordings", study.folder / "recordings")
    study.write_tables()
    command = study.command("--slurm-init-seconds-before-status-checks", "2", "--latency-wait", "10")
    profile = command.index("--profile") + 1
    command[profile] = str(ROOT / "workflow" / "profiles" / "slurm")
    cores = command.index("--cores")
    del command[cores : cores + 2]
    done = subprocess.run(
        command,
        cwd=study.folder,
        env={**study.environment(), "SLURM_CONF": cluster.environment["SLURM_CONF"]},
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        timeout=LIMIT_S,
        check=False,
    )
    study.text = done.stdout
    assert done.returncode == 0, done.stdout
    return study


def test_every_table_and_fit_is_the_same_bytes_as_on_one_machine(on_slurm, finished):
    def products(study):
        return {
            str(file.relative_to(study.results)): file.read_bytes()
            for file in study.results.rglob("*")
            if file.suffix in (".parquet", ".tsv", ".npz", ".png")
        }

    ours, theirs = products(on_slurm), products(finished)
    assert sorted(ours) == sorted(theirs)
    assert [name for name in ours if ours[name] != theirs[name]] == []
    assert {"population/units.parquet", "population/units.tsv", "figures/composition.png"} <= set(ours)
    assert sum(name.startswith("sessions/alpha/encoding/shard-") for name in ours) == 6


def test_the_run_root_is_the_same(on_slurm, finished):
    assert on_slurm.record("root.json")["root"] == finished.record("root.json")["root"]


def test_what_belongs_together_was_one_job(on_slurm):
    jobs = dict(re.findall(r"SLURM jobid (\d+) \(log: .*/slurm_logs/(\w+?)/", on_slurm.text))
    names = sorted(jobs.values())
    shards = [name for name in names if name == "group_shard_cards_encoding"]
    # Three sessions can be read; of the fourth only its inventory and its picture are made.
    assert len(shards) == 6
    assert names.count("group_session_behaviour_intake_session_quality_sync") == 3
    assert names.count("group_session_intake_session_quality") == 1
    assert names.count("group_study_population_population_figures_report_root") == 1
    assert len(names) == 11


def test_jobs_ask_for_what_their_work_needs_and_not_for_the_sum_of_their_members(on_slurm, cluster):
    asked = {}
    for job, name in re.findall(r"SLURM jobid (\d+) \(log: .*/slurm_logs/(\w+?)/", on_slurm.text):
        told = cluster.ask("scontrol", "show", "job", job)
        memory, limit = re.search(r"mem=(\d+)M", told), re.search(r"TimeLimit=(\d+):(\d+):", told)
        asked[name] = int(memory[1]), 60 * int(limit[1]) + int(limit[2])
    megabytes, minutes = asked["group_shard_cards_encoding"]
    assert 500 <= megabytes <= 1500
    assert 20 <= minutes <= 60
    assert asked["group_study_population_population_figures_report_root"][0] > megabytes
