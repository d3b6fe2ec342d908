"""Runs are compared product by product: by hand-made differences of known size."""

import math

import numpy as np
import pytest

from odograph.command.replay import report
from odograph.provenance import records
from odograph.provenance.archive.agreement import compare_runs, software_differences
from odograph.provenance.files import write_arrays, write_json, write_table, write_tsv
from odograph.provenance.records import RecordDraft

ROWS = {
    "unit": [1, 2, 3],
    "spikes": [10_000_000, 20, 30],
    "rate_hz": [1.0, 2.5, None],
    "model": ["a", None, "c"],
}
DOCUMENT = {"verdict": "pass", "values": [1.0, 2.0], "count": 5_000_000, "lag_s": None, "whole": True}


def study(
    folder, monkeypatch, rows=ROWS, curve=(1.0, 2.0), document=None, noise="", numpy="2.0", settings=None,
    signal="sha256:1", carried=None, code=None,
):  # fmt: skip
    """A study with one record that has a product of every kind, and a figure drawn from its table."""
    folder.mkdir()
    monkeypatch.chdir(folder)
    monkeypatch.setattr(records, "software_versions", lambda: {"numpy": numpy, "scipy": "1.0"})
    draft = RecordDraft("population", keys={}, settings=settings or {}, code=code or {})
    draft.add_signal_input("position", signal, file="recordings/a.nwb", place="processing/position")
    table, text = "results/a/units.parquet", "results/a/units.tsv"
    write_table(table, rows)
    write_tsv(text, rows)
    write_arrays("results/a/curves.npz", {"1/curve": np.array(curve), "1/edges": np.arange(3)})
    write_json("results/a/audit.json", DOCUMENT | (document or {}))
    for path in (table, text, "results/a/curves.npz", "results/a/audit.json"):
        draft.add_product(path)
    draft.write("results/a/record.json")
    drawn = RecordDraft("population_figures", keys={}, settings={}, code={})
    records._producers_in.cache_clear()
    drawn.add_product_input(table)
    (folder / "results/b").mkdir()
    identifier = carried or drawn.record_id
    (folder / "results/b/figure.svg").write_text(f"<dc:identifier>{identifier}</dc:identifier>{noise}")
    drawn.add_product("results/b/figure.svg")
    drawn.write("results/b/record.json")
    return folder


def verdicts(old, new, **tolerances):
    return {one.path.rpartition("/")[2]: one for one in compare_runs(old, new, **tolerances)}


@pytest.fixture
def old(tmp_path, monkeypatch):
    return study(tmp_path / "old", monkeypatch)


@pytest.fixture
def new(tmp_path, monkeypatch):
    return lambda **changes: study(tmp_path / "new", monkeypatch, **changes)


def test_the_same_run_has_the_same_bytes(old, new):
    found = verdicts(old, new())
    assert {one.verdict for one in found.values()} == {"same bytes"} and len(found) == 5
    assert software_differences(old, old.parent / "new") == {}


def test_a_small_difference_is_told_and_agrees(old, new):
    rows = ROWS | {"rate_hz": [1.0, 2.5 * (1 + 4e-7), None]}
    found = verdicts(old, new(rows=rows, noise="another way to draw"))
    for name in ("units.parquet", "units.tsv"):
        assert found[name].verdict == "within tolerance" and found[name].causes == ()
        assert found[name].largest == pytest.approx(4e-7, rel=1e-3)
    assert found["figure.svg"].verdict == "same values" and found["figure.svg"].agrees


@pytest.mark.parametrize("by, agrees", [(0.9e-6, True), (1.2e-6, False)])
def test_the_tolerance_is_of_the_larger_number(old, new, by, agrees):
    found = verdicts(old, new(curve=(1.0, 2.0 * (1 + by))))
    assert found["curves.npz"].agrees is agrees


def test_tolerances_can_be_given(old, new):
    folder = new(curve=(1.0, 2.1))
    assert verdicts(old, folder, relative=0.05)["curves.npz"].verdict == "within tolerance"
    assert verdicts(old, folder, absolute=0.11)["curves.npz"].verdict == "within tolerance"
    assert verdicts(old, folder, absolute=0.09)["curves.npz"].verdict == "differs"


