"""Two runs compared: a session sorted again, another setting, nothing at all."""

import json
import shutil

import pyarrow.parquet as pq
import pytest
from PIL import Image

from odograph.command.main import main


def compared(capsys, *arguments, status):
    assert main(["compare", *map(str, arguments)]) == status
    return capsys.readouterr()


@pytest.fixture(scope="module")
def resorted(finished, tmp_path_factory):
    """The study after the second sorting of one session came in."""
    folder = tmp_path_factory.mktemp("resorted") / "study"
    shutil.copytree(finished.folder, folder)
    study = type(finished)(folder)
    recordings = folder / "recordings"
    shutil.copyfile(recordings / "bracken_1_resorted.nwb", recordings / "bracken_1.nwb")
    study.run()
    return study


def units_of(study, session):
    table = pq.read_table(study.results / "population/units.parquet", columns=["session", "unit"])
    return {row["unit"] for row in table.to_pylist() if row["session"] == session}


def test_a_new_sorting_is_told_as_its_merge_its_split_and_its_changed_unit(finished, resorted, capsys):
    document = json.loads(compared(capsys, finished.folder, resorted.folder, "--json", status=1).out)
    groups = {session: some for session, some in document["relations"].items()}
    other = [one for session, some in groups.items() if session != "alpha" for one in some]
    assert {one["kind"] for one in other} == {"same"}
    by_kind = {}
    for one in groups["alpha"]:
        by_kind.setdefault(one["kind"], []).append(one)
    assert {kind: len(some) for kind, some in by_kind.items()} == {
        "same": 1, "merged": 1, "split": 1, "changed": 1,
    }  # fmt: skip
    (merged,), (split,), (changed,) = (by_kind[kind] for kind in ("merged", "split", "changed"))
    before, after = units_of(finished, "alpha"), units_of(resorted, "alpha")
    # demo_data/resort.py: the merged unit and the halves get fresh numbers, the changed one keeps its own.
    assert len(merged["before"]) == 2 and merged["after"] == [max(before) + 1]
    assert len(split["before"]) == 1 and split["after"] == [max(before) + 2, max(before) + 3]
    assert changed["before"] == changed["after"] and set(changed["before"]) <= before & after
    assert document["by_number"] == [] and document["differences"] == []


def test_the_page_names_them_and_nothing_else(finished, resorted, capsys, tmp_path):
    figure, table = tmp_path / "compare.png", tmp_path / "changes.tsv"
    told = compared(
        capsys, finished.folder, resorted.folder, "--figure", figure, "--table", table, status=1
    ).out
    lines = [line.strip() for line in told.splitlines()]
    became = [line for line in lines if line.startswith(("alpha: ", "beta: ", "jump: "))]
    assert [line.split()[1] for line in became] == ["changed:", "merged:", "split:"]
    assert "nothing but units differs in what went in" in lines
    assert Image.open(figure).size[0] > 500
    assert table.read_text().splitlines()[0].split("\t")[:4] == ["session", "before", "after", "what"]


def test_without_the_old_recording_units_go_by_number_and_it_says_so(finished, resorted, capsys, tmp_path):
    old = tmp_path / "old"
    shutil.copytree(finished.folder, old)
    shutil.copyfile(old / "recordings/bracken_1_resorted.nwb", old / "recordings/bracken_1.nwb")
    text = main(["compare", str(old), str(resorted.folder)]), capsys.readouterr().out
    assert "matched by number and digest, their recordings cannot be read: alpha" in text[1]
    data = finished.folder / "recordings"
    told = compared(capsys, old, resorted.folder, "--old-data", data, status=1).out
    assert "cannot be read" not in told and "alpha: merged" in told


def test_the_same_run_has_the_same_conclusions(finished, capsys):
    told = compared(capsys, finished.folder, finished.folder, status=0).out
    assert told.startswith("every conclusion is the same")
    assert "nothing but units differs" in told


def test_another_setting_is_named_as_the_cause(study, finished, capsys):
    study.settings["population"] = {"false_discovery_rate": 1e-9}
    study.run()
    document = json.loads(compared(capsys, finished.folder, study.folder, "--json", status=1).out)
    settings = [one for one in document["differences"] if one["kind"] == "setting"]
    assert [(one["what"], one["before"], one["after"]) for one in settings] == [
        ("population.false_discovery_rate", "0.05", "1e-09")
    ]
    assert document["changes"]
    assert {one["because"] for one in document["changes"]} == {"settings (population.false_discovery_rate)"}
    lost = [one for one in document["changes"] if one["what"].startswith("encodes")]
    assert lost and {(one["was"], one["now"]) for one in lost} == {("yes", "no")}


def test_what_has_no_results_is_said(finished, tmp_path, capsys):
    assert "no records" in compared(capsys, finished.folder, tmp_path, status=66).err
