"""A finished study is verified: any changed byte is found and named, and so is a change that was hidden."""

import json
import os
import shutil
from pathlib import Path

import numpy as np
import pytest

from odograph.command.main import main
from odograph.provenance.canonical import digest_value, readable_json
from odograph.provenance.files import file_digest
from odograph.provenance.root import identify_root, read_root, record_content
from odograph.provenance.verify import verify

CHANGES = 200


@pytest.fixture(scope="module")
def study(finished, tmp_path_factory):
    """A copy that this module may change, if it puts everything back."""
    folder = tmp_path_factory.mktemp("verified") / "study"
    shutil.copytree(finished.folder, folder, symlinks=False)
    return folder


def named(found):
    return {breach.file for breach in found.breaches}


def test_a_finished_study_holds(study, monkeypatch, capsys):
    found = verify(study)
    assert found.breaches == []
    assert found.root == read_root(study)["root"]
    assert found.records > 15 and found.products > 40 and found.recordings >= 3
    monkeypatch.chdir(study)
    assert main(["verify"]) == 0
    assert "everything is what the records say" in capsys.readouterr().out
    assert main(["verify", "--root", found.root[:14]]) == 0
    capsys.readouterr()
    assert main(["verify", "--root", "root:00000000", "--json"]) == 1
    document = json.loads(capsys.readouterr().out)
    assert [breach["file"] for breach in document["breaches"]] == ["results/root.json"]


def files_by_kind(study):
    """Every file that a change must be found in, by its kind; recordings only that the study uses."""
    used = {row["file"] for row in read_root(study)["recordings"]}
    kinds = {}
    for path in sorted(study.rglob("*")):
        name = path.relative_to(study).as_posix()
        if not path.is_file() or not name.startswith(("results/", "config/", "recordings/")):
            continue
        if name.startswith(("results/store/", "results/plan/")) or path.name.startswith("."):
            continue
        if name.startswith("recordings/") and name not in used:
            continue
        kind = "record" if path.name.endswith("record.json") else path.suffix
        kind = "root" if path.name == "root.json" else kind
        kinds.setdefault(kind, []).append(path)
    return kinds


def test_any_changed_byte_is_found_and_its_file_named(study):
    """200 changes of one byte, drawn over all kinds of files alike (seeded)."""
    kinds, rng = files_by_kind(study), np.random.default_rng(20)
    assert {".parquet", ".json", ".npz", ".png", ".tsv", ".html", ".yaml", ".nwb", "record", "root"} <= set(
        kinds
    )
    names = sorted(kinds)
    for change in range(CHANGES):
        files = kinds[names[change % len(names)]]
        path = files[rng.integers(len(files))]
        content = path.read_bytes()
        place, flip = int(rng.integers(len(content))), int(rng.integers(1, 256))
        path.write_bytes(content[:place] + bytes([content[place] ^ flip]) + content[place + 1 :])
        try:
            found = verify(study)
        finally:
            path.write_bytes(content)
        assert path.relative_to(study).as_posix() in named(found), (path, place, flip)
    assert verify(study).breaches == []


def test_a_product_that_is_gone_or_new_is_named(study):
    path = study / "results/population/units.tsv"
    content = path.read_bytes()
    path.unlink()
    try:
        (breach,) = verify(study).breaches
        assert breach.file == "results/population/units.tsv" and "gone" in breach.found
    finally:
        path.write_bytes(content)
    stranger = study / "results/population/notes.txt"
    stranger.write_text("mine")
    try:
        (breach,) = verify(study).breaches
        assert breach.file == "results/population/notes.txt" and "no record knows" in breach.found
    finally:
        stranger.unlink()


