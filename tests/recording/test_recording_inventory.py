"""The inventory: what a session's file holds, as plain values."""

from __future__ import annotations

import json

import numpy as np
import pytest

from odograph.errors import InputError
from odograph.recording.digest import signal_digests, unit_digests
from odograph.recording.inventory import failed_inventory, make_inventory
from odograph.recording.model import finding, verdict_of
from odograph.recording.reader import read_recording


def test_the_inventory_of_a_recording(nwb):
    data = nwb.walk()
    data[:40] = np.nan
    path = nwb.write(
        nwb.subject(),
        nwb.tracking(data=data),
        nwb.direction(np.ones(400)),
        nwb.arena([[0, 0], [1, 0], [0, 1]]),
        nwb.invalid_times((1.0, 2.0), (5.0, 7.5)),
        nwb.units(
            [nwb.spikes(), nwb.spikes(seed=4)],
            ids=[9, 2],
            columns={"grade": ["a", "b"], "score": [np.nan, 1.5]},
        ),
        session_id="s-9",
    )
    recording = read_recording(path, nwb.settings(unit_filter=[{"column": "grade", "keep": ["b"]}]))
    inventory = make_inventory("moor_9", recording)
    json.dumps(inventory, allow_nan=False)
    assert inventory["session"] == "moor_9" and inventory["verdict"] == "pass"
    assert inventory["file"]["name"] == "recording.nwb" and inventory["file"]["session_id"] == "s-9"
    assert inventory["subject"] == {
        "subject_id": "heather",
        "species": "Microtus agrestis",
        "sex": "F",
        "age": "P90D",
    }
    signals = {entry["signal"]: entry for entry in inventory["signals"]}
    assert {name: entry["digest"] for name, entry in signals.items()} == signal_digests(recording)
    tracking = signals["tracking"]
    assert tracking["samples"] == 400 and tracking["lost_share"] == pytest.approx(0.1)
    assert tracking["median_step_s"] == pytest.approx(0.02) and tracking["last_s"] == pytest.approx(7.98)
    assert signals["arena"]["samples"] == 3
    assert (signals["invalid_times"]["first_s"], signals["invalid_times"]["last_s"]) == (1.0, 7.5)
    first, second = inventory["units"]
    assert (first["unit"], first["kept"], first["reason"]) == (2, True, None)
    assert (second["unit"], second["kept"]) == (9, False) and "grade is a" in second["reason"]
    assert second["attributes"] == {"grade": "a", "score": None}
    every = unit_digests(recording, dropped_too=True)
    assert {entry["unit"]: entry["digest"] for entry in inventory["units"]} == every
    assert inventory["arena"] == {"corners_m": [[0.0, 0.0], [1.0, 0.0], [0.0, 1.0]]}


def test_mean_rates_are_spikes_over_observed_time(nwb):
    times = np.arange(0.05, 8.0, 0.1)
    path = nwb.write(
        nwb.tracking(), nwb.units([times, times], observed=[[[0.0, 2.0], [4.0, 6.0]], [[0.0, 8.0]]])
    )
    rates = [
        entry["mean_rate_hz"] for entry in make_inventory("s", read_recording(path, nwb.settings()))["units"]
    ]
    # 10 spikes a second by construction.
    np.testing.assert_allclose(rates, [10.0, 10.0])


def test_mean_rates_without_observed_intervals_are_those_during_the_behaviour(nwb):
    path = nwb.write(nwb.tracking(), nwb.units([np.append(np.arange(0.05, 7.98, 0.1), [50.0, 60.0])]))
    unit = make_inventory("s", read_recording(path, nwb.settings()))["units"][0]
    assert unit["n_spikes"] == 82 and unit["mean_rate_hz"] == pytest.approx(80 / 7.98)


def test_a_failed_session_has_the_same_shape(nwb):
    sound = make_inventory("s", read_recording(nwb.usual(), nwb.settings()))
    with pytest.raises(InputError) as caught:
        read_recording(nwb.folder / "gone.nwb", nwb.settings())
    failed = failed_inventory("s", caught.value)
    assert failed.keys() == sound.keys()
    assert (
        failed["file"].keys() == sound["file"].keys() and failed["subject"].keys() == sound["subject"].keys()
    )
    assert failed["verdict"] == "fail" and failed["file"]["name"] == "gone.nwb"
    assert failed["findings"][0]["level"] == "fail" and failed["findings"][0]["remedy"]


def test_verdicts():
    note, warn, fail = (finding(level, "x") for level in ("note", "warn", "fail"))
    assert verdict_of([]) == "pass" and verdict_of([note]) == "pass"
    assert verdict_of([note, warn]) == "warn" and verdict_of([warn, fail, note]) == "fail"
