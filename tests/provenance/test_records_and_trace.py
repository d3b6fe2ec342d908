"""Records: the same work has the same identifier anywhere; a trace tells what does not fit."""

import json
import os
from pathlib import Path

import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from PIL import Image, PngImagePlugin

from odograph.errors import InputError, RecordError
from odograph.provenance import records
from odograph.provenance.files import write_json, write_text
from odograph.provenance.identifier import read_record_id
from odograph.provenance.records import RecordDraft, identify, producer_of, read_record, told_path
from odograph.provenance.trace import find_start, trace

IDENTIFIER = "record:" + "0123456789abcdef" * 4
SETTINGS = {"sync": {"max_bend_ms": 10.0}}


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    records._producers_in.cache_clear()
    return tmp_path


def make_chain(file="recordings/one.nwb", settings=SETTINGS, code="sha256:a"):
    """Two jobs: a clock from a signal, and a figure from the clock."""
    records._producers_in.cache_clear()
    first = RecordDraft("sync", keys={"session": "one"}, settings=settings, code={"sync": code})
    first.add_signal_input("tracking", "sha256:1", file=file, place="processing/behavior/Position")
    write_json("results/sessions/one/sync/clock.json", {"slope": 1.0})
    first.add_product("results/sessions/one/sync/clock.json")
    first.write("results/sessions/one/sync/record.json")
    second = RecordDraft("figure", keys={}, settings={"figures": {"dpi": 72}}, code={"figure": code})
    second.add_product_input("results/sessions/one/sync/clock.json")
    write_text("results/figures/clock.svg", "a figure")
    second.add_product("results/figures/clock.svg")
    second.write("results/figures/record.json")
    return first.record_id, second.record_id


def test_same_work_has_the_same_identifier_at_another_time_and_place(here):
    first = make_chain()
    again = make_chain(file="elsewhere/one.nwb")
    assert first == again


@pytest.mark.parametrize(
    "change", [{"settings": {"sync": {"max_bend_ms": 11.0}}}, {"code": "sha256:b"}], ids=["settings", "code"]
)
def test_a_change_before_moves_every_identifier_after(here, change):
    first, second = make_chain()
    other_first, other_second = make_chain(**change)
    assert other_first != first
    assert other_second != second


def test_a_record_reads_back_and_names_its_products(here):
    first, _ = make_chain()
    record = read_record("results/sessions/one/sync/record.json")
    assert record["record_id"] == first == identify(record)
    assert producer_of("results/sessions/one/sync/clock.json") == first
    assert producer_of("results/sessions/one/sync/other.json") is None
    assert record["software"]["python"].count(".") == 2
    assert {"started", "ended", "host"} <= set(record["run"])


def test_a_record_that_was_changed_is_refused(here):
    make_chain()
    path = Path("results/figures/record.json")
    record = json.loads(path.read_text())
    record["settings"]["figures"]["dpi"] = 300
    path.write_text(json.dumps(record))
    with pytest.raises(RecordError, match="changed after it was written"):
        read_record(path)
    path.write_text("{}")
    with pytest.raises(RecordError, match="lacks"):
        read_record(path)


def test_no_input_after_the_identifier_was_used(here):
    draft = RecordDraft("sync", keys={}, settings={}, code={})
    assert draft.record_id
    with pytest.raises(RecordError):
        draft.add_unit_input(3, "sha256:1", file="one.nwb")


def test_order_of_reading_does_not_matter(here):
    drafts = [RecordDraft("encoding", keys={}, settings={}, code={}) for _ in range(2)]
    for draft, units in zip(drafts, ((3, 20), (20, 3)), strict=True):
        for unit in units:
            draft.add_unit_input(unit, f"sha256:{unit}", file="one.nwb")
    assert drafts[0].record_id == drafts[1].record_id


def test_a_trace_reaches_the_signals_and_the_settings(here):
    first, second = make_chain()
    found = trace(find_start("results/figures/clock.svg", Path("results")), Path("results"))
    assert list(found.records) == [second, first]
    assert found.sources()["one"]["signals"]["tracking"] == {
        "place": "processing/behavior/Position",
        "digest": "sha256:1",
    }
    assert [row["setting"] for row in found.settings()] == ["figures.dpi", "sync.max_bend_ms"]
    assert found.problems == []


def test_a_trace_works_from_another_folder(here, monkeypatch, tmp_path_factory):
    make_chain()
    monkeypatch.chdir(tmp_path_factory.mktemp("away"))
    results = here / "results"
    found = trace(find_start(str(results / "figures/clock.svg"), results), results)
    assert len(found.records) == 2
    assert found.problems == []


