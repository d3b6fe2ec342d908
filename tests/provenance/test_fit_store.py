"""The store of fits and the history that says why a unit is fitted again."""

import math

import numpy as np
import pytest

from odograph.provenance.store import FitHistory, FitSource, FitStore, StoredFit

SOURCE = FitSource(spikes="sha256:1", behaviour="sha256:2", settings="sha256:3", code="sha256:4")


def make_fit():
    row = {
        "n_spikes": np.int64(412),
        "mean_rate_hz": 1.5,
        "position_p": math.nan,
        "encodes_speed": np.bool_(True),
    }
    scores = [{"model": "position", "bits_per_spike": np.float64(0.25), "converged": True}]
    return StoredFit(
        row, scores, {"speed_rate_hz": np.linspace(0, 1, 7), "spike_bins": np.arange(5, dtype=np.int32)}
    )


def test_a_fit_reads_back_as_it_was_given_when_saved(tmp_path):
    store = FitStore(tmp_path)
    assert store.load(SOURCE.key) is None
    given = store.save(SOURCE.key, make_fit())
    read = store.load(SOURCE.key)
    assert list(read.row) == ["n_spikes", "mean_rate_hz", "position_p", "encodes_speed"]
    assert math.isnan(read.row.pop("position_p"))
    assert math.isnan(given.row.pop("position_p"))
    assert read.row == given.row == {"n_spikes": 412, "mean_rate_hz": 1.5, "encodes_speed": True}
    assert read.scores == given.scores
    for name, values in make_fit().curves.items():
        np.testing.assert_array_equal(read.curves[name], values)
        assert read.curves[name].dtype == values.dtype == given.curves[name].dtype
    assert set(read.curves) == set(given.curves) == set(make_fit().curves)


@pytest.mark.parametrize("damage", ["short", "flipped", "empty", "other"])
def test_a_damaged_entry_is_dropped_and_said(tmp_path, damage, caplog):
    store = FitStore(tmp_path)
    store.save(SOURCE.key, make_fit())
    path = store.path(SOURCE.key)
    data = bytearray(path.read_bytes())
    if damage == "other":
        other = FitSource("sha256:9", "sha256:2", "sha256:3", "sha256:4").key
        store.save(other, make_fit())
        data = store.path(other).read_bytes()
    elif damage == "flipped":
        data[len(data) // 3] ^= 4
    else:
        data = data[: len(data) // 2 if damage == "short" else 0]
    path.write_bytes(data)
    assert store.load(SOURCE.key) is None
    assert not path.exists()
    assert "damaged" in caplog.text
    store.save(SOURCE.key, make_fit())
    assert store.load(SOURCE.key) is not None


def test_every_part_of_the_source_is_in_the_key():
    parts = {"spikes": "a", "behaviour": "b", "settings": "c", "code": "d"}
    keys = {FitSource(**parts).key} | {FitSource(**(parts | {name: "other"})).key for name in parts}
    keys.add(FitSource(spikes="b", behaviour="a", settings="c", code="d").key)
    assert len(keys) == 6
    assert all(len(key) == 64 for key in keys)


def test_the_reason_names_what_changed():
    assert SOURCE.difference(None) == "new unit"
    assert SOURCE.difference(vars(SOURCE)) == ""
    assert SOURCE.difference(vars(SOURCE) | {"spikes": "x"}) == "spikes changed"
    assert SOURCE.difference(vars(SOURCE) | {"settings": "x", "code": "y"}) == "settings and code changed"


def test_history_is_found_whatever_the_number_of_shards(tmp_path):
    assert FitHistory(tmp_path, 0, 4).load([3, 5]) == {}
    FitHistory(tmp_path, 0, 4).save({3: SOURCE})
    FitHistory(tmp_path, 1, 4).save({5: SOURCE})
    assert FitHistory(tmp_path, 0, 1).load([3, 5, 7]) == {3: vars(SOURCE), 5: vars(SOURCE)}
