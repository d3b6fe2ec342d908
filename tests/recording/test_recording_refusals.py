"""Recordings that cannot be used: each gets one error with its file, place, find, expectation and remedy."""

from __future__ import annotations

import h5py
import numpy as np
import pytest

from odograph.errors import InputError
from odograph.recording.reader import read_recording

POSITION = "processing/behavior/Position"
HEAD = f"{POSITION}/head"


def refusal(path, settings) -> InputError:
    """The error that reading ends with; its five facts are all there."""
    with pytest.raises(InputError) as caught:
        read_recording(path, settings)
    error = caught.value
    assert error.file == str(path)
    assert error.found and error.expected and error.remedy
    assert len(error.message().splitlines()) == 3
    return error


# ---- the file itself


def test_no_such_file(nwb):
    assert "no such file" in refusal(nwb.folder / "nowhere.nwb", nwb.settings()).found


def test_a_folder(nwb):
    error = refusal(nwb.folder, nwb.settings())
    assert "a folder" in error.found and "Zarr" in error.remedy


@pytest.mark.parametrize(
    ("content", "found"),
    [
        (b"", "empty"),
        (b"session\tnwb\n", "not an HDF5 file"),
        (b"version of the pointer: git-lfs, 1\noid sha256:00\n", "Git LFS pointer"),
    ],
)
def test_other_files(nwb, content, found):
    path = nwb.folder / "other.nwb"
    path.write_bytes(content)
    assert found in refusal(path, nwb.settings()).found


def test_hdf5_that_is_not_nwb(nwb):
    path = nwb.folder / "plain.h5"
    with h5py.File(path, "w") as file:
        file["x"] = [1.0]
    error = refusal(path, nwb.settings())
    assert "not NWB" in error.found and error.place == "attribute nwb_version"


@pytest.mark.parametrize("version", ["NWB-1.0.6", "1.0.5", "unknown"])
def test_nwb_before_2(nwb, version):
    path = nwb.folder / "old.nwb"
    with h5py.File(path, "w") as file:
        file["nwb_version"] = version
    assert version in refusal(path, nwb.settings()).found


@pytest.mark.parametrize("share", [0.1, 0.5, 0.9, 0.999])
def test_truncated_files(nwb, share):
    path = nwb.usual()
    content = path.read_bytes()
    path.write_bytes(content[: int(len(content) * share)])
    assert "truncated" in refusal(path, nwb.settings()).found


def test_a_damaged_chunk_names_its_data_set(nwb):
    from hdmf.backends.hdf5.h5_utils import H5DataIO

    data = H5DataIO(nwb.walk(), compression="gzip", fletcher32=True, chunks=(400, 2))
    path = nwb.usual(data=data)
    with h5py.File(path, "r") as file:
        chunk = file[f"{HEAD}/data"].id.get_chunk_info(0)
    with path.open("r+b") as stream:
        stream.seek(chunk.byte_offset)
        stream.write(b"\xff" * chunk.size)
    error = refusal(path, nwb.settings())
    assert error.place == f"{HEAD}/data" and "cannot be read" in error.found


def test_an_object_that_pynwb_cannot_build_is_named(nwb, replace_data):
    path = nwb.usual()
    replace_data(path, f"{HEAD}/timestamps", np.stack([nwb.frame_times()] * 2))
    error = refusal(path, nwb.settings())
    assert "malformed NWB" in error.found and HEAD in (error.place or "")


# ---- links


@pytest.mark.parametrize("kind", ["soft", "external"])
def test_links_to_nowhere(nwb, kind):
    path = nwb.usual()
    with h5py.File(path, "r+") as file:
        target = "/acquisition/gone"
        file["acquisition/raw"] = (
            h5py.SoftLink(target) if kind == "soft" else h5py.ExternalLink("x.nwb", target)
        )
    error = refusal(path, nwb.settings())
    assert error.place == "acquisition/raw" and "acquisition/gone" in error.found
    # The user may say that what was linked is not needed; the rest is then read, with a warning.
    recording = read_recording(path, nwb.settings(missing_links="warn"))
    assert [entry["place"] for entry in recording.findings] == ["acquisition/raw"]


def test_a_signal_behind_a_lost_link_is_refused_all_the_same(nwb):
    path = nwb.usual()
    with h5py.File(path, "r+") as file:
        file[f"{POSITION}/spot"] = h5py.ExternalLink("gone.nwb", "/spot")
    error = refusal(path, nwb.settings(missing_links="warn", position_place=f"{POSITION}/spot"))
    assert "leads nowhere" in error.found and error.place == f"{POSITION}/spot"