@pytest.mark.parametrize("digits", [6, 12, 64])
def test_a_record_is_found_by_its_first_digits(here, digits):
    _, second = make_chain()
    code = second.removeprefix("record:")[:digits]
    assert find_start(code, Path("results")).record["record_id"] == second
    assert find_start(f"record:{code}", Path("results")).record["record_id"] == second


def test_what_does_not_fit_is_told(here):
    make_chain()
    clock = Path("results/sessions/one/sync/clock.json")
    clock.write_text("{}")
    Path("results/figures/clock.svg").write_text("another")
    found = trace(find_start("results/figures/clock.svg", Path("results")), Path("results"))
    assert sorted(problem.split()[0] for problem in found.problems) == [
        "results/figures/clock.svg",
        str(clock),
    ]
    clock.unlink()
    Path("results/sessions/one/sync/record.json").unlink()
    found = trace(find_start("results/figures/clock.svg", Path("results")), Path("results"))
    assert any("is gone" in problem and "record" in problem for problem in found.problems)


def test_nothing_found_is_an_error_with_the_nearest_name(here):
    make_chain()
    with pytest.raises(InputError, match="did you mean"):
        find_start("results/figures/cloc.svg", Path("results"))
    with pytest.raises(InputError, match="no record has"):
        find_start("fedcba9876", Path("results"))
    Path("stranger.txt").write_text("x")
    with pytest.raises(InputError, match="carries no identifier"):
        find_start("stranger.txt", Path("results"))


def figure_with(path, metadata):
    figure = Figure(figsize=(1, 1))
    FigureCanvasAgg(figure)
    figure.add_subplot().plot([0, 1])
    figure.savefig(path, metadata=metadata)


# Written by Matplotlib and Pillow, so that reading is checked against other people's writers.
@pytest.mark.parametrize(
    ("name", "metadata"),
    [
        ("f.png", {"odograph-record": IDENTIFIER}),
        ("f.svg", {"Identifier": IDENTIFIER}),
        ("f.pdf", {"Keywords": IDENTIFIER}),
    ],
)
def test_identifiers_are_read_from_figures(tmp_path, name, metadata):
    figure_with(tmp_path / name, metadata)
    assert read_record_id(tmp_path / name) == IDENTIFIER
    figure_with(tmp_path / name, {})
    assert read_record_id(tmp_path / name) is None


@pytest.mark.parametrize("international", [False, True])
@pytest.mark.parametrize("compressed", [False, True])
def test_identifiers_are_read_from_every_kind_of_text_chunk(tmp_path, international, compressed):
    info = PngImagePlugin.PngInfo()
    (info.add_itxt if international else info.add_text)("odograph-record", IDENTIFIER, zip=compressed)
    Image.new("L", (3, 3)).save(tmp_path / "f.png", pnginfo=info)
    assert read_record_id(tmp_path / "f.png") == IDENTIFIER


def test_identifiers_are_read_from_pages(tmp_path):
    (tmp_path / "p.html").write_text(f'<meta name="odograph-record" content="{IDENTIFIER}">')
    assert read_record_id(tmp_path / "p.html") == IDENTIFIER


def test_damaged_and_missing_figures_are_told(tmp_path):
    figure_with(tmp_path / "f.png", {"odograph-record": IDENTIFIER})
    data = bytearray((tmp_path / "f.png").read_bytes())
    data[60] ^= 1
    (tmp_path / "f.png").write_bytes(data)
    with pytest.raises(InputError, match="damaged"):
        read_record_id(tmp_path / "f.png")
    (tmp_path / "g.png").write_text("no picture")
    with pytest.raises(InputError, match="not a PNG"):
        read_record_id(tmp_path / "g.png")
    with pytest.raises(InputError, match="cannot be read"):
        read_record_id(tmp_path / "none.png")


def test_no_record_holds_a_path_of_this_machine(here):
    make_chain()
    text = Path("results/figures/record.json").read_text()
    assert os.sep + "tmp" not in text
    assert str(here) not in text


def test_a_recording_elsewhere_is_told_by_its_name_only(tmp_path, monkeypatch):
    """Absolute paths hold names of people and machines, and have no part in a result."""
    monkeypatch.chdir(tmp_path)
    assert told_path("recordings/one.nwb") == "recordings/one.nwb"
    assert told_path(tmp_path / "recordings" / "one.nwb") == "recordings/one.nwb"
    elsewhere = tmp_path.parent / "somebody" / "one.nwb"
    assert told_path(elsewhere) == "one.nwb"
    draft = RecordDraft("intake", keys={}, settings={}, code={})
    draft.add_unit_input(1, "sha256:1", file=str(elsewhere))
    draft.add_signal_input("tracking", "sha256:2", file=str(elsewhere), place="p")
    assert {entry["file"] for entry in draft.inputs} == {"one.nwb"}