@pytest.fixture
def forged(study):
    """A product edited, and its record edited to go with it."""
    table, record = (study / f"results/population/{name}" for name in ("units.tsv", "record.json"))
    before = {path: path.read_bytes() for path in (table, record, study / "results/root.json")}
    table.write_bytes(before[table].replace(b"true", b"false", 1))
    document = json.loads(before[record])
    for product in document["products"]:
        if product["path"].endswith("units.tsv"):
            product["digest"] = file_digest(table)
    record.write_text(readable_json(document), encoding="utf-8")
    yield study
    for path, content in before.items():
        path.write_bytes(content)


def test_a_record_that_was_edited_to_hide_a_change_is_found(forged):
    assert "results/population/record.json" in named(verify(forged))


def test_a_root_that_was_edited_too_is_another_root(forged):
    honest = read_root(forged)["root"]
    document = read_root(forged)
    record = json.loads((forged / "results/population/record.json").read_text())
    for row in document["records"]:
        if row["file"] == "results/population/record.json":
            row["content"] = record_content(record)
            row["digest"] = file_digest(forged / row["file"])
    document["root"] = identify_root(document["records"])
    del document["own_digest"]
    document["own_digest"] = digest_value(document)
    (forged / "results/root.json").write_text(readable_json(document), encoding="utf-8")
    found = verify(forged)
    assert found.breaches == []  # all of it fits together: only the printed root tells
    assert found.root != honest


def test_settings_that_changed_are_named_with_their_values(study):
    path = study / "config/config.yaml"
    content = path.read_text()
    path.write_text(content.replace("dpi: 72", "dpi: 96"))
    try:
        found = [breach.found for breach in verify(study).breaches if breach.file == "config/config.yaml"]
    finally:
        path.write_text(content)
    assert any("figures.dpi is 96; the run was made with 72" in text for text in found)


def test_a_recording_that_moved_is_said_to_be_elsewhere(study):
    path = study / "recordings/bracken_1.nwb"
    moved = path.with_name("moved.nwb")
    path.rename(moved)
    try:
        (breach,) = verify(study).breaches
    finally:
        moved.rename(path)
    assert breach.file == "recordings/bracken_1.nwb" and "alpha is not there" in breach.found


def test_without_results_it_says_so(tmp_path, capsys):
    assert main(["verify", str(tmp_path)]) == 66
    assert "there are no results" in capsys.readouterr().err


def test_the_root_does_not_depend_on_time_host_or_place(study):
    record = json.loads((study / "results/population/record.json").read_text())
    other = record | {"run": {"started": "2000-01-01T00:00:00.000+00:00", "host": "elsewhere"}}
    assert record_content(other) == record_content(record)


def test_the_store_is_surveyed_checked_and_dropped_from(study, monkeypatch, capsys):
    monkeypatch.chdir(study)
    assert main(["store", "--check", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["fits"] == document["needed"] > 0 and document["damaged"] == []
    fit = next(iter(sorted((study / "results/store").glob("??/*.npz"))))
    content, spare = fit.read_bytes(), fit.with_name("0" * 64 + ".npz")
    spare.write_bytes(content)
    assert main(["store", "--check"]) == 65  # under a key that is not its own
    assert "1 of them" in capsys.readouterr().out
    assert main(["store", "--drop"]) == 0
    assert not spare.exists() and fit.exists()


def test_results_hold_no_absolute_path_and_no_name_of_a_user(finished):
    """Neither the folder that the study was run in, nor anybody's home, nor who ran it."""
    homes = {f"/{folder}/".encode() for folder in ("home", "Users")}
    wanted = {str(finished.folder).encode(), str(Path.home()).encode() + b"/", *homes}
    user = os.environ.get("USER") or os.environ.get("LOGNAME") or ""
    if len(user) > 4:
        wanted.add(f'"{user}"'.encode())
    apart = [finished.results / "plan", finished.results / "store"]
    for path in sorted(finished.results.rglob("*")):
        if path.is_file() and not any(path.is_relative_to(folder) for folder in apart):
            content = path.read_bytes()
            assert not [text for text in wanted if text in content], path