@pytest.mark.parametrize(
    "change, product, told",
    [
        ({"rows": ROWS | {"rate_hz": [1.0, 2.6, None]}}, "units.parquet", "in 1 of 3 values, by up to 0.1"),
        ({"rows": ROWS | {"rate_hz": [1.0, 2.6, None]}}, "units.tsv", "1 of 3 values, by up to 0.1, 0.03"),
        ({"rows": ROWS | {"rate_hz": [1.0, 2.5, 3.0]}}, "units.parquet", "rate_hz differs in 1 of 3 values"),
        ({"rows": ROWS | {"rate_hz": [1.0, math.inf, None]}}, "units.parquet", "rate_hz differs in 1 of 3"),
        ({"rows": ROWS | {"model": ["a", "b", "c"]}}, "units.parquet", "model differs in 1 of 3 values"),
        # One in ten million is within the tolerance of floats; whole numbers have none.
        ({"rows": ROWS | {"spikes": [10_000_001, 20, 30]}}, "units.parquet", "spikes differs in 1 of 3"),
        ({"rows": ROWS | {"spikes": [10_000_001, 20, 30]}}, "units.tsv", "spikes differs in 1 of 3 values"),
        ({"document": {"count": 5_000_001}}, "audit.json", "count differs in 1 of 1 values"),
        ({"rows": {k: v[:2] for k, v in ROWS.items()}}, "units.tsv", "model has 3 values, now 2"),
        ({"rows": ROWS | {"more": [1, 2, 3]}}, "units.parquet", "only the new one has more"),
        ({"curve": (1.0, 2.1)}, "curves.npz", "1/curve differs in 1 of 2 values, by up to 0.1, 0.048"),
        ({"document": {"verdict": "warn"}}, "audit.json", "verdict differs in 1 of 1 values"),
        ({"document": {"values": [1.0, 2.0, 3.0]}}, "audit.json", "length of values differs"),
        ({"document": {"lag_s": 0.5}}, "audit.json", "lag_s differs in 1 of 1 values"),
        ({"document": {"whole": False}}, "audit.json", "whole differs in 1 of 1 values"),
    ],
)  # fmt: skip
def test_a_real_difference_is_named_with_its_size(old, new, change, product, told):
    found = verdicts(old, new(**change))
    assert found[product].verdict == "differs" and told in found[product].detail
    assert found[product].begins and found[product].causes == ("machine",)


def test_a_figure_drawn_from_data_that_differ_differs(old, new):
    found = verdicts(old, new(rows=ROWS | {"rate_hz": [1.0, 9.0, None]}, noise="other"))
    assert found["figure.svg"].verdict == "differs" and "units.parquet" in found["figure.svg"].detail
    assert not found["figure.svg"].begins


def test_a_figure_that_does_not_carry_the_identifier_of_its_record_differs(old, new):
    found = verdicts(old, new(carried="record:" + "0" * 64))
    assert "the new one does not carry the identifier" in found["figure.svg"].detail


def test_a_product_that_was_not_made_is_missing(old, new):
    folder = new()
    (folder / "results/a/units.tsv").unlink()
    assert verdicts(old, folder)["units.tsv"].verdict == "missing"


def test_a_file_that_cannot_be_read_differs(old, new):
    folder = new()
    (folder / "results/a/units.parquet").write_bytes(b"PAR1 no table PAR1")
    (folder / "results/a/audit.json").write_text("{")
    found = verdicts(old, folder)
    assert found["units.parquet"].verdict == found["audit.json"].verdict == "differs"


@pytest.mark.parametrize(
    "change, causes",
    [
        ({"numpy": "2.1"}, ("software",)),
        ({"settings": {"population": {"seed": 2}}}, ("settings",)),
        ({"code": {"population": "sha256:2"}}, ("code",)),
        ({"signal": "sha256:2"}, ("inputs",)),
        ({"signal": "sha256:2", "numpy": "2.1"}, ("inputs", "software")),
    ],
)
def test_what_a_difference_comes_with_is_told(old, new, change, causes):
    folder = new(rows=ROWS | {"rate_hz": [1.0, 9.0, None]}, **change)
    assert verdicts(old, folder)["units.parquet"].causes == causes
    differ = {"numpy": ("2.0", "2.1")} if "numpy" in change else {}
    assert software_differences(old, folder) == differ


def told(old, folder):
    found, software = compare_runs(old, folder), software_differences(old, folder)
    return "\n".join(report(found, software, ["root:1", "root:2"], (1e-6, 1e-9)))


def test_the_report_tells_other_libraries_from_real_differences(old, new, tmp_path, monkeypatch):
    rows = ROWS | {"rate_hz": [1.0, 9.0, None]}
    text = told(old, new(rows=rows, numpy="2.1"))
    assert "numpy 2.0 then, 2.1 now" in text and "it may come from versions of libraries" in text
    assert "a real difference" not in text
    other = study(
        tmp_path / "other", monkeypatch, rows=rows, numpy="2.1", settings={"population": {"seed": 2}}
    )
    assert "a real difference, not one of the machine: other settings" in told(old, other)
    same = study(tmp_path / "same", monkeypatch, rows=rows)
    assert "it may come from the processor" in told(old, same)


def test_the_report_says_where_differences_begin(old, new):
    lines = told(old, new(rows=ROWS | {"rate_hz": [1.0, 9.0, None]}, noise="other")).splitlines()
    begins = lines.index("3 differ; where that begins:")
    follows = lines.index("what was made from these and differs as well:")
    assert ["units.parquet" in line for line in lines[begins + 1 : follows]] == [True, False]
    assert "figure.svg: drawn from results/a/units.parquet, which differs" in lines[follows + 1]
