"""Products: deterministic bytes, whole or not at all, readable by general-purpose libraries."""

import hashlib
import os
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from odograph.errors import InputError
from odograph.provenance.files import (
    columns_digest,
    file_digest,
    pack_arrays,
    read_arrays,
    read_columns,
    read_json,
    read_table,
    renamed_into_place,
    write_arrays,
    write_if_changed,
    write_json,
    write_table,
    write_text,
    write_tsv,
)

COLUMNS = {
    "session": ["b", "a", None],
    "unit": np.array([1, 2, 3]),
    "rate_hz": np.array([0.1, np.nan, 2.0]),
    "valid": np.array([True, False, True]),
}


def test_a_write_that_fails_leaves_the_old_file_and_nothing_else(tmp_path):
    path = tmp_path / "product.json"
    write_text(path, "old")
    with pytest.raises(RuntimeError), renamed_into_place(path) as temporary:
        temporary.write_text("half")
        raise RuntimeError
    assert path.read_text() == "old"
    assert [file.name for file in tmp_path.iterdir()] == ["product.json"]


def test_the_temporary_file_lies_beside_the_product_and_keeps_its_suffix(tmp_path):
    with renamed_into_place(tmp_path / "new" / "figure.png") as temporary:
        assert temporary.parent == tmp_path / "new"
        assert temporary.suffix == ".png"
        assert temporary.name.startswith(".")
        temporary.write_bytes(b"x")
    assert (tmp_path / "new" / "figure.png").read_bytes() == b"x"


def test_time_stamp_moves_only_with_content(tmp_path):
    path = tmp_path / "digest.json"
    assert write_if_changed(path, "one")
    os.utime(path, ns=(1, 1))
    assert not write_if_changed(path, "one")
    assert path.stat().st_mtime_ns == 1
    assert write_if_changed(path, "two")
    assert path.stat().st_mtime_ns != 1


def test_documents_read_back(tmp_path):
    write_json(tmp_path / "a.json", {"b": [1, None], "a": np.nan})
    assert read_json(tmp_path / "a.json") == {"a": None, "b": [1, None]}


@pytest.mark.parametrize("content", [None, b"{", b"\xff\xfe"])
def test_a_missing_or_damaged_document_is_told_with_its_file(tmp_path, content):
    path = tmp_path / "a.json"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(InputError, match=r"a\.json") as caught:
        read_json(path)
    assert caught.value.remedy


def test_tables_are_read_by_pandas_as_they_were_written(tmp_path):
    write_table(tmp_path / "t.parquet", COLUMNS)
    for table in (pd.read_parquet(tmp_path / "t.parquet"), read_table(tmp_path / "t.parquet")):
        assert list(table.columns) == list(COLUMNS)
        assert table["unit"].tolist() == [1, 2, 3]
        np.testing.assert_array_equal(table["rate_hz"], COLUMNS["rate_hz"])
        assert table["valid"].tolist() == [True, False, True]
        assert table["session"].iloc[0] == "b"
        assert table["session"].isna().tolist() == [False, False, True]


def test_all_forms_of_a_table_give_the_same_bytes(tmp_path):
    frame = pd.DataFrame(COLUMNS)
    rows = [dict(zip(COLUMNS, row, strict=True)) for row in zip(*COLUMNS.values(), strict=True)]
    for name, table in (
        ("columns", COLUMNS),
        ("frame", frame),
        ("shuffled", frame.set_index("unit").reset_index()),
    ):
        write_table(tmp_path / f"{name}.parquet", table)
    write_table(tmp_path / "rows.parquet", rows)
    assert file_digest(tmp_path / "columns.parquet") == file_digest(tmp_path / "frame.parquet")
    assert file_digest(tmp_path / "columns.parquet") == file_digest(tmp_path / "rows.parquet")
    assert file_digest(tmp_path / "columns.parquet") != file_digest(tmp_path / "shuffled.parquet")


def test_columns_come_without_pandas_types(tmp_path):
    write_table(tmp_path / "t.parquet", COLUMNS)
    columns = read_columns(tmp_path / "t.parquet")
    assert columns["rate_hz"].dtype == np.float64
    assert np.isnan(columns["rate_hz"][1])
    assert columns["session"].tolist() == ["b", "a", None]
    assert list(read_columns(tmp_path / "t.parquet", ["valid"])) == ["valid"]


