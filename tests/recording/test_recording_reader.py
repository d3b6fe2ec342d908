"""What is read of a sound recording, against what was written and against pynwb's and h5py's own reading."""

from __future__ import annotations

import hashlib

import h5py
import numpy as np
import pynwb
import pytest

from odograph.errors import InputError
from odograph.recording.reader import read_recording

HEAD = "processing/behavior/Position/head"


def test_everything_in_one_file(nwb):
    angle = np.linspace(0, 6, 400)
    path = nwb.write(
        nwb.subject(),
        nwb.tracking(("led_front", "led_back"), time_s=nwb.frame_times(start=1000.0)),
        nwb.direction(angle),
        nwb.events(nwb.frame_times(start=3.0)),
        nwb.arena([[0, 0], [1, 0], [1, 1], [0, 1]]),
        nwb.invalid_times((5.0, 6.0), (3.5, 4.0)),
        nwb.units(
            [nwb.spikes(seed=3) + 3, nwb.spikes(seed=4) + 3], ids=[17, 4], columns={"grade": ["a", "b"]}
        ),
        nwb.acquisition(nwb.time_series("wheel", np.arange(400.0), nwb.frame_times())),
        session_id="s-1",
    )
    recording = read_recording(
        path,
        nwb.settings(
            front_point="led_front",
            back_point="led_back",
            frame_pulses_place="events/camera",
            covariates=[{"name": "wheel_turns", "place": "acquisition/wheel", "clock": "recording"}],
        ),
    )
    assert [track.name for track in recording.tracks] == ["led_front", "led_back"]
    np.testing.assert_array_equal(recording.tracks[1].time_s, nwb.frame_times(start=1000.0))
    np.testing.assert_array_equal(recording.tracks[0].xy_m, nwb.walk())
    np.testing.assert_allclose(recording.direction.angle_rad, angle, atol=1e-12)
    np.testing.assert_array_equal(recording.pulses.time_s, nwb.frame_times(start=3.0))
    np.testing.assert_array_equal(recording.invalid.start_s, [3.5, 5.0])
    np.testing.assert_array_equal(recording.arena.corners_m, [[0, 0], [1, 0], [1, 1], [0, 1]])
    np.testing.assert_array_equal(recording.covariates[0].values, np.arange(400.0))
    assert [unit.unit_id for unit in recording.units] == [4, 17]
    assert [unit.attributes["grade"] for unit in recording.units] == ["b", "a"]
    np.testing.assert_array_equal(recording.units[0].spike_times_s, nwb.spikes(seed=4) + 3)
    assert recording.subject.subject_id == "heather"
    assert recording.file.session_id == "s-1"
    assert recording.file.session_start_time == "2026-03-04T09:30:00+00:00"


def test_only_what_is_asked_for_is_read(nwb):
    path = nwb.write(nwb.tracking(), nwb.units(ids=[3, 8]), nwb.arena([[0, 0], [1, 0], [0, 1]]))
    one = read_recording(path, nwb.settings(), signals=(), units=[8])
    assert one.tracks == () and one.arena is None
    assert [unit.unit_id for unit in one.units] == [8]
    np.testing.assert_array_equal(one.units[0].spike_times_s, nwb.spikes(seed=2))
    arena = read_recording(path, nwb.settings(), signals=["arena"], units=())
    assert arena.units == () and arena.tracks == () and arena.arena is not None
    with pytest.raises(InputError, match="no unit with the id 9"):
        read_recording(path, nwb.settings(), signals=(), units=[8, 9])


def test_a_unit_alone_is_read_as_among_all(nwb):
    trains = [nwb.spikes(n, seed=n) for n in range(1, 30)]
    path = nwb.write(nwb.tracking(), nwb.units(trains))
    for wanted in (0, 7, 28):
        alone = read_recording(path, nwb.settings(), signals=(), units=[wanted]).units[0]
        np.testing.assert_array_equal(alone.spike_times_s, trains[wanted])


def test_a_misspelt_signal_is_a_programming_error(nwb):
    with pytest.raises(ValueError, match="trackin"):
        read_recording(nwb.usual(), nwb.settings(), signals=["trackin"])


def test_start_and_rate_give_the_same_as_time_stamps(nwb):
    def rated(nwbfile):
        series = nwb.series("head", nwb.walk(), unit="meters", rate=50.0, starting_time=2.0)
        module = nwbfile.create_processing_module("behavior", "b")
        module.add(pynwb.behavior.Position(spatial_series=series))

    path = nwb.write(rated, nwb.units([nwb.spikes() + 2]))
    time_s = read_recording(path, nwb.settings()).tracks[0].time_s
    np.testing.assert_allclose(time_s, nwb.frame_times(start=2.0), rtol=0, atol=1e-12)
    with pynwb.NWBHDF5IO(path, "r") as io:
        theirs = io.read().processing["behavior"]["Position"]["head"].get_timestamps()
        np.testing.assert_allclose(time_s, theirs, rtol=0, atol=1e-12)


