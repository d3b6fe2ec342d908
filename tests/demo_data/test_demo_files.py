"""The NWB files: conformant, laid out as promised, the same on every machine, made only when needed."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys

import h5py
import numpy as np
import pytest
from make_recordings import is_current, main, simulate_session
from nwbinspector import Importance, inspect_nwbfile
from pynwb import NWBHDF5IO, validate
from resort import CHANGED_SHARE, resort_units, sorted_units
from study_plan import plans, sessions_table
from truth_table import read_truth

PLACE = "processing/behavior/Position"


def _complaints(path):
    """Messages of the NWB inspector at the levels that a shared file should not have."""
    return [
        message.check_function_name
        for message in inspect_nwbfile(nwbfile_path=path)
        if message.importance.value >= Importance.BEST_PRACTICE_VIOLATION.value
    ]


@pytest.mark.parametrize("stem", ["bracken_2", "teasel_2", "bracken_2_resorted"])
def test_files_conform_to_the_standard(small_files, stem):
    """The format's own validator (pynwb) and its inspector (nwbinspector)."""
    assert validate(path=small_files[stem]) == []
    assert _complaints(small_files[stem]) == []


def test_the_inspector_would_have_complained(small_files, tmp_path):
    damaged = tmp_path / "damaged.nwb"
    shutil.copy(small_files["bracken_2"], damaged)
    with h5py.File(damaged, "r+") as file:
        file["units/spike_times"][:] = file["units/spike_times"][:][::-1]
    assert "check_ascending_spike_times" in _complaints(damaged)


def test_files_hold_what_was_simulated(small_files):
    (plan,) = plans(["bracken_2"], minutes=1, units=6)
    session = simulate_session(plan)
    with NWBHDF5IO(small_files["bracken_2"], "r") as io:
        nwbfile = io.read()
        position = nwbfile.processing["behavior"]["Position"]
        front, back = position["led_front"], position["led_back"]
        assert np.array_equal(front.data[:], session.camera.front_m, equal_nan=True)
        assert np.array_equal(back.data[:], session.camera.back_m, equal_nan=True)
        assert np.array_equal(front.timestamps[:], session.camera.frame_time_s)
        assert np.array_equal(back.timestamps[:], front.timestamps[:])
        assert front.unit == back.unit == "meters"
        pulses = nwbfile.acquisition["camera_frame_pulses"]
        assert np.array_equal(pulses.timestamps[:], session.camera.pulse_time_s)
        assert set(pulses.data[:]) == {1}
        arena = nwbfile.processing["behavior"]["arena"]
        assert arena["x_m"][:].tolist() == pytest.approx([0, 1.1, 1.1, 0])
        assert arena["y_m"][:].tolist() == pytest.approx([0, 0, 1.1, 1.1])
        assert nwbfile.session_id == "bracken_2"
        assert nwbfile.subject.subject_id == "bracken"
        assert len(nwbfile.invalid_times) == 2
        units = nwbfile.units
        assert list(units.id[:]) == [truth.unit for truth in session.truths]
        assert list(units["region"][:]) == [truth.region for truth in session.truths]
        for row, spikes in enumerate(session.spike_times_s):
            assert np.array_equal(units["spike_times"][row], spikes)
        assert {"isolation", "short_interval_share", "presence_share", "electrodes"} <= set(units.colnames)


def test_second_point_shares_the_first_ones_time_stamps(small_files):
    with h5py.File(small_files["bracken_2"], "r") as file:
        link = file[PLACE]["led_back"].get("timestamps", getlink=True)
        assert isinstance(link, h5py.SoftLink)
        assert link.path == f"/{PLACE}/led_front/timestamps"


def test_partly_observed_units_have_no_spike_outside(small_files):
    with NWBHDF5IO(small_files["teasel_2"], "r") as io:
        units = io.read().units
        for row in range(len(units.id)):
            observed, spikes = units["obs_intervals"][row], units["spike_times"][row]
            inside = (spikes[:, None] >= observed[:, 0]) & (spikes[:, None] <= observed[:, 1])
            assert inside.any(axis=1).all()


def test_some_units_of_the_partly_observed_session_have_a_hole():
    (plan,) = plans(["teasel_2"])
    session = simulate_session(plan)
    units = sorted_units(plan, session.truths, session.spike_times_s)
    assert 3 <= sum(len(unit.observed_s) == 2 for unit in units) <= 15


