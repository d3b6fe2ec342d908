"""Small NWB files for the tests of the recording stage, put together from parts by pynwb."""

from __future__ import annotations

import warnings
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, ClassVar

import h5py
import numpy as np
import pytest
from hdmf.common import DynamicTable, VectorData
from pynwb import NWBHDF5IO, NWBFile, TimeSeries
from pynwb.behavior import CompassDirection, Position, SpatialSeries
from pynwb.ecephys import ElectricalSeries
from pynwb.event import EventsTable
from pynwb.file import Subject
from pynwb.misc import Units

from odograph.settings.intake import IntakeSettings

Part = Callable[[NWBFile], None]

N_SAMPLES = 400
STEP_S = 0.02


def frame_times(n: int = N_SAMPLES, start: float = 0.0) -> np.ndarray:
    """Time stamps of a camera at 50 Hz, in seconds."""
    return start + np.arange(n) * STEP_S


def walk(n: int = N_SAMPLES, seed: int = 1) -> np.ndarray:
    """A path within a square of 1 m, shape (n, 2)."""
    phase = np.arange(n) * 0.01 + seed
    return np.stack([0.5 + 0.4 * np.cos(phase), 0.5 + 0.4 * np.sin(1.3 * phase)], axis=1)


def spikes(n: int = 60, seed: int = 0, stop: float = N_SAMPLES * STEP_S) -> np.ndarray:
    """Sorted random spike times in seconds."""
    return np.sort(np.random.default_rng(seed).uniform(0, stop - STEP_S, n))