def test_empty_tables_are_legal(tmp_path):
    write_table(tmp_path / "t.parquet", {"session": [], "unit": np.array([], dtype=np.int64)})
    assert list(read_table(tmp_path / "t.parquet").columns) == ["session", "unit"]
    assert len(read_table(tmp_path / "t.parquet")) == 0
    write_tsv(tmp_path / "t.tsv", {"session": [], "unit": []})
    assert (tmp_path / "t.tsv").read_text() == "session\tunit\n"


def test_text_tables_read_back_exactly(tmp_path):
    write_tsv(tmp_path / "t.tsv", COLUMNS)
    assert (tmp_path / "t.tsv").read_text().splitlines()[:2] == [
        "session\tunit\trate_hz\tvalid",
        "b\t1\t0.1\ttrue",
    ]
    table = pd.read_csv(tmp_path / "t.tsv", sep="\t")
    np.testing.assert_array_equal(table["rate_hz"], COLUMNS["rate_hz"])


def test_tabs_and_newlines_cannot_break_a_text_table(tmp_path):
    write_tsv(tmp_path / "t.tsv", {"reason": ["a\tb\nc"], "n": [1]})
    assert (tmp_path / "t.tsv").read_text() == "reason\tn\na b c\t1\n"


def test_named_arrays_are_read_by_numpy(tmp_path):
    arrays = {
        "7/map": np.arange(6.0).reshape(2, 3),
        "7/bins": np.array([1, 2], np.int32),
        "8/map": np.zeros(0),
    }
    write_arrays(tmp_path / "c.npz", arrays)
    with np.load(tmp_path / "c.npz") as loaded:
        assert sorted(loaded.files) == sorted(arrays)
        for name, values in arrays.items():
            np.testing.assert_array_equal(loaded[name], values)
            assert loaded[name].dtype == values.dtype
    assert list(read_arrays(tmp_path / "c.npz", lambda name: name.startswith("8/"))) == ["8/map"]


def test_named_arrays_have_bytes_of_their_content_only():
    one, two = {"a": np.arange(3), "b": np.ones(2)}, {"b": np.ones(2), "a": np.arange(3)}
    assert pack_arrays(one) == pack_arrays(two)


@pytest.mark.parametrize("damage", ["missing", "short", "flipped"])
def test_damaged_arrays_are_told(tmp_path, damage):
    path = tmp_path / "c.npz"
    if damage != "missing":
        data = bytearray(pack_arrays({"a": np.arange(100.0)}))
        if damage == "short":
            data = data[: len(data) // 2]
        else:
            data[300] ^= 1
        path.write_bytes(data)
    with pytest.raises(InputError, match=r"c\.npz"):
        read_arrays(path)


def test_damaged_tables_are_told(tmp_path):
    (tmp_path / "t.parquet").write_bytes(b"PAR1 no")
    with pytest.raises(InputError, match=r"t\.parquet"):
        read_table(tmp_path / "t.parquet")
    with pytest.raises(InputError, match="missing"):
        read_table(tmp_path / "none.parquet")


def test_file_digest_is_that_of_its_bytes(tmp_path):
    (tmp_path / "f").write_bytes(b"odograph")
    assert file_digest(tmp_path / "f") == "sha256:" + hashlib.sha256(b"odograph").hexdigest()


def test_digest_of_columns_is_one_of_values():
    columns = {"x": np.array([1.0, 2.0]), "valid": np.array([True, False])}
    same = {"valid": np.array([1, 0], np.int8), "x": np.array([1, 2], np.float32)}
    assert columns_digest(columns) == columns_digest(same)
    assert columns_digest(columns) != columns_digest(columns | {"x": np.array([1.0, 2.0000001])})
    assert columns_digest(columns) != columns_digest({"y": columns["x"], "valid": columns["valid"]})


def test_paths_may_be_text(tmp_path):
    write_text(str(tmp_path / "a.txt"), "µ")
    assert Path(tmp_path / "a.txt").read_text(encoding="utf-8") == "µ"