def test_an_object_broken_by_a_lost_link_is_named_with_it(nwb):
    path = nwb.write(nwb.tracking(("a", "b")), nwb.units())
    with h5py.File(path, "r+") as file:
        del file[f"{POSITION}/a"]
    error = refusal(path, nwb.settings(missing_links="warn", position_place=f"{POSITION}/b"))
    assert error.place == f"{POSITION}/b" and "1 link(s) of the file lead nowhere" in error.found


def test_lost_time_stamps_or_data_are_no_empty_signal(nwb):
    path = nwb.usual()
    with h5py.File(path, "r+") as file:
        del file[f"{HEAD}/data"]
        file[f"{HEAD}/data"] = h5py.ExternalLink("gone.nwb", "/data")
    assert f"{HEAD}/data" in refusal(path, nwb.settings()).place
    error = refusal(path, nwb.settings(missing_links="warn"))
    assert "no data" in error.found or "malformed" in error.found


# ---- tracking


def test_no_position(nwb):
    error = refusal(nwb.write(nwb.units()), nwb.settings())
    assert "no position" in error.found and "intake.position_place" in error.remedy


def test_several_points_without_a_choice_are_listed(nwb):
    error = refusal(nwb.write(nwb.tracking(("nose", "neck")), nwb.units()), nwb.settings())
    assert f"{POSITION}/nose" in error.found and f"{POSITION}/neck" in error.found
    assert "400x2" in error.found and "front_point" in error.remedy


@pytest.mark.parametrize(
    "settings",
    [
        {"position_place": "processing/behaviour/Position"},
        {"front_point": "hed"},
        {"position_place": "units"},
    ],
)
def test_a_wrong_place_lists_the_candidates(nwb, settings):
    error = refusal(nwb.usual(), nwb.settings(**settings))
    assert next(iter(settings)) in error.remedy
    assert HEAD in error.found or "not a SpatialSeries" in error.found


@pytest.mark.parametrize("unit", ["furlongs", "a.u.", "unknown", "degrees"])
def test_unknown_units_of_length(nwb, unit):
    error = refusal(nwb.usual(unit=unit), nwb.settings())
    assert unit in error.found and "intake.length_unit" in error.remedy


def test_pixels_without_a_scale(nwb):
    assert "intake.metres_per_pixel" in refusal(nwb.usual(unit="px"), nwb.settings()).remedy


@pytest.mark.parametrize("shape", [(400,), (400, 1), (400, 4), (400, 2, 2)])
def test_positions_of_the_wrong_shape(nwb, replace_data, shape):
    path = nwb.usual()
    replace_data(path, f"{HEAD}/data", np.ones(shape))
    assert f"{shape}" in refusal(path, nwb.settings(position_place=HEAD)).found


def test_transposed_data_are_called_so(nwb, replace_data):
    path = nwb.usual()
    replace_data(path, f"{HEAD}/data", nwb.walk().T)
    assert "transposed" in refusal(path, nwb.settings()).found


def test_data_and_time_stamps_of_different_length(nwb, replace_data):
    path = nwb.usual()
    replace_data(path, f"{HEAD}/data", nwb.walk(399))
    error = refusal(path, nwb.settings())
    assert "399" in error.found and "400" in error.found


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_time_stamps_that_are_not_finite(nwb, bad):
    time_s = nwb.frame_times()
    time_s[[7, 9]] = bad
    error = refusal(nwb.usual(time_s=time_s), nwb.settings())
    assert "2 of 400" in error.found and "entry 7" in error.found and error.place == f"{HEAD}/timestamps"


def test_time_that_runs_backwards(nwb):
    time_s = nwb.frame_times()
    time_s[200:] -= 1.0
    error = refusal(nwb.usual(time_s=time_s), nwb.settings())
    assert "backwards 1 time" in error.found and "sample 199" in error.found


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_times_that_went_through_float32(nwb, replace_data, dtype):
    # IEEE 754 binary32 has 24 bits: near 1.7e9 neighbouring numbers are 2^7 = 128 apart.
    time_s = (1.7e9 + np.arange(40000) / 30).astype(np.float32).astype(dtype)
    path = nwb.usual(data=nwb.walk(40000), time_s=nwb.frame_times(40000))
    replace_data(path, f"{HEAD}/timestamps", time_s)
    error = refusal(path, nwb.settings())
    assert "128 s" in error.found and "float64" in error.remedy


def test_times_near_ten_thousand_seconds_in_float32_are_too_coarse_only_for_fast_sampling(nwb, replace_data):
    # Neighbours are 2^-10 s apart there: fine at 50 Hz, not at 200 Hz.
    for rate, fine in ((50, True), (200, False)):
        path = nwb.write(nwb.tracking(), nwb.units([nwb.spikes() + 9000]), name=f"at-{rate}.nwb")
        replace_data(path, f"{HEAD}/timestamps", (9000 + np.arange(400) / rate).astype(np.float32))
        if fine:
            assert read_recording(path, nwb.settings()).tracks[0].time_s.size == 400
        else:
            assert "stored in steps" in refusal(path, nwb.settings()).found


