"""From a figure back to the signals and the settings, by the command."""

import json
import re
import shutil
import subprocess
import sys

import pytest
from PIL import Image
from prov.model import ProvActivity, ProvDocument, ProvEntity, ProvGeneration, ProvUsage

from odograph.command.main import main


@pytest.fixture
def at(finished, monkeypatch):
    """Work in the folder of the finished study."""
    monkeypatch.chdir(finished.folder)
    return finished


def traced(capsys, *arguments, status=0):
    assert main(["trace", *arguments]) == status
    return capsys.readouterr()


def test_a_figure_leads_to_every_signal_and_unit_read(at, capsys):
    document = json.loads(traced(capsys, "results/figures/composition.png", "--json").out)
    assert document["problems"] == []
    sources = {row["session"]: row for row in document["sources"]}
    assert set(sources) == {"alpha", "beta", "jump"}
    inventory = at.record("sessions/alpha/intake/inventory.json")
    signals = {row["signal"]: row for row in inventory["signals"]}
    assert set(sources["alpha"]["signals"]) == set(signals)
    for name, signal in sources["alpha"]["signals"].items():
        assert (signal["digest"], signal["place"]) == (signals[name]["digest"], signals[name]["place"])
    units = {str(row["unit"]): row["digest"] for row in inventory["units"]}
    assert sources["alpha"]["units"] == units
    assert sources["alpha"]["file"] == "recordings/bracken_1.nwb"
    rules = {record["rule"] for record in document["records"]}
    assert rules == {"population_figures", "population", "encoding", "behaviour", "sync", "intake"}


def test_a_figure_leads_to_the_lines_of_the_configuration(at, capsys):
    document = json.loads(traced(capsys, "results/figures/composition.png", "--json").out)
    rows = {row["setting"]: row for row in document["settings"]}
    config = (at.folder / "config/config.yaml").read_text().splitlines()
    row = rows["intake.front_point"]
    file, _, line = row["line"].partition(":")
    assert file == "config/config.yaml"
    assert config[int(line) - 1].strip() == "front_point: led_front"
    assert rows["encoding.folds"]["value"] == rows["encoding.folds"]["default"]
    assert rows["figures.dpi"]["value"] == 72


def test_a_setting_of_one_session_leads_to_the_sessions_table(study, capsys, monkeypatch):
    """The table is changed after the run: the trace names the line, and what it says now."""
    monkeypatch.chdir(study.folder)
    study.sessions["beta"]["behaviour.max_gap_s"] = 0.125
    study.write_tables()
    document = json.loads(traced(capsys, "results/figures/composition.png", "--json").out)
    (row,) = [row for row in document["settings"] if row["setting"] == "behaviour.max_gap_s"]
    file, _, line = row["line"].partition(":")
    assert file == "config/sessions.tsv"
    assert (study.folder / file).read_text().splitlines()[int(line) - 1].startswith("beta\t")
    assert (row["value"], row["now"]) == (row["default"], 0.125)
    text = traced(capsys, "results/figures/composition.png").out
    (said,) = [said for said in text.splitlines() if said.strip().startswith("behaviour.max_gap_s")]
    assert "now says 0.125" in said and said.endswith(row["line"])


def test_the_digits_in_the_margin_and_the_identifier_in_the_file_lead_to_the_same(at, capsys):
    inside = Image.open("results/figures/composition.png").text["odograph-record"]
    assert inside == at.record("figures/record.json")["record_id"]
    digits = inside.removeprefix("record:")[:12]
    document = json.loads(traced(capsys, digits, "--json").out)
    assert document["record_id"] == inside


def test_a_card_leads_to_its_own_unit(at, capsys):
    card = next((at.results / "sessions/alpha/cards").glob("unit-*.png"))
    unit = int(re.search(r"\d+", card.stem).group())
    document = json.loads(traced(capsys, str(card), "--json").out)
    assert [list(row["units"]) for row in document["sources"]] == [[str(unit)]]


@pytest.mark.parametrize(
    "product",
    ["results/population/units.tsv", "results/report.html", "results/population/record.json"],
)
def test_tables_pages_and_records_are_traced(at, capsys, product):
    text = traced(capsys, product).out
    assert "recordings/bracken_1.nwb" in text
    assert "processing/behavior/Position/led_front" in text
    assert "every product on the way is as it was" in text