def test_integers_with_conversion_and_offset_as_pynwb_reads_them(nwb):
    counts = np.round(nwb.walk() * 1000).astype(np.int16)
    path = nwb.usual(data=counts, conversion=0.001, offset=-0.25, unit="meters")
    metres = read_recording(path, nwb.settings()).tracks[0].xy_m
    with pynwb.NWBHDF5IO(path, "r") as io:
        theirs = io.read().processing["behavior"]["Position"]["head"].get_data_in_units()
    np.testing.assert_allclose(metres, theirs, rtol=0, atol=1e-7)
    np.testing.assert_allclose(metres, counts * 0.001 - 0.25, rtol=0, atol=1e-7)


@pytest.mark.parametrize(
    ("unit", "metres"),
    # SI prefixes (BIPM SI Brochure, table 7); the spellings are common practice, no source.
    [("meters", 1.0), ("m", 1.0), ("Centimeters", 0.01), ("cm", 0.01), ("mm", 0.001), (" metres ", 1.0)],
)
def test_units_of_length(nwb, unit, metres):
    path = nwb.usual(unit=unit)
    np.testing.assert_allclose(read_recording(path, nwb.settings()).tracks[0].xy_m, nwb.walk() * metres)


def test_pixels_take_their_scale_from_the_settings(nwb):
    path = nwb.usual(unit="pixels", data=nwb.walk() * 640)
    track = read_recording(path, nwb.settings(metres_per_pixel=1 / 640)).tracks[0]
    np.testing.assert_allclose(track.xy_m, nwb.walk(), atol=1e-12)


def test_the_settings_overrule_a_wrong_unit(nwb):
    path = nwb.usual(unit="meters", data=nwb.walk() * 100)
    track = read_recording(path, nwb.settings(length_unit="centimetres")).tracks[0]
    np.testing.assert_allclose(track.xy_m, nwb.walk(), atol=1e-12)


def test_a_third_coordinate_is_left_aside(nwb):
    path = nwb.usual(data=np.column_stack([nwb.walk(), np.full(400, 9.0)]))
    np.testing.assert_array_equal(read_recording(path, nwb.settings()).tracks[0].xy_m, nwb.walk())


@pytest.mark.parametrize(("word", "stored"), [("zero", 0.0), ("minus_one", -1.0), (None, np.nan)])
def test_lost_points(nwb, word, stored):
    data = nwb.walk()
    data[10:20] = stored
    data[30, 0] = stored
    path = nwb.usual(data=data, conversion=2.0, offset=0.5)
    track = read_recording(path, nwb.settings(lost_value=word)).tracks[0]
    lost = np.isnan(track.xy_m).all(axis=1)
    expected = np.zeros(400, dtype=bool)
    expected[10:20] = True
    # One coordinate on the axis is a place like any other; one NaN coordinate is no place at all.
    expected[30] = word is None
    np.testing.assert_array_equal(lost, expected)
    assert np.isfinite(track.xy_m[~expected]).all()


@pytest.mark.parametrize(
    ("unit", "settings", "stored", "expected"),
    # Compass to mathematical angle: counter-clockwise from east = 90 degrees - bearing (common practice,
    # no source; checked here on the cardinal points).
    [
        ("radians", {}, np.pi / 2, np.pi / 2),
        ("radians", {}, -np.pi / 2, 3 * np.pi / 2),
        ("radians", {}, 5 * np.pi / 2, np.pi / 2),
        ("degrees", {}, 90.0, np.pi / 2),
        ("degrees", {"direction_clockwise": True, "direction_zero_deg": 90.0}, 0.0, np.pi / 2),
        ("degrees", {"direction_clockwise": True, "direction_zero_deg": 90.0}, 90.0, 0.0),
        ("degrees", {"direction_clockwise": True, "direction_zero_deg": 90.0}, 180.0, 3 * np.pi / 2),
        ("meters", {"direction_unit": "degrees"}, 180.0, np.pi),
        ("radians", {}, -1e-20, 0.0),
    ],
)
def test_directions_are_turned_to_one_convention(nwb, unit, settings, stored, expected):
    path = nwb.write(nwb.tracking(), nwb.units(), nwb.direction(np.full(400, stored), unit))
    angle = read_recording(path, nwb.settings(**settings)).direction.angle_rad
    np.testing.assert_allclose(angle, expected, atol=1e-12)
    assert angle.min() >= 0 and angle.max() < 2 * np.pi


def test_a_direction_in_one_column_with_lost_samples(nwb):
    angle = np.linspace(0, 1, 400)
    angle[5] = np.nan
    path = nwb.write(nwb.tracking(), nwb.units(), nwb.direction(angle[:, None]))
    read = read_recording(path, nwb.settings()).direction.angle_rad
    assert read.shape == (400,) and np.flatnonzero(np.isnan(read)).tolist() == [5]