def test_even_times_that_float32_happens_to_hold_are_not_coarse(nwb):
    path = nwb.usual(time_s=4096.0 + np.arange(400) / 64)
    settings = nwb.settings(frame_pulses_place="none-needed")
    with pytest.raises(InputError, match="nothing at this place"):
        read_recording(path, settings)
    assert read_recording(path, settings, signals=["tracking"], units=()).tracks[0].time_s[0] == 4096.0


@pytest.mark.parametrize("factor", [1000.0, 30000.0])
def test_behaviour_in_milliseconds_or_samples(nwb, factor):
    error = refusal(nwb.usual(time_s=nwb.frame_times() * factor), nwb.settings())
    assert "median step" in error.found and "seconds" in error.remedy


def test_every_sample_lost(nwb):
    error = refusal(nwb.usual(data=np.zeros((400, 2))), nwb.settings(lost_value="zero"))
    assert "every sample is lost" in error.found


def test_no_samples(nwb):
    error = refusal(nwb.usual(data=np.empty((0, 2)), time_s=np.empty(0)), nwb.settings())
    assert "no data" in error.found


def test_a_position_of_words(nwb, replace_data):
    path = nwb.usual()
    replace_data(path, f"{HEAD}/data", np.full((400, 2), "left", dtype=h5py.string_dtype()))
    error = refusal(path, nwb.settings())
    assert "expected: numbers" in error.message() or "malformed" in error.found


@pytest.mark.parametrize("rate", [0.0, -50.0, np.nan])
def test_a_rate_that_is_no_rate(nwb, rate):
    path = nwb.usual(time_s=None)
    with h5py.File(path, "r+") as file:
        group = file[HEAD]
        del group["timestamps"]
        start = group.create_dataset("starting_time", data=0.0)
        start.attrs["rate"] = np.float32(rate)
        start.attrs["unit"] = "seconds"
    error = refusal(path, nwb.settings())
    assert "rate" in error.found


def test_two_points_at_different_times(nwb):
    series = [
        nwb.series(name, nwb.walk(), nwb.frame_times(start=start), unit="meters")
        for name, start in (("a", 0.0), ("b", 0.01))
    ]
    path = nwb.write(nwb.acquisition(series[0]), nwb.acquisition(series[1]), nwb.units())
    error = refusal(path, nwb.settings(front_point="a", back_point="b"))
    assert "different time stamps" in error.found


# ---- direction, arena, invalid times, further variables


def test_a_direction_whose_unit_was_forgotten(nwb):
    error = refusal(
        nwb.write(nwb.tracking(), nwb.units(), nwb.direction(np.ones(400), "meters")), nwb.settings()
    )
    assert "unknown unit of angle: 'meters'" in error.found and "direction_unit" in error.remedy


@pytest.mark.parametrize(
    ("corners", "problem"),
    [
        ([[0, 0], [1, 1]], "2 corner"),
        ([[0, 0], [1, 1], [1, 0], [0, 1]], "cross"),
        ([[0, 0], [1, 1], [2, 2]], "one line"),
        ([[0, 0], [1, np.nan], [2, 0]], "not finite"),
    ],
)
def test_corners_that_make_no_arena(nwb, corners, problem):
    error = refusal(nwb.write(nwb.tracking(), nwb.units(), nwb.arena(corners)), nwb.settings())
    assert problem in error.found and error.place == "processing/behavior/arena"


def test_two_arenas_without_a_choice(nwb):
    corners = [[0, 0], [1, 0], [0, 1]]
    path = nwb.write(nwb.tracking(), nwb.units(), nwb.arena(corners), nwb.arena(corners, "box"))
    assert "arena_place: processing/behavior/arena" in refusal(path, nwb.settings()).remedy
    assert refusal(path, nwb.settings(arena_place=HEAD)).place == HEAD


def test_an_invalid_time_that_ends_before_it_starts(nwb):
    path = nwb.write(nwb.tracking(), nwb.units(), nwb.invalid_times((1.0, 2.0), (4.0, 3.0)))
    error = refusal(path, nwb.settings())
    assert "row 1" in error.found and error.place == "intervals/invalid_times"


@pytest.mark.parametrize(
    ("place", "found"),
    [("acquisition/wheal", "nothing at this place"), (HEAD, "shape"), ("units", "not a Time")],
)
def test_a_variable_that_is_not_there_or_not_one(nwb, place, found):
    path = nwb.write(
        nwb.tracking(), nwb.units(), nwb.acquisition(nwb.time_series("wheel", [1.0, 2.0], [0.0, 1.0]))
    )
    error = refusal(path, nwb.settings(covariates=[{"name": "wheel", "place": place}]))
    assert found in error.found
