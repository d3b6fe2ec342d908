"""Sorted units: what is refused, what warns, and which units the study keeps."""

from __future__ import annotations

import numpy as np
import pytest

from odograph.errors import InputError
from odograph.recording.digest import unit_digests
from odograph.recording.reader import read_recording

ALL_OBSERVED = [[0.0, 8.0]]


def read(path, settings, **what):
    recording = read_recording(path, settings, **what)
    return recording.units, recording.findings


def refusal(nwb, *parts, once=None, **settings) -> InputError:
    with pytest.raises(InputError) as caught:
        read_recording(nwb.write(nwb.tracking(), *parts, once=once), nwb.settings(**settings))
    assert caught.value.place and caught.value.expected and caught.value.remedy
    return caught.value


def test_no_units(nwb):
    with pytest.raises(InputError, match="no sorted units in the file"):
        read_recording(nwb.write(nwb.tracking()), nwb.settings())


def test_no_spikes(nwb):
    error = refusal(nwb, nwb.units([[], []]))
    assert "no spikes: all 2 units are empty" in error.found


def test_a_table_without_rows_or_without_spike_times(nwb):
    assert "table of units is empty" in refusal(nwb, nwb.units([])).found

    def without_spike_times(nwbfile):
        nwbfile.add_unit_column("depth_mm", "d")
        nwbfile.add_unit(depth_mm=1.0)

    error = refusal(nwb, without_spike_times)
    assert "no spike times" in error.found and "depth_mm" in error.found


def test_empty_units_warn_and_are_left_out(nwb):
    units, findings = read(nwb.write(nwb.tracking(), nwb.units([nwb.spikes(), []])), nwb.settings())
    assert [(unit.kept, unit.reason) for unit in units] == [(True, None), (False, "no spikes")]
    assert "1 unit(s) without spikes: 1" in findings[0]["found"]


def test_a_table_in_a_processing_module_alone_or_chosen(nwb):
    alone = nwb.write(nwb.tracking(), nwb.units(module="ecephys"), name="alone.nwb")
    assert len(read(alone, nwb.settings())[0]) == 2
    both = nwb.write(nwb.tracking(), nwb.units(), nwb.units(module="ecephys", name="second", ids=[5, 6]))
    with pytest.raises(
        InputError, match=r"2 places may hold sorted units: processing/ecephys/second .*units"
    ):
        read_recording(both, nwb.settings())
    chosen, _ = read(both, nwb.settings(units_place="processing/ecephys/second"))
    assert [unit.unit_id for unit in chosen] == [5, 6]


def test_a_place_that_is_no_table_of_units(nwb):
    assert "not a table of units" in refusal(nwb, nwb.units(), units_place="processing/behavior").found


def test_ids_that_repeat(nwb):
    error = refusal(nwb, nwb.units(ids=[4, 4]))
    assert "4" in error.found and error.place == "units/id"


@pytest.mark.parametrize(
    ("change", "found"),
    [
        (lambda times: np.append(times[:-1], np.nan), "1 of 60 spike times are not finite"),
        (lambda times: times[::-1], "out of order 59 time"),
        (lambda times: times * 1000, "milliseconds"),
        (lambda times: times * 30000.5, "sample numbers"),
        (lambda times: np.round(times * 30000), "whole numbers"),
        (lambda times: times - 5.0, "outside the recording"),
        (lambda times: times + 5000.0, "the recording ends at 7.98"),
        (lambda times: times + 100.0, "none of 60 spikes falls within the behaviour"),
    ],
)
def test_spike_times_that_cannot_be_right(nwb, change, found):
    error = refusal(nwb, nwb.units([change(nwb.spikes())], ids=[31]))
    assert found in error.found
    assert "units" in error.place


def test_the_voltage_bounds_the_spikes(nwb):
    error = refusal(nwb, nwb.units([np.append(nwb.spikes(), 12.0)], ids=[31]), nwb.voltage(seconds=10.0))
    assert "1 of 61 spikes lie outside the recording, for instance at 12.000 s" in error.found
    assert error.place == "units id 31" and "acquisition/voltage: 0.000 to 10.000 s" in error.expected