def test_none_leaves_a_signal_unread(nwb):
    path = nwb.write(
        nwb.tracking(), nwb.units(), nwb.direction(np.ones(400), "gon"), nwb.arena([[0, 0], [1, 0], [0, 1]])
    )
    recording = read_recording(path, nwb.settings(direction_place="none", arena_place="none"))
    assert recording.direction is None and recording.arena is None


def test_places_may_be_written_in_several_ways(nwb):
    path = nwb.write(nwb.tracking(("a", "b")), nwb.tracking(("a",), holder="Other"), nwb.units())
    for place in ("processing/behavior/Other/a", "/processing/behavior/Other/a", "Other/a", "Other"):
        track = read_recording(path, nwb.settings(position_place=place)).tracks[0]
        assert track.place == "processing/behavior/Other/a"
    two = read_recording(path, nwb.settings(position_place="Position", front_point="b", back_point="a"))
    assert [track.name for track in two.tracks] == ["b", "a"]


def test_a_bare_series_outside_a_container_is_found(nwb):
    series = nwb.series("spot", nwb.walk(), nwb.frame_times(), unit="meters")
    path = nwb.write(nwb.acquisition(series), nwb.units())
    assert read_recording(path, nwb.settings()).tracks[0].place == "acquisition/spot"


def test_the_arena_of_the_settings_goes_before_the_file(nwb):
    path = nwb.write(nwb.tracking(), nwb.units(), nwb.arena([[0, 0], [1, 0], [0, 1]]))
    corners = [[0.0, 0.0], [2.0, 0.0], [2.0, 2.0], [0.0, 2.0], [0.0, 0.0]]
    arena = read_recording(path, nwb.settings(arena_corners_m=corners)).arena
    np.testing.assert_array_equal(arena.corners_m, corners[:4])


def test_repeated_times_keep_the_first_sample_and_warn(nwb):
    time_s = nwb.frame_times()
    time_s[100] = time_s[99]
    recording = read_recording(nwb.usual(time_s=time_s), nwb.settings())
    track = recording.tracks[0]
    assert track.time_s.size == 399 and np.all(np.diff(track.time_s) > 0)
    np.testing.assert_array_equal(track.xy_m, np.delete(nwb.walk(), 100, axis=0))
    assert any("repeat the time" in entry["found"] for entry in recording.findings)


def test_long_gaps_warn_with_their_place_in_time(nwb):
    time_s = nwb.frame_times()
    time_s[200:] += 30.0
    recording = read_recording(nwb.usual(time_s=time_s), nwb.settings())
    (gap,) = [entry for entry in recording.findings if "gap" in entry["found"]]
    assert gap["level"] == "warn" and "30.020 s, at 3.980 s" in gap["found"]


def test_raw_voltage_is_never_read(nwb):
    path = nwb.write(nwb.tracking(), nwb.units(), nwb.voltage(seconds=8.0))
    with h5py.File(path, "r") as file:
        chunk = file["acquisition/voltage/data"].id.get_chunk_info(0)
    with path.open("r+b") as stream:
        stream.seek(chunk.byte_offset)
        stream.write(b"\xff" * chunk.size)
    with h5py.File(path, "r") as file, pytest.raises(OSError):
        file["acquisition/voltage/data"][()]
    assert len(read_recording(path, nwb.settings()).units) == 2


def test_reading_leaves_the_file_as_it_was(nwb):
    path = nwb.usual()
    before = hashlib.sha256(path.read_bytes()).hexdigest()
    read_recording(path, nwb.settings())
    assert hashlib.sha256(path.read_bytes()).hexdigest() == before


def test_a_start_without_time_zone_and_another_reference_time_warn(nwb, replace_data):
    from datetime import UTC, datetime

    path = nwb.write(
        nwb.tracking(), nwb.units(), timestamps_reference_time=datetime(2026, 3, 4, 9, 0, tzinfo=UTC)
    )
    replace_data(path, "session_start_time", "2026-03-04T09:30:00")
    recording = read_recording(path, nwb.settings())
    levels = {entry["place"]: entry["level"] for entry in recording.findings}
    assert levels["session_start_time"] == "warn" and levels["timestamps_reference_time"] == "warn"
    assert recording.file.session_start_time == "2026-03-04T09:30:00"
    sound = read_recording(nwb.usual(), nwb.settings())
    assert not sound.findings


def test_an_implausible_extent_warns_of_the_unit(nwb):
    recording = read_recording(nwb.usual(data=nwb.walk() * 640), nwb.settings())
    (found,) = recording.findings
    assert found["level"] == "warn" and "length_unit" in found["remedy"]


@pytest.mark.parametrize("specification", [True, False])
def test_files_of_an_older_schema_with_and_without_the_cached_specification(nwb, specification):
    path = nwb.write(nwb.tracking(), nwb.units(), specification=specification)
    with h5py.File(path, "r+") as file:
        assert ("specifications" in file) == specification
        file.attrs["nwb_version"] = "2.2.5"
    recording = read_recording(path, nwb.settings())
    assert recording.file.nwb_version == "2.2.5" and len(recording.units) == 2
