"""Content digests: what changes them and what does not."""

from __future__ import annotations

import hashlib
from dataclasses import replace

import h5py
import numpy as np
import pytest
from hdmf.backends.hdf5.h5_utils import H5DataIO
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from odograph.recording.digest import content_digest, signal_digests, unit_digest, unit_digests
from odograph.recording.reader import read_recording

EXACT = np.round(np.random.default_rng(5).uniform(0, 1, (400, 2)) * 1024) / 1024


def digests(path, settings):
    recording = read_recording(path, settings)
    return signal_digests(recording), unit_digests(recording)


def test_the_digest_is_the_hash_of_the_bytes_that_the_docstring_names():
    # Computed a second way, by the standard library alone (FIPS 180-4 through hashlib).
    parts = [b"unit", b"s", b"times", b"float64 (2,)", np.array([1.5, -2.0], "<f8").tobytes()]
    text = b"".join(len(part).to_bytes(8, "little") + part for part in parts)
    assert content_digest({"unit": "s"}, {"times": np.array([1.5, -2.0])}) == (
        "sha256:" + hashlib.sha256(text).hexdigest()
    )


@given(hnp.arrays(np.float32, hnp.array_shapes(max_dims=2), elements=st.floats(width=32)))
def test_storage_does_not_count(values):
    digest = content_digest({}, {"x": values})
    assert digest == content_digest({}, {"x": values.astype(np.float64)})
    assert digest == content_digest({}, {"x": values.astype(">f8")})
    assert digest == content_digest({}, {"x": np.asfortranarray(values)})
    assert digest == content_digest({}, {"x": np.repeat(values, 2, axis=0)[::2]})


@given(hnp.arrays(np.float64, st.integers(1, 8), elements=st.floats(-1e300, 1e300)), st.integers(0, 7))
def test_any_value_counts(values, at):
    changed = values.copy()
    changed[at % values.size] = np.nextafter(values[at % values.size], np.inf)
    assert content_digest({}, {"x": values}) != content_digest({}, {"x": changed})


def test_all_nan_are_one_and_so_are_both_zeros():
    other_nan = np.array([0x7FF8000000000123, 0], dtype=np.uint64).view(np.float64)
    assert content_digest({}, {"x": other_nan}) == content_digest({}, {"x": np.array([np.nan, -0.0])})


def test_shape_name_and_meaning_count():
    x = np.arange(6.0)
    variants = [
        content_digest({}, {"x": x}),
        content_digest({}, {"x": x.reshape(2, 3)}),
        content_digest({}, {"y": x}),
        content_digest({"unit": "m"}, {"x": x}),
        content_digest({"unit": "cm"}, {"x": x}),
        content_digest({}, {"x": x[:3], "y": x[3:]}),
    ]
    assert len(set(variants)) == len(variants)


def test_a_file_written_anew_in_another_layout_keeps_its_digests(nwb):
    plain = nwb.write(nwb.tracking(data=EXACT), nwb.units(ids=[3, 5]), name="plain.nwb", identifier="a")
    packed = nwb.write(
        nwb.acquisition(nwb.time_series("extra", np.ones(5), rate=1.0, starting_time=0.0)),
        nwb.tracking(
            ("muzzle",),
            data=H5DataIO(EXACT.astype(np.float32), compression="gzip", chunks=(50, 1), shuffle=True),
            holder="Elsewhere",
            module="tracking",
            unit="m",
        ),
        nwb.units([nwb.spikes(seed=2), nwb.spikes(seed=1)], ids=[5, 3], columns={"grade": ["a", "b"]}),
        name="packed.nwb",
        identifier="b",
    )
    assert plain.read_bytes() != packed.read_bytes()
    assert digests(plain, nwb.settings()) == digests(packed, nwb.settings())


def test_centimetres_have_the_digest_of_the_metres_they_are(nwb):
    # Quarters of a centimetre times 0.01, as the reader computes it.
    centimetres = np.round(nwb.walk() * 400) / 4
    one = nwb.write(nwb.tracking(data=centimetres, unit="cm"), nwb.units(), name="cm.nwb")
    two = nwb.write(nwb.tracking(data=centimetres * 0.01), nwb.units(), name="m.nwb")
    assert digests(one, nwb.settings())[0] == digests(two, nwb.settings())[0]