def test_second_sorting_changes_four_units_and_nothing_else(small_files):
    (plan,) = plans(["bracken_2"], minutes=1, units=6)
    session = simulate_session(plan)
    first = sorted_units(plan, session.truths, session.spike_times_s)
    second, changes = resort_units(plan, first)
    old = {unit.unit: unit.spike_times_s for unit in first}
    new = {unit.unit: unit.spike_times_s for unit in second}
    touched = {*changes.merged, changes.split, changes.changed}
    assert len(touched) == 4
    assert set(new) - set(old) == {changes.merged_into, *changes.split_into}
    assert set(old) - set(new) == {*changes.merged, changes.split}
    for unit in set(old) - touched:
        assert np.array_equal(old[unit], new[unit])
    assert set(changes.to_refit) == set(new) - (set(old) - touched)
    merged = np.concatenate([old[unit] for unit in changes.merged])
    assert set(new[changes.merged_into]) <= set(merged)
    assert len(new[changes.merged_into]) > 0.95 * merged.size
    halves = np.concatenate([new[unit] for unit in changes.split_into])
    assert np.array_equal(np.sort(halves), old[changes.split])
    kept = np.isin(old[changes.changed], new[changes.changed]).mean()
    assert 1 - kept == pytest.approx(CHANGED_SHARE, abs=0.02)

    with NWBHDF5IO(small_files["bracken_2_resorted"], "r") as io:
        units = io.read().units
        assert {int(unit): row for row, unit in enumerate(units.id[:])}.keys() == new.keys()
        for row, unit in enumerate(units.id[:]):
            assert np.array_equal(units["spike_times"][row], new[int(unit)])


def test_second_sorting_has_the_same_signals_under_new_identities(small_files):
    def read(path):
        with h5py.File(path, "r") as file:
            signals = [
                file[f"{PLACE}/led_front/data"][:],
                file[f"{PLACE}/led_back/data"][:],
                file[f"{PLACE}/led_front/timestamps"][:],
                file["acquisition/camera_frame_pulses/timestamps"][:],
            ]
            names = [file.attrs["object_id"], file["units"].attrs["object_id"], file["identifier"][()]]
            return signals, names, file["file_create_date"][0]

    signals, names, created = read(small_files["bracken_2"])
    again, other_names, created_again = read(small_files["bracken_2_resorted"])
    for one, two in zip(signals, again, strict=True):
        assert np.array_equal(one, two, equal_nan=True)
    assert not set(names) & set(other_names)
    assert created != created_again


DIGEST_OF_A_SESSION = """
import hashlib, sys
sys.path.insert(0, sys.argv[1])
from make_recordings import simulate_session
from study_plan import plans
session = simulate_session(plans(["teasel_1"], minutes=2, units=7)[0])
digest = hashlib.sha256()
camera = session.camera
tracking = (camera.frame_time_s, camera.front_m, camera.back_m, camera.pulse_time_s)
for values in (*tracking, *session.spike_times_s):
    digest.update(values.astype("<f8").tobytes())
print(digest.hexdigest())
"""


def test_contents_do_not_depend_on_the_processor(root):
    """The same contents when numpy may not use vector instructions, which round differently."""
    features = np._core._multiarray_umath.__cpu_features__
    dispatched = np._core._multiarray_umath.__cpu_dispatch__
    usable = [name for name in dispatched if features.get(name)]
    digests = set()
    for disabled in ("", " ".join(usable)):
        environment = {**os.environ, "NPY_DISABLE_CPU_FEATURES": disabled, "OPENBLAS_NUM_THREADS": "1"}
        command = [sys.executable, "-c", DIGEST_OF_A_SESSION, str(root / "demo_data")]
        digests.add(subprocess.check_output(command, env=environment, text=True).strip())
    assert len(digests) == 1


def test_files_are_made_only_when_they_are_not_current(tmp_path, capsys):
    size = ["--sessions", "bracken_1", "--minutes", "0.5", "--units", "4", "--out", str(tmp_path)]
    path = tmp_path / "bracken_1.nwb"
    (plan,) = plans(["bracken_1"], minutes=0.5, units=4)
    assert main(size) == 0
    assert is_current(path, plan)
    before = path.stat().st_mtime_ns
    assert main(size) == 0
    assert "there already" in capsys.readouterr().out
    assert path.stat().st_mtime_ns == before
    path.write_bytes(path.read_bytes()[:2000])
    assert not is_current(path, plan)
    assert main(size) == 0
    assert is_current(path, plan)
    assert not is_current(path, plans(["bracken_1"], minutes=0.5, units=5)[0])
    assert sorted(file.name for file in tmp_path.iterdir()) == ["bracken_1.nwb", "clocks.tsv", "truth.tsv"]


def test_truth_keeps_the_sessions_that_have_a_recording(small_files):
    folder = small_files["bracken_2"].parent
    rows = read_truth(folder / "truth.tsv")
    assert {row["session"] for row in rows} == {"bracken_2", "teasel_2"}
    assert len(rows) == 12
    assert [row["session"] for row in read_truth(folder / "clocks.tsv")] == ["bracken_2", "teasel_2"]
    assert rows == sorted(rows, key=lambda row: (row["session"], int(row["unit"])))


def test_bad_requests_end_with_a_message(tmp_path, capsys):
    assert main(["--sessions", "bramble_1", "--out", str(tmp_path)]) == 2
    assert "the study has bracken_1" in capsys.readouterr().err
    assert main(["--resort", "bracken_1", "--units", "3", "--out", str(tmp_path)]) == 2
    assert "4 or more" in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []


def test_sessions_tables_are_the_study(root):
    table = sessions_table()
    assert (root / "demo_data" / "sessions.tsv").read_text(encoding="utf-8") == table
    assert (root / "config" / "sessions.tsv").read_text(encoding="utf-8") == table
