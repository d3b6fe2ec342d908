"""Taking away what is damaged, so that the next run makes it again; and stores that studies share."""

import fcntl
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from odograph.command.main import main
from odograph.provenance import records
from odograph.provenance.files import write_json, write_table
from odograph.provenance.housekeeping import left_by_killed, survey_store
from odograph.provenance.records import RecordDraft
from odograph.provenance.root import write_root
from odograph.provenance.store import FitSource, FitStore, StoredFit

RECORD, PRODUCT, ROOT = (
    "results/population/record.json",
    "results/population/summary.json",
    "results/root.json",
)


@pytest.fixture
def study(tmp_path, monkeypatch):
    """A finished study of one record with one product."""
    monkeypatch.chdir(tmp_path)
    records._producers_in.cache_clear()
    Path("config").mkdir()
    Path("config/config.yaml").write_text("study: {name: one}\n")
    Path("config/sessions.tsv").write_text("session\tnwb\none\tone.nwb\n")
    write_json("results/plan/population.json", {"sessions": []})
    write_json("results/plan/cache.json", {"sessions": {}})
    draft = RecordDraft("population", keys={}, settings={}, code={})
    write_json(PRODUCT, {"units": 1})
    draft.add_product(PRODUCT)
    draft.write(RECORD)
    write_root()
    return tmp_path


def there():
    return {path for path in (PRODUCT, RECORD, ROOT) if Path(path).exists()}


@pytest.mark.parametrize(
    "damaged, kept",
    [(PRODUCT, set()), (RECORD, {PRODUCT}), (ROOT, {PRODUCT, RECORD})],
)
def test_what_is_damaged_is_removed_with_what_asks_for_it(study, damaged, kept, capsys):
    Path(damaged).write_text("{}")
    assert main(["verify"]) == 1
    assert "odograph verify --remove" in capsys.readouterr().out
    assert there() == {PRODUCT, RECORD, ROOT}
    assert main(["verify", "--remove"]) == 1
    assert there() == kept
    assert "run snakemake to make them again" in capsys.readouterr().out


def test_a_product_that_is_gone_takes_its_record_along(study):
    Path(PRODUCT).unlink()
    assert main(["verify", "--remove"]) == 1
    assert there() == set()


def test_nothing_is_removed_under_a_run(study, capsys):
    Path(PRODUCT).write_text("{}")
    Path("results/plan/run.lock").write_text('{"process": 7, "host": "h", "started": "then"}\n')
    with Path("results/plan/run.lock").open("r+") as file:
        fcntl.flock(file, fcntl.LOCK_EX)
        assert main(["verify", "--remove"]) == 65
    assert there() == {PRODUCT, RECORD, ROOT}
    assert "process 7 on h" in capsys.readouterr().err


def fit_of(results, name, shared):
    """A study's results with one fit of its own in a store that is a link."""
    source = FitSource(spikes=name, behaviour="b", settings="s", code="c")
    results.mkdir()
    (results / "store").symlink_to(shared, target_is_directory=True)
    FitStore(results / "store").save(source.key, StoredFit({"n_spikes": 1}, [], {"a": np.arange(3)}))
    write_table(results / "sessions/one/encoding/shard-0/units.parquet", {"fit_key": [source.key]})
    return source.key


def test_a_shared_store_keeps_what_any_of_its_studies_needs(tmp_path, capsys):
    shared = tmp_path / "shared"
    shared.mkdir()
    one, two = tmp_path / "one", tmp_path / "two"
    keys = {fit_of(one, "1", shared), fit_of(two, "2", shared)}
    assert len(survey_store(one).unneeded) == 1
    assert main(["store", "--drop", "--results", str(one)]) == 64
    assert "name the results of all studies that share it" in capsys.readouterr().err
    assert main(["store", "--drop", "--results", str(one), "--results", str(two)]) == 0
    assert {path.stem for path in shared.glob("??/*.npz")} == keys


def test_dropping_takes_what_killed_writers_left(tmp_path):
    folder = tmp_path / "store" / "ab"
    folder.mkdir(parents=True)
    host = "".join(letter if letter.isalnum() else "_" for letter in os.uname().nodename)
    ended = subprocess.Popen([sys.executable, "-c", ""])
    ended.wait()
    dead = folder / f".key.{host}-{ended.pid}-0123abcd.tmp.npz"
    live = folder / f".key.{host}-{os.getpid()}-0123abcd.tmp.npz"
    for path in (dead, live):
        path.touch()
    assert left_by_killed(tmp_path / "store") == [dead]
    assert main(["store", "--drop", "--results", str(tmp_path)]) == 0
    assert sorted(folder.iterdir()) == [live]