def test_spikes_round_the_behaviour_are_no_error(nwb):
    few = np.append(nwb.spikes(), 9.0)
    _, findings = read(nwb.write(nwb.tracking(), nwb.units([few])), nwb.settings())
    assert [entry["level"] for entry in findings] == ["note"]
    many = np.append(nwb.spikes(), 9 + nwb.spikes())
    _, findings = read(nwb.write(nwb.tracking(), nwb.units([many])), nwb.settings())
    assert [entry["level"] for entry in findings] == ["warn"]
    assert "60 of 120 spikes" in findings[0]["found"]


def test_tracking_on_the_camera_clock_does_not_bound_the_spikes(nwb):
    path = nwb.write(
        nwb.tracking(time_s=nwb.frame_times(start=5000.0)),
        nwb.events(nwb.frame_times(start=1.0)),
        nwb.units([nwb.spikes() + 1]),
    )
    assert read(path, nwb.settings(frame_pulses_place="events/camera"))[1] == ()
    with pytest.raises(InputError, match="none of 60 spikes") as caught:
        read_recording(path, nwb.settings())
    assert "frame_pulses_place" in caught.value.remedy


def test_unsorted_spikes_are_sorted_on_request(nwb):
    path = nwb.write(nwb.tracking(), nwb.units([nwb.spikes()[::-1]]))
    units, findings = read(path, nwb.settings(unsorted_spikes="sort"))
    np.testing.assert_array_equal(units[0].spike_times_s, nwb.spikes())
    assert findings[0]["level"] == "warn" and "59" in findings[0]["found"]


def test_repeated_spikes_warn(nwb):
    times = nwb.spikes()
    times[10] = times[9]
    units, findings = read(nwb.write(nwb.tracking(), nwb.units([times])), nwb.settings())
    assert units[0].spike_times_s.size == 60
    assert "1 spike(s) at the time of the spike before" in findings[0]["found"]


def test_spike_times_in_float32(nwb, replace_data):
    path = nwb.write(nwb.tracking(), nwb.units([nwb.spikes()]))
    replace_data(path, "units/spike_times", nwb.spikes().astype(np.float32))
    assert read(path, nwb.settings())[0][0].spike_times_s.dtype == np.float64
    # IEEE 754 binary32: near 1e5 neighbouring numbers are 2^-7 = 7.8 ms apart.
    replace_data(path, "units/spike_times", (1e5 + nwb.spikes()).astype(np.float32))
    with pytest.raises(InputError, match=r"steps of 0\.00781 s"):
        read_recording(path, nwb.settings(), signals=(), units=[0])


def test_observed_intervals(nwb):
    observed = [[[0.0, 2.0], [4.0, 8.0]], [[0.0, 8.0]]]
    path = nwb.write(nwb.tracking(), nwb.units(observed=observed))
    units, findings = read(path, nwb.settings())
    np.testing.assert_array_equal(units[0].observed_s, observed[0])
    outside = int(np.sum((nwb.spikes(seed=1) > 2) & (nwb.spikes(seed=1) < 4)))
    assert outside > 0
    (warning,) = findings
    assert f"{outside} of 60 spikes lie outside the observed intervals" in warning["found"]


def test_without_observed_intervals_they_are_empty(nwb):
    assert read(nwb.usual(), nwb.settings())[0][0].observed_s.shape == (0, 2)


def test_spikes_at_the_edges_of_observed_intervals_are_inside(nwb):
    times = np.array([0.0, 1.0, 2.0, 4.0, 5.5, 8.0])
    path = nwb.write(nwb.tracking(), nwb.units([times], observed=[[[0.0, 2.0], [4.0, 8.0]]]))
    _, findings = read(path, nwb.settings())
    assert not [entry for entry in findings if "observed" in entry["found"]]


@pytest.mark.parametrize(
    "intervals", [[[2.0, 1.0]], [[0.0, 3.0], [2.0, 8.0]], [[4.0, 8.0], [0.0, 2.0]], [[0.0, np.nan]]]
)
def test_observed_intervals_that_make_no_sense(nwb, intervals):
    error = refusal(nwb, nwb.units([nwb.spikes()], observed=[intervals]))
    assert "obs_intervals" in error.place