def test_a_figure_copied_elsewhere_is_still_known(at, capsys, tmp_path):
    shutil.copy(at.results / "figures/composition.png", tmp_path / "figure2.png")
    document = json.loads(traced(capsys, str(tmp_path / "figure2.png"), "--json").out)
    assert document["record_id"] == at.record("figures/record.json")["record_id"]


def test_what_changed_since_is_told(study, capsys, monkeypatch):
    monkeypatch.chdir(study.folder)
    table = study.results / "population/composition.parquet"
    table.write_bytes(table.read_bytes() + b"x")
    text = traced(capsys, "results/figures/composition.png", status=65).out
    assert "composition.parquet changed since it was read" in text


def test_unknown_products_are_refused_with_the_nearest(at, capsys):
    said = traced(capsys, "results/figures/compositon.png", status=66).err
    assert "did you mean results/figures/composition.png" in said
    assert "no record has this identifier" in traced(capsys, "abcdef0123", status=66).err


def test_the_summary_is_told_in_ten_lines(at, capsys):
    assert main(["summary"]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert len(lines) == 10
    assert lines[0].startswith("Sessions: 2 of 4")
    assert main(["summary", "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["lines"] == lines
    assert main(["summary", "--results", "nowhere"]) == 66


def test_the_command_is_installed_and_helps():
    done = subprocess.run(
        [sys.executable, "-m", "odograph.command.main", "trce"], capture_output=True, text=True
    )
    assert done.returncode == 64
    assert "did you mean trace?" in done.stderr


def test_a_point_of_a_figure_leads_to_its_unit(at, capsys):
    unit = at.record("sessions/alpha/intake/inventory.json")["units"][0]
    row = ("--row", "alpha", str(unit["unit"]))
    document = json.loads(traced(capsys, "results/figures/composition.png", *row, "--json").out)
    (source,) = document["sources"]
    assert source["session"] == "alpha" and source["units"] == {str(unit["unit"]): unit["digest"]}
    shards = [record for record in document["records"] if record["rule"] == "encoding"]
    assert len(shards) == 1 and shards[0]["keys"]["session"] == "alpha"
    text = traced(capsys, "results/figures/composition.png", *row).out
    assert f"unit {unit['unit']} of alpha" in text and "beta" not in text


@pytest.mark.parametrize("row", [("alpha", "99999"), ("nosuch", "1"), ("alpha", "one")])
def test_a_unit_that_nothing_read_is_refused(at, capsys, row):
    told = traced(capsys, "results/figures/composition.png", "--row", *row, status=66).err
    assert row[1] in told


def test_a_trace_is_a_prov_document(at, capsys):
    """Read back by the prov library; the statements follow PROV-DM (W3C 2013), section 5."""
    text = traced(capsys, "results/figures/composition.png", "--format", "prov").out
    assert text == traced(capsys, "results/figures/composition.png", "--format", "prov").out
    document = ProvDocument.deserialize(content=text, format="json")
    trace = json.loads(traced(capsys, "results/figures/composition.png", "--json").out)
    activities = {str(record.identifier) for record in document.get_records(ProvActivity)}
    expected = {record["record_id"].replace(":", "-") for record in trace["records"]}
    assert {name.removeprefix("odograph:") for name in activities} == expected
    entities = {str(record.identifier) for record in document.get_records(ProvEntity)}
    made = [statement.args[:2] for statement in document.get_records(ProvGeneration)]
    assert len(made) == sum(len(record["products"]) for record in trace["records"])
    used = [statement.args[:2] for statement in document.get_records(ProvUsage)]
    assert len(used) == sum(len(r["inputs"]) + len(r["settings"]) for r in trace["records"])
    assert {str(entity) for entity, _ in made} | {str(entity) for _, entity in used} == entities
    assert {str(activity) for _, activity in made} == activities
    # What one job made and another used is one and the same entity, which is what ties the chain.
    assert len({str(entity) for entity, _ in made} & {str(entity) for _, entity in used}) > 5
