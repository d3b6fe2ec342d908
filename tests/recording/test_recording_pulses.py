"""Frame pulses from every place an NWB file may keep them."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
from hdmf.common import DynamicTable, VectorData, VectorIndex
from pynwb import NWBHDF5IO, get_class, load_namespaces
from pynwb.behavior import BehavioralEvents
from pynwb.misc import AnnotationSeries, IntervalSeries
from pynwb.spec import (
    NWBAttributeSpec,
    NWBDatasetSpec,
    NWBGroupSpec,
    NWBNamespaceBuilder,
)

from odograph.errors import InputError
from odograph.recording.reader import read_recording

TIMES = np.arange(20) * 0.02 + 1.5


def pulses(path, settings):
    recording = read_recording(path, settings, signals=["frame_pulses"], units=())
    return recording.pulses, recording.findings


def test_without_a_place_there_are_none(nwb):
    assert pulses(nwb.write(nwb.events(TIMES), once="pulses"), nwb.settings())[0] is None


@pytest.mark.parametrize("place", ["events/camera", "camera", "/events/camera/timestamp"])
def test_a_table_of_events(nwb, place):
    found, findings = pulses(
        nwb.write(nwb.events(TIMES), once="pulses"), nwb.settings(frame_pulses_place=place)
    )
    np.testing.assert_array_equal(found.time_s, TIMES)
    assert found.place == "events/camera" and not findings


def test_a_table_out_of_order_is_sorted_with_a_warning(nwb):
    path = nwb.write(nwb.events(TIMES[::-1]))
    found, findings = pulses(path, nwb.settings(frame_pulses_place="events/camera"))
    np.testing.assert_array_equal(found.time_s, TIMES)
    assert [entry["level"] for entry in findings] == ["warn"]


def test_pulses_twice_at_one_time_count_once(nwb):
    path = nwb.write(nwb.events(np.repeat(TIMES, 2)))
    found, findings = pulses(path, nwb.settings(frame_pulses_place="events/camera"))
    np.testing.assert_array_equal(found.time_s, TIMES)
    assert "20 pulse(s) at the time of another" in findings[0]["found"]


@pytest.mark.parametrize("column", ["annotation", "label"])
def test_one_kind_of_events_among_several(nwb, column):
    kinds = ["frame", "lick"] * 10
    path = nwb.write(nwb.events(TIMES, **{column: kinds}))
    found, _ = pulses(path, nwb.settings(frame_pulses_place="events/camera", frame_pulses_label="frame"))
    np.testing.assert_array_equal(found.time_s, TIMES[::2])
    with pytest.raises(InputError, match="no pulse with the label 'flash'"):
        pulses(path, nwb.settings(frame_pulses_place="events/camera", frame_pulses_label="flash"))


def test_a_label_where_there_are_none(nwb):
    path = nwb.write(nwb.events(TIMES), once="pulses")
    with pytest.raises(InputError, match="no column of labels"):
        pulses(path, nwb.settings(frame_pulses_place="events/camera", frame_pulses_label="frame"))


def test_a_table_with_lists_of_times(nwb):
    data = VectorData(name="event_times", description="t", data=np.concatenate([TIMES, [9.0, 9.5]]))
    columns = [
        data,
        VectorIndex(name="event_times_index", target=data, data=[20, 22]),
        VectorData(name="label", description="l", data=["frame", "lick"]),
    ]
    table = DynamicTable(name="lines", description="lines", columns=columns)
    path = nwb.write(nwb.processing(table))
    where = {"frame_pulses_place": "processing/behavior/lines"}
    np.testing.assert_array_equal(
        pulses(path, nwb.settings(**where, frame_pulses_label="frame"))[0].time_s, TIMES
    )
    assert pulses(path, nwb.settings(**where))[0].time_s.size == 22


def test_intervals_give_their_starts_or_a_named_column(nwb):
    def add(nwbfile):
        for time in TIMES:
            nwbfile.add_trial(start_time=time, stop_time=time + 0.01)

    path = nwb.write(add)
    for place, later in (("intervals/trials", 0), ("intervals/trials/stop_time", 0.01)):
        found, _ = pulses(path, nwb.settings(frame_pulses_place=place))
        np.testing.assert_allclose(found.time_s, TIMES + later, rtol=0, atol=1e-12)


def test_a_table_without_times_lists_its_columns(nwb):
    path = nwb.write(nwb.arena([[0, 0], [1, 0], [0, 1]]))
    with pytest.raises(InputError, match="no column of times; its columns: x_m, y_m"):
        pulses(path, nwb.settings(frame_pulses_place="processing/behavior/arena"))


@pytest.mark.parametrize("values", [np.ones(20), np.arange(20), np.zeros(20)])
def test_a_series_with_one_entry_per_event(nwb, values):
    path = nwb.write(nwb.acquisition(nwb.time_series("line", values, TIMES)))
    found, _ = pulses(path, nwb.settings(frame_pulses_place="acquisition/line"))
    np.testing.assert_array_equal(found.time_s, TIMES)


@pytest.mark.parametrize(("high", "low"), [(1, 0), (1, -1), (5, 0)])
def test_a_series_of_edges(nwb, high, low):
    values = np.tile([high, low], 10)
    path = nwb.write(nwb.acquisition(nwb.time_series("line", values, TIMES)))
    rising, _ = pulses(path, nwb.settings(frame_pulses_place="acquisition/line"))
    np.testing.assert_array_equal(rising.time_s, TIMES[::2])
    falling, _ = pulses(
        path, nwb.settings(frame_pulses_place="acquisition/line", frame_pulses_edge="falling")
    )
    np.testing.assert_array_equal(falling.time_s, TIMES[1::2])


@pytest.mark.parametrize("dtype", [np.int16, np.float64, bool])
def test_a_sampled_line(nwb, monkeypatch, dtype):
    import odograph.recording.pulses as module

    # Pieces of 7 samples, so that edges fall on their borders.
    monkeypatch.setattr(module, "CHUNK_SAMPLES", 7)
    line = np.zeros(400, dtype=dtype)
    for start in range(10, 400, 20):
        line[start : start + 5] = 1
    path = nwb.write(nwb.acquisition(nwb.time_series("line", line, rate=1000.0, starting_time=2.0)))
    rising, _ = pulses(path, nwb.settings(frame_pulses_place="acquisition/line"))
    np.testing.assert_allclose(rising.time_s, 2 + np.arange(10, 400, 20) / 1000, rtol=0, atol=1e-12)
    falling, _ = pulses(
        path, nwb.settings(frame_pulses_place="acquisition/line", frame_pulses_edge="falling")
    )
    np.testing.assert_allclose(falling.time_s, 2 + np.arange(15, 400, 20) / 1000, rtol=0, atol=1e-12)


def test_a_line_that_starts_high_has_no_edge_there(nwb):
    line = np.tile([1, 1, 0, 0], 10)
    path = nwb.write(nwb.acquisition(nwb.time_series("line", line, rate=10.0, starting_time=0.0)))
    found, _ = pulses(path, nwb.settings(frame_pulses_place="acquisition/line"))
    np.testing.assert_allclose(found.time_s, np.arange(4, 40, 4) / 10, rtol=0, atol=1e-12)


def test_a_line_that_never_changes(nwb):
    path = nwb.write(nwb.acquisition(nwb.time_series("line", np.ones(50), rate=10.0, starting_time=0.0)))
    with pytest.raises(InputError, match="never changes"):
        pulses(path, nwb.settings(frame_pulses_place="acquisition/line"))


def test_behavioural_events_and_intervals_as_series(nwb):
    def as_old_file(nwbfile):
        events = BehavioralEvents(name="BehavioralEvents")
        events.add_timeseries(nwb.time_series("frames", np.ones(20), TIMES))
        nwb.processing(events)(nwbfile)

    path = nwb.write(
        as_old_file,
        nwb.acquisition(IntervalSeries(name="shutter", data=np.tile([1, -1], 10), timestamps=TIMES)),
    )
    for place in ("processing/behavior/BehavioralEvents/frames", "processing/behavior/BehavioralEvents"):
        np.testing.assert_array_equal(pulses(path, nwb.settings(frame_pulses_place=place))[0].time_s, TIMES)
    shutter, _ = pulses(path, nwb.settings(frame_pulses_place="shutter"))
    np.testing.assert_array_equal(shutter.time_s, TIMES[::2])


def test_annotations(nwb):
    # pynwb no longer makes this type but reads it; it is written as a plain series and renamed.
    words = np.array(["frame", "light"] * 10, dtype=object)
    path = nwb.write(nwb.acquisition(nwb.time_series("remarks", words, TIMES)))
    with h5py.File(path, "r+") as file:
        file["acquisition/remarks"].attrs["neurodata_type"] = "AnnotationSeries"
    with NWBHDF5IO(path, "r") as io:
        assert isinstance(io.read().acquisition["remarks"], AnnotationSeries)
    found, _ = pulses(path, nwb.settings(frame_pulses_place="remarks", frame_pulses_label="frame"))
    np.testing.assert_array_equal(found.time_s, TIMES[::2])


@pytest.fixture(scope="module")
def event_types(tmp_path_factory):
    """Types of an extension for events, as older files carry them: time stamps, numbers, and their labels."""
    folder = tmp_path_factory.mktemp("extension")
    builder = NWBNamespaceBuilder("events of a test", "moor-events", version="0.1.0", author="a", contact="b")
    builder.include_namespace("core")
    timestamps = NWBDatasetSpec("times", "float64", name="timestamps", shape=(None,), dims=("n",))
    labels = NWBAttributeSpec("labels", "the labels", "text", shape=(None,))
    data = NWBDatasetSpec("kinds", "uint8", name="data", shape=(None,), dims=("n",), attributes=[labels])
    parent = {"neurodata_type_inc": "NWBDataInterface"}
    builder.add_spec(
        "moor.extensions.yaml",
        NWBGroupSpec("events", neurodata_type_def="MoorEvents", datasets=[timestamps], **parent),
    )
    builder.add_spec(
        "moor.extensions.yaml",
        NWBGroupSpec("labelled", neurodata_type_def="MoorLabelled", datasets=[timestamps, data], **parent),
    )
    builder.export("moor.namespace.yaml", outdir=str(folder))
    load_namespaces(str(folder / "moor.namespace.yaml"))
    return get_class("MoorEvents", "moor-events"), get_class("MoorLabelled", "moor-events")


def test_events_of_an_extension(nwb, event_types):
    plain, labelled = event_types
    path = nwb.write(
        nwb.acquisition(plain(name="plain", timestamps=TIMES)),
        nwb.acquisition(
            labelled(
                name="labelled",
                timestamps=TIMES,
                data=np.tile([0, 1], 10).astype(np.uint8),
                data__labels=["frame", "lick"],
            )
        ),
    )
    found, _ = pulses(path, nwb.settings(frame_pulses_place="plain"))
    np.testing.assert_array_equal(found.time_s, TIMES)
    found, _ = pulses(path, nwb.settings(frame_pulses_place="labelled", frame_pulses_label="lick"))
    np.testing.assert_array_equal(found.time_s, TIMES[1::2])


@pytest.mark.parametrize(
    ("place", "message"),
    [
        ("acquisition/nothing", "nothing at this place; candidates: .*events/camera"),
        ("processing/behavior/Position/head", "data of shape"),
        ("processing/behavior/Position", "no pulses can be read"),
    ],
)
def test_places_that_hold_no_pulses(nwb, place, message):
    path = nwb.write(nwb.tracking(), nwb.events(TIMES), once="tracking and pulses")
    with pytest.raises(InputError, match=message):
        pulses(path, nwb.settings(frame_pulses_place=place))


def test_pulse_times_that_are_not_finite(nwb, replace_data):
    path = nwb.write(nwb.events(TIMES), once="pulses")
    bad = TIMES.copy()
    bad[3] = np.nan
    replace_data(path, "events/camera/timestamp", bad)
    with pytest.raises(InputError, match="1 of 20 pulse times are not finite; the first is entry 3"):
        pulses(path, nwb.settings(frame_pulses_place="events/camera"))


def test_no_pulse_at_all(nwb, replace_data):
    path = nwb.write(nwb.events(TIMES), once="pulses")
    replace_data(path, "events/camera/timestamp", np.empty(0))
    replace_data(path, "events/camera/id", np.empty(0, dtype=int))
    with pytest.raises(InputError, match="no pulse"):
        pulses(path, nwb.settings(frame_pulses_place="events/camera"))