def test_only_what_changed_changes(nwb):
    def parts(**changed):
        given = {
            "tracking": nwb.tracking(data=EXACT),
            "direction": nwb.direction(np.linspace(0, 6, 400)),
            "pulses": nwb.events(nwb.frame_times()),
            "arena": nwb.arena([[0, 0], [1, 0], [0, 1]]),
            "invalid": nwb.invalid_times((1.0, 2.0)),
            "wheel": nwb.acquisition(nwb.time_series("wheel", np.arange(400.0), nwb.frame_times())),
            "units": nwb.units(ids=[3, 5]),
            **changed,
        }
        return list(given.values())

    settings = nwb.settings(
        frame_pulses_place="events/camera", covariates=[{"name": "wheel", "place": "acquisition/wheel"}]
    )
    signals, units = digests(nwb.write(*parts(), name="first.nwb"), settings)
    assert set(signals) == {
        "tracking",
        "direction",
        "frame_pulses",
        "arena",
        "invalid_times",
        "covariate:wheel",
    }
    moved = EXACT.copy()
    moved[7, 1] += 1 / 1024
    later = nwb.frame_times()
    later[3] += 1e-7
    cases = {
        "tracking": {"tracking": nwb.tracking(data=moved)},
        "direction": {"direction": nwb.direction(np.linspace(0, 6.1, 400))},
        "frame_pulses": {"pulses": nwb.events(later)},
        "arena": {"arena": nwb.arena([[0, 0], [1, 0], [0, 2]])},
        "invalid_times": {"invalid": nwb.invalid_times((1.0, 2.5))},
        "covariate:wheel": {
            "wheel": nwb.acquisition(nwb.time_series("wheel", np.arange(400.0)[::-1], nwb.frame_times()))
        },
        5: {"units": nwb.units([nwb.spikes(seed=1), nwb.spikes(seed=9)], ids=[3, 5])},
    }
    for changed, case in cases.items():
        now_signals, now_units = digests(nwb.write(*parts(**case), name="second.nwb"), settings)
        differing = {key for key in signals if now_signals[key] != signals[key]}
        differing |= {key for key in units if now_units[key] != units[key]}
        assert differing == {changed}


def test_roles_count_and_observed_intervals_count(nwb):
    path = nwb.write(nwb.tracking(("a", "b")), nwb.units())
    one = digests(path, nwb.settings(front_point="a", back_point="b"))[0]["tracking"]
    other = digests(path, nwb.settings(front_point="b", back_point="a"))[0]["tracking"]
    alone = digests(path, nwb.settings(front_point="a"))[0]["tracking"]
    assert len({one, other, alone}) == 3
    unit = read_recording(path, nwb.settings(front_point="a")).units[0]
    assert unit_digest(unit) != unit_digest(replace(unit, observed_s=np.array([[0.0, 8.0]])))
    assert unit_digest(unit) == unit_digest(
        replace(unit, unit_id=99, attributes={"grade": "good"}, region="x")
    )


def test_settings_that_change_what_is_read_change_the_digest(nwb):
    path = nwb.usual()
    metres = digests(path, nwb.settings())[0]["tracking"]
    assert metres != digests(path, nwb.settings(length_unit="centimetres"))[0]["tracking"]
    assert metres == digests(path, nwb.settings(length_unit="metres"))[0]["tracking"]


@pytest.mark.parametrize("wanted", [[3], [5], [3, 5]])
def test_a_unit_has_its_digest_however_it_was_read(nwb, wanted):
    path = nwb.write(nwb.tracking(), nwb.units(ids=[3, 5]))
    every = digests(path, nwb.settings())[1]
    some = unit_digests(read_recording(path, nwb.settings(), signals=(), units=wanted))
    assert some == {unit: every[unit] for unit in wanted}


def test_byte_order_in_the_file_does_not_count(nwb, replace_data):
    path = nwb.usual()
    before = digests(path, nwb.settings())
    with h5py.File(path, "r") as file:
        stored = file["units/spike_times"][()]
    replace_data(path, "units/spike_times", stored.astype(">f8"))
    assert digests(path, nwb.settings()) == before
