"""Canonical JSON and its digest."""

import dataclasses
import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from odograph.provenance.canonical import canonical_json, digest_text, digest_value, plain, readable_json
from odograph.settings.study import StudySettings

JSON_VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats(allow_nan=False, allow_infinity=False) | st.text(),
    lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner),
    max_leaves=20,
)


def test_digest_is_sha256():
    # NIST, FIPS 180-4 example "SHA-256 of abc" (csrc.nist.gov, SHA256.pdf).
    assert digest_text("abc") == "sha256:ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


@given(JSON_VALUES)
def test_text_reads_back_as_the_same_value(value):
    assert json.loads(canonical_json(value)) == value
    assert json.loads(readable_json(value)) == value


def test_order_of_keys_does_not_matter_but_order_of_lists_does():
    assert digest_value({"a": 1, "b": [1, 2]}) == digest_value({"b": [1, 2], "a": 1})
    assert digest_value([1, 2]) != digest_value([2, 1])


def test_text_is_compact_sorted_and_in_plain_letters():
    assert canonical_json({"µ": 1.5, "a": [True, None]}) == '{"a":[true,null],"µ":1.5}'


def test_numbers_of_numpy_are_numbers_and_arrays_are_lists():
    value = {"n": np.int64(3), "x": np.float64(0.1), "a": np.arange(3), "flag": np.bool_(True), 5: "five"}
    assert plain(value) == {"n": 3, "x": 0.1, "a": [0, 1, 2], "flag": True, "5": "five"}
    assert type(plain(np.float64(0.1))) is float


def test_numbers_that_are_not_finite_become_null():
    assert (
        canonical_json([math.nan, math.inf, np.float64("nan"), np.array([np.nan])])
        == "[null,null,null,[null]]"
    )


def test_models_and_dataclasses_are_mappings():
    @dataclasses.dataclass
    class Point:
        x: float
        y: tuple[int, ...]

    assert plain(Point(1.0, (2, 3))) == {"x": 1.0, "y": [2, 3]}
    assert plain(StudySettings())["shards_per_session"] == StudySettings().shards_per_session


def test_what_is_not_data_is_refused():
    with pytest.raises(TypeError, match="object"):
        canonical_json(object())


def test_text_for_people_ends_with_a_newline():
    assert readable_json({"b": 1, "a": 2}) == '{\n "a": 2,\n "b": 1\n}\n'
