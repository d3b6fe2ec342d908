"""The small valid recordings that the fuzzer damages, and the settings to read them with.

The files lie packed under `seeds/`, so that a seed damages the same bytes everywhere. This module as a
command makes them anew; after that, seeds that damage bytes have to be found again.
"""

from __future__ import annotations

import gzip
import tempfile
import warnings
from datetime import UTC, datetime
from functools import cache
from pathlib import Path
from typing import Any

import h5py
import numpy as np

SEEDS = Path(__file__).with_name("seeds")
N_SAMPLES, STEP_S = 200, 0.02
POSITION = "processing/behavior/Position"
POINTS = {"position_place": POSITION, "front_point": "head", "back_point": "tail"}
#: By recording: the settings it is read with.
SETTINGS: dict[str, list[dict[str, Any]]] = {
    "full": [
        POINTS | {"frame_pulses_place": "events/camera", "region_column": None},
        POINTS
        | {
            "frame_pulses_place": "events/camera",
            "frame_pulses_label": "frame",
            "unit_filter": [{"column": "quality", "keep": ["good", "fair"]}],
        },
        POINTS
        | {
            "frame_pulses_place": "acquisition/line",
            "covariates": [{"name": "heart_rate", "place": "processing/behavior/heart", "clock": "camera"}],
        },
        POINTS
        | {
            "frame_pulses_place": "acquisition/gates",
            "unsorted_spikes": "sort",
            "missing_links": "warn",
            "unit_filter": [{"column": "isolation", "at_least": 1.5}],
            "region_column": "quality",
        },
        POINTS | {"frame_pulses_place": "acquisition/notes", "frame_pulses_label": "frame"},
        POINTS | {"frame_pulses_place": "acquisition/edges", "frame_pulses_edge": "falling"},
    ],
    "plain": [{}, {"lost_value": "zero", "missing_links": "warn"}],
    "latest": [{}],
    "specified": [{}],
}


@cache
def base(name: str) -> bytes:
    """The bytes of a recording of `SETTINGS`."""
    return gzip.decompress((SEEDS / f"{name}.nwb.gz").read_bytes())


def _frame_times() -> np.ndarray:
    return np.arange(N_SAMPLES) * STEP_S


def _walk(shift: float = 0.0) -> np.ndarray:
    phase = np.arange(N_SAMPLES) * 0.03
    return np.stack([0.5 + 0.4 * np.cos(phase), 0.5 + 0.4 * np.sin(1.3 * phase)], axis=1) + shift


def _new_file() -> Any:
    from pynwb import NWBFile
    from pynwb.file import Subject

    made = NWBFile(
        "a walk on the moor", "moor-7", datetime(2026, 3, 4, 9, 30, tzinfo=UTC), session_id="moor-7"
    )
    made.subject = Subject(subject_id="heather", species="Microtus agrestis", sex="F", age="P90D")
    made.create_processing_module("behavior", "what the animal did")
    return made


def _add_points(nwbfile: Any, names: tuple[str, ...], **writing: Any) -> None:
    from hdmf.backends.hdf5.h5_utils import H5DataIO
    from pynwb.behavior import Position, SpatialSeries

    series: list[Any] = []
    for number, name in enumerate(names):
        data = H5DataIO(_walk(0.01 * number), **writing)
        times = series[0] if series else _frame_times()
        series.append(
            SpatialSeries(name, data, reference_frame="south-west", timestamps=times, unit="meters")
        )
    nwbfile.processing["behavior"].add(Position(name="Position", spatial_series=series))


def _add_units(nwbfile: Any, n_units: int, *, electrodes: bool) -> None:
    if electrodes:
        device = nwbfile.create_device(name="probe")
        group = nwbfile.create_electrode_group(name="shank", description="s", location="CA1", device=device)
        for location in ("CA1", "CA3", "unknown"):
            nwbfile.add_electrode(location=location, group=group)
    nwbfile.add_unit_column("quality", "how well it is isolated")
    nwbfile.add_unit_column("isolation", "distance of its cluster")
    rng = np.random.default_rng(4)
    for unit in range(n_units):
        more = {"electrodes": [unit % 3], "obs_intervals": [[0.0, 1.5], [1.6, 3.9]]} if electrodes else {}
        times = np.sort(rng.uniform(0, N_SAMPLES * STEP_S - STEP_S, 30 + unit))
        quality = ("good", "fair", "noise")[unit % 3]
        nwbfile.add_unit(id=unit + 1, spike_times=times, quality=quality, isolation=1.0 + unit, **more)


