"""Runs are compared product by product: by hand-made differences of known size."""

import numpy as np
import pytest

from odograph.provenance.archive.agreement import compare_runs, software_differences
from odograph.provenance.files import write_arrays, write_json, write_table, write_tsv
from odograph.provenance.records import RecordDraft

ROWS = {"unit": [1, 2, 3], "rate_hz": [1.0, 2.5, None], "model": ["a", None, "c"]}


def study(folder, monkeypatch, rows=ROWS, curve=(1.0, 2.0), verdict="pass", figure=b"figure"):
    """A study with one record that has a product of every kind, and a figure drawn from its table."""
    folder.mkdir()
    monkeypatch.chdir(folder)
    draft = RecordDraft("population", keys={}, settings={}, code={})
    table, text = "results/a/units.parquet", "results/a/units.tsv"
    write_table(table, rows)
    write_tsv(text, rows)
    write_arrays("results/a/curves.npz", {"1/curve": np.array(curve)})
    write_json("results/a/audit.json", {"verdict": verdict, "values": [1.0, 2.0]})
    for path in (table, text, "results/a/curves.npz", "results/a/audit.json"):
        draft.add_product(path)
    draft.write("results/a/record.json")
    drawn = RecordDraft("population_figures", keys={}, settings={}, code={})
    drawn.add_product_input(table)
    (folder / "results/b").mkdir()
    (folder / "results/b/figure.png").write_bytes(figure)
    drawn.add_product("results/b/figure.png")
    drawn.write("results/b/record.json")
    return folder


def verdicts(old, new):
    return {one.path.rpartition("/")[2]: one for one in compare_runs(old, new)}


@pytest.fixture
def old(tmp_path, monkeypatch):
    return study(tmp_path / "old", monkeypatch)


def test_the_same_run_has_the_same_bytes(old, tmp_path, monkeypatch):
    found = verdicts(old, study(tmp_path / "new", monkeypatch))
    assert {one.verdict for one in found.values()} == {"same bytes"} and len(found) == 5
    assert software_differences(old, tmp_path / "new") == {}


def test_a_small_difference_is_told_and_agrees(old, tmp_path, monkeypatch):
    rows = ROWS | {"rate_hz": [1.0, 2.5 * (1 + 4e-7), None]}
    found = verdicts(old, study(tmp_path / "new", monkeypatch, rows, figure=b"another compression"))
    assert found["units.parquet"].verdict == "within tolerance"
    assert found["units.parquet"].largest == pytest.approx(4e-7, rel=1e-3)
    assert found["figure.png"].verdict == "same values" and found["figure.png"].agrees


@pytest.mark.parametrize(
    "change, product, told",
    [
        ({"rows": ROWS | {"rate_hz": [1.0, 2.6, None]}}, "units.parquet", "1 of 3 values, by up to 0.038"),
        ({"rows": ROWS | {"rate_hz": [1.0, 2.5, 3.0]}}, "units.parquet", "rate_hz differs in 1 of 3 values"),
        ({"rows": ROWS | {"model": ["a", "b", "c"]}}, "units.parquet", "model differs in 1 of 3 rows"),
        ({"rows": {k: v[:2] for k, v in ROWS.items()}}, "units.tsv", "(3,) and (2,) values"),
        ({"rows": ROWS | {"more": [1, 2, 3]}}, "units.parquet", "more is in one of the two only"),
        ({"curve": (1.0, 2.1)}, "curves.npz", "1/curve differs in 1 of 2 values, by up to 0.048"),
        ({"verdict": "warn"}, "audit.json", "verdict differs in 1 of 1 rows"),
    ],
)  # fmt: skip
def test_a_real_difference_is_named_with_its_size(old, tmp_path, monkeypatch, change, product, told):
    found = verdicts(old, study(tmp_path / "new", monkeypatch, **change))
    assert found[product].verdict == "differs" and told in found[product].detail


def test_a_figure_drawn_from_data_that_differ_differs(old, tmp_path, monkeypatch):
    rows = ROWS | {"rate_hz": [1.0, 9.0, None]}
    found = verdicts(old, study(tmp_path / "new", monkeypatch, rows, figure=b"other"))
    assert found["figure.png"].verdict == "differs" and "units.parquet" in found["figure.png"].detail


def test_a_product_that_was_not_made_is_missing(old, tmp_path, monkeypatch):
    new = study(tmp_path / "new", monkeypatch)
    (new / "results/a/units.tsv").unlink()
    assert verdicts(old, new)["units.tsv"].verdict == "missing"