def test_an_index_that_does_not_fit(nwb, replace_data):
    path = nwb.usual()
    replace_data(path, "units/spike_times_index", np.array([60, 500], dtype=np.uint16))
    with pytest.raises(InputError, match="the last 500 of 120 entries"):
        read_recording(path, nwb.settings())


COLUMNS = {
    "grade": ["good", "noise", "good"],
    "contamination": [0.01, 0.0, 0.2],
    "checked": [True, False, True],
    "shank": [1, 2, 3],
}


@pytest.mark.parametrize(
    ("conditions", "kept"),
    [
        ([], [0, 1, 2]),
        ([{"column": "grade", "keep": ["good"]}], [0, 2]),
        ([{"column": "contamination", "at_most": 0.05}], [0, 1]),
        ([{"column": "contamination", "at_least": 0.01}], [0, 2]),
        ([{"column": "checked", "keep": [True]}], [0, 2]),
        ([{"column": "shank", "keep": [2, 3]}], [1, 2]),
        ([{"column": "grade", "keep": ["good"]}, {"column": "contamination", "at_most": 0.05}], [0]),
    ],
)
def test_conditions_on_columns(nwb, conditions, kept):
    units = nwb.units([nwb.spikes(seed=k) for k in range(3)], columns=COLUMNS)
    path = nwb.write(nwb.tracking(), units, once="graded units")
    recording = read_recording(path, nwb.settings(unit_filter=conditions))
    assert [unit.unit_id for unit in recording.units if unit.kept] == kept
    assert all(unit.reason for unit in recording.units if not unit.kept)
    assert list(unit_digests(recording)) == kept
    assert len(unit_digests(recording, dropped_too=True)) == 3


def test_a_value_that_is_no_number_passes_no_limit(nwb):
    columns = {"contamination": [np.nan, 0.01]}
    path = nwb.write(nwb.tracking(), nwb.units(columns=columns))
    units, _ = read(path, nwb.settings(unit_filter=[{"column": "contamination", "at_most": 0.05}]))
    assert [unit.kept for unit in units] == [False, True]


@pytest.mark.parametrize(
    ("settings", "found", "expected"),
    [
        ({"unit_filter": [{"column": "grad", "keep": ["good"]}]}, "'grad'", "checked, contamination, grade"),
        ({"region_column": "area"}, "'area'", "checked, contamination, grade"),
        ({"unit_filter": [{"column": "grade", "at_least": 1}]}, "no number", "numbers"),
        ({"unit_filter": [{"column": "grade", "keep": ["superb"]}]}, "none of the 3 units", "superb"),
    ],
)
def test_conditions_that_do_not_fit_the_file(nwb, settings, found, expected):
    units = nwb.units([nwb.spikes(seed=k) for k in range(3)], columns=COLUMNS)
    error = refusal(nwb, units, once="graded units", **settings)
    assert found in error.found and expected in error.expected


def test_regions_from_electrodes_or_a_column(nwb):
    path = nwb.write(
        nwb.tracking(),
        nwb.units(
            [nwb.spikes(seed=k) for k in range(4)],
            electrodes=[[0, 1], [2], [0, 2], [3]],
            columns={"layer": ["deep", "deep", "superficial", "deep"]},
        ),
    )
    units, _ = read(path, nwb.settings())
    assert [unit.region for unit in units] == ["CA1", "CA3", "CA1/CA3", None]
    units, _ = read(path, nwb.settings(region_column="layer"))
    assert [unit.region for unit in units] == ["deep", "deep", "superficial", "deep"]


def test_two_hundred_units(nwb):
    trains = [nwb.spikes(200, seed=k) for k in range(200)]
    path = nwb.write(nwb.tracking(), nwb.units(trains, ids=list(range(1000, 800, -1))))
    units, _ = read(path, nwb.settings())
    assert [unit.unit_id for unit in units] == list(range(801, 1001))
    np.testing.assert_array_equal(units[-1].spike_times_s, trains[0])