class Parts:
    """Parts of a recording, and the writing of a file from them."""

    frame_times = staticmethod(frame_times)
    walk = staticmethod(walk)
    spikes = staticmethod(spikes)
    _made: ClassVar[dict[str | None, bytes]] = {}

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def write(
        self,
        *parts: Part,
        name: str = "recording.nwb",
        specification: bool = False,
        once: str | None = None,
        **facts: Any,
    ) -> Path:
        """Write a file that holds these parts.

        It is written faster without the specification in it. A file that several tests start from is named
        by `once`, made by the first of them and copied by the others.
        """
        path = self.folder / name
        if once in self._made:
            path.write_bytes(self._made[once])
            return path
        facts = {
            "session_description": "a walk on the moor",
            "identifier": "moor-1",
            "session_start_time": datetime(2026, 3, 4, 9, 30, tzinfo=UTC),
            **facts,
        }
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            nwbfile = NWBFile(**facts)
            for part in parts:
                part(nwbfile)
            with NWBHDF5IO(path, "w") as io:
                io.write(nwbfile, cache_spec=specification)
        if once is not None:
            self._made[once] = path.read_bytes()
        return path

    def usual(self, **tracking: Any) -> Path:
        """A file with one tracked point and two units."""
        return self.write(self.tracking(**tracking), self.units(), once=None if tracking else "usual")

    @staticmethod
    def settings(**values: Any) -> IntakeSettings:
        """Settings of intake."""
        return IntakeSettings(**values)

    @staticmethod
    def subject() -> Part:
        def add(nwbfile: NWBFile) -> None:
            nwbfile.subject = Subject(subject_id="heather", species="Microtus agrestis", sex="F", age="P90D")

        return add

    @staticmethod
    def series(name: str, data: Any, time_s: Any = None, cls: type = SpatialSeries, **more: Any) -> Any:
        """A series; without time stamps it gets a rate of 50 Hz."""
        if time_s is not None:
            more["timestamps"] = time_s
        else:
            more = {"rate": 1 / STEP_S, "starting_time": 0.0, **more}
        if issubclass(cls, SpatialSeries):
            more.setdefault("reference_frame", "south-west corner of the arena")
        return cls(name=name, data=data, **more)

    @classmethod
    def tracking(
        cls,
        points: Sequence[str] = ("head",),
        data: Any = None,
        time_s: Any = None,
        holder: str = "Position",
        module: str = "behavior",
        **series: Any,
    ) -> Part:
        """Tracked points; the later ones share the time stamps of the first by a link."""

        def add(nwbfile: NWBFile) -> None:
            stamps = frame_times() if time_s is None else time_s
            made = []
            for number, name in enumerate(points):
                values = walk(len(stamps)) + 0.01 * number if data is None else data
                made.append(cls.series(name, values, made[0] if made else stamps, **series))
            _module(nwbfile, module).add(Position(name=holder, spatial_series=made))

        return add

    @classmethod
    def direction(cls, angle: Any, unit: str = "radians", name: str = "CompassDirection") -> Part:
        def add(nwbfile: NWBFile) -> None:
            series = cls.series("bearing", angle, frame_times(len(angle)), unit=unit)
            _module(nwbfile, "behavior").add(CompassDirection(name=name, spatial_series=series))

        return add

    @staticmethod
    def units(
        trains: Sequence[Any] | None = None,
        ids: Sequence[int] | None = None,
        observed: Sequence[Any] | None = None,
        columns: dict[str, Sequence[Any]] | None = None,
        module: str | None = None,
        name: str = "units",
        electrodes: Sequence[Sequence[int]] | None = None,
    ) -> Part:
        """A table of units."""

        def add(nwbfile: NWBFile) -> None:
            times = [spikes(seed=1), spikes(seed=2)] if trains is None else trains
            table = Units(name=name, description="sorted units", resolution=1 / 30000)
            if electrodes is not None:
                _add_electrodes(nwbfile)
                table = Units(
                    name=name,
                    description="sorted units",
                    resolution=1 / 30000,
                    electrode_table=nwbfile.electrodes,
                )
            for column in columns or {}:
                table.add_column(name=column, description=column)
            for row, train in enumerate(times):
                more: dict[str, Any] = {key: values[row] for key, values in (columns or {}).items()}
                if observed is not None:
                    more["obs_intervals"] = observed[row]
                if electrodes is not None:
                    more["electrodes"] = electrodes[row]
                table.add_unit(spike_times=train, id=ids[row] if ids else row, **more)
            if module is None:
                nwbfile.units = table
            else:
                _module(nwbfile, module).add(table)

        return add

    @staticmethod
    def acquisition(thing: Any) -> Part:
        def add(nwbfile: NWBFile) -> None:
            nwbfile.add_acquisition(thing)

        return add

    @staticmethod
    def processing(thing: Any, module: str = "behavior") -> Part:
        def add(nwbfile: NWBFile) -> None:
            _module(nwbfile, module).add(thing)

        return add

    @staticmethod
    def events(times: Any, name: str = "camera", **columns: Sequence[Any]) -> Part:
        """A core table of events."""

        def add(nwbfile: NWBFile) -> None:
            table = EventsTable(name=name, description="pulses of the camera")
            for column in columns:
                if column != "annotation":
                    table.add_column(name=column, description=column)
            for row, time in enumerate(times):
                table.add_row(timestamp=float(time), **{key: values[row] for key, values in columns.items()})
            nwbfile.add_events_table(table)

        return add

    @staticmethod
    def arena(corners: Any, name: str = "arena") -> Part:
        def add(nwbfile: NWBFile) -> None:
            x, y = np.asarray(corners, dtype=float).T
            columns = [VectorData(name=k, description=k, data=v) for k, v in (("x_m", x), ("y_m", y))]
            _module(nwbfile, "behavior").add(DynamicTable(name=name, description="corners", columns=columns))

        return add

    @staticmethod
    def invalid_times(*intervals: tuple[float, float]) -> Part:
        def add(nwbfile: NWBFile) -> None:
            for start, stop in intervals:
                nwbfile.add_invalid_time_interval(start_time=start, stop_time=stop)

        return add

    @staticmethod
    def voltage(seconds: float, rate: float = 1000.0, start: float = 0.0) -> Part:
        """A raw recording of one channel, compressed and with checksums."""
        from hdmf.backends.hdf5.h5_utils import H5DataIO

        def add(nwbfile: NWBFile) -> None:
            region = _add_electrodes(nwbfile)
            data = np.zeros((int(seconds * rate) + 1, 1), dtype=np.int16)
            data[::3] = 7
            nwbfile.add_acquisition(
                ElectricalSeries(
                    name="voltage",
                    data=H5DataIO(data, compression="gzip", fletcher32=True, chunks=(len(data), 1)),
                    electrodes=region,
                    rate=rate,
                    starting_time=start,
                )
            )

        return add

    @staticmethod
    def time_series(name: str, data: Any, time_s: Any = None, **more: Any) -> TimeSeries:
        """A plain TimeSeries; without time stamps it gets the rate that is given."""
        if time_s is not None:
            more["timestamps"] = time_s
        return TimeSeries(name=name, data=data, **{"unit": "n/a", **more})


def _module(nwbfile: NWBFile, name: str) -> Any:
    return nwbfile.processing.get(name) or nwbfile.create_processing_module(name=name, description=name)


def _add_electrodes(nwbfile: NWBFile) -> Any:
    if nwbfile.electrodes is None:
        device = nwbfile.create_device(name="probe", description="probe")
        group = nwbfile.create_electrode_group(name="shank", description="s", location="CA1", device=device)
        for location in ("CA1", "CA1", "CA3", "unknown"):
            nwbfile.add_electrode(location=location, group=group)
    return nwbfile.create_electrode_table_region([0], "channel")


def replace_data(path: Path, place: str, values: Any) -> None:
    """Put other numbers in the place of a data set, as a careless writer would."""
    with h5py.File(path, "r+") as file:
        kept = dict(file[place].attrs)
        del file[place]
        made = file.create_dataset(place, data=values)
        for key, value in kept.items():
            made.attrs[key] = value


@pytest.fixture
def nwb(tmp_path: Path) -> Parts:
    """Parts of recordings, written into a folder of this test."""
    return Parts(tmp_path)


@pytest.fixture(name="replace_data")
def _replace_data() -> Callable[[Path, str, Any], None]:
    return replace_data