def _full() -> Any:
    from hdmf.backends.hdf5.h5_utils import H5DataIO
    from hdmf.common import DynamicTable, VectorData
    from pynwb import TimeSeries
    from pynwb.behavior import CompassDirection, SpatialSeries
    from pynwb.ecephys import ElectricalSeries
    from pynwb.event import EventsTable
    from pynwb.misc import AnnotationSeries, IntervalSeries

    nwbfile, times = _new_file(), _frame_times()
    _add_points(nwbfile, ("head", "tail"))
    _add_units(nwbfile, 4, electrodes=True)
    behaviour = nwbfile.processing["behavior"]
    angle = np.mod(np.arange(N_SAMPLES) * 0.05, 2 * np.pi)
    bearing = SpatialSeries("bearing", angle, reference_frame="east", timestamps=times, unit="radians")
    behaviour.add(CompassDirection(name="CompassDirection", spatial_series=bearing))
    behaviour.add(TimeSeries("heart", np.sin(times), unit="Hz", timestamps=times))
    corners = [VectorData(n, n, data=v) for n, v in (("x_m", [0.0, 1, 1, 0]), ("y_m", [0.0, 0, 1, 1]))]
    behaviour.add(DynamicTable(name="arena", description="corners", columns=corners))
    camera = EventsTable(name="camera", description="pulses of the camera")
    camera.add_column(name="label", description="kind")
    for number, time in enumerate(times):
        camera.add_row(timestamp=float(time), label="frame" if number % 9 else "lick")
    nwbfile.add_events_table(camera)
    line = H5DataIO((np.arange(1000) % 5 < 2).astype(np.int16), compression="gzip", chunks=(100,))
    nwbfile.add_acquisition(TimeSeries("line", line, unit="V", rate=250.0, starting_time=0.0))
    levels = (np.arange(N_SAMPLES) % 2).astype(np.int8)
    nwbfile.add_acquisition(TimeSeries("edges", levels, unit="V", timestamps=times))
    nwbfile.add_acquisition(IntervalSeries("gates", 2 * levels - 1, timestamps=times))
    nwbfile.add_acquisition(AnnotationSeries("notes", ["frame"] * N_SAMPLES, timestamps=times))
    voltage = H5DataIO(np.ones((4000, 1), np.int16), compression="gzip", fletcher32=True, chunks=(1000, 1))
    region = nwbfile.create_electrode_table_region([0], "channel")
    nwbfile.add_acquisition(ElectricalSeries("voltage", voltage, region, rate=1000.0, starting_time=0.0))
    nwbfile.add_invalid_time_interval(start_time=0.5, stop_time=0.6)
    return nwbfile


def _plain() -> Any:
    nwbfile = _new_file()
    _add_points(nwbfile, ("head",), compression="gzip", chunks=(50, 2), shuffle=True)
    _add_units(nwbfile, 2, electrodes=False)
    return nwbfile


def make_bases() -> None:
    """Write the packed recordings."""
    from pynwb import NWBHDF5IO

    for name in SETTINGS:
        with tempfile.TemporaryDirectory() as folder, warnings.catch_warnings():
            warnings.simplefilter("ignore")
            path = Path(folder) / "base.nwb"
            # The newest kinds of headers and indexes carry checksums.
            version = "latest" if name == "latest" else "earliest"
            with h5py.File(path, "w", libver=version) as file, NWBHDF5IO(file=file, mode="w") as io:
                io.write(_full() if name == "full" else _plain(), cache_spec=name == "specified")
            (SEEDS / f"{name}.nwb.gz").write_bytes(gzip.compress(path.read_bytes(), mtime=0))


if __name__ == "__main__":
    make_bases()
