"""A simulated session written as an NWB file."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from hdmf.backends.hdf5.h5_utils import H5DataIO
from hdmf.common import DynamicTable, VectorData
from pynwb import NWBHDF5IO, NWBFile, TimeSeries
from pynwb.behavior import Position, SpatialSeries
from pynwb.file import Subject
from pynwb.misc import Units
from simulate_camera import Camera
from study_plan import ARENA_SIDE_M, SAMPLE_RATE_HZ, SessionPlan, generator

SPECIES = "Ericamys vagans"
CONTACTS_PER_SHANK = 8
REGIONS = ("medial entorhinal cortex", "presubiculum")


@dataclass(frozen=True)
class SortedUnit:
    """A unit as the file holds it: spike times (k,) [s] and observed intervals (q, 2) [s]."""

    unit: int
    region: str
    spike_times_s: np.ndarray
    observed_s: np.ndarray


def write_nwb(
    path: Path, plan: SessionPlan, camera: Camera, units: Sequence[SortedUnit], *, notes: str, sorting: str
) -> None:
    """Write one session, under a temporary name first so that a file of this name is always whole."""
    nwbfile = _file(plan, notes, sorting)
    _add_tracking(nwbfile, camera)
    _add_pulses(nwbfile, camera)
    _add_arena(nwbfile)
    _add_electrodes(nwbfile)
    _add_units(nwbfile, plan, units)
    for start, stop in plan.handling:
        nwbfile.add_invalid_time_interval(
            start_time=round(start * plan.duration_s, 3), stop_time=round(stop * plan.duration_s, 3)
        )
    path.parent.mkdir(parents=True, exist_ok=True)
    unfinished = path.with_name(f"unfinished_{os.getpid()}_{path.name}")
    try:
        with NWBHDF5IO(str(unfinished), "w") as io:
            io.write(nwbfile)
        unfinished.replace(path)
    finally:
        unfinished.unlink(missing_ok=True)


def _file(plan: SessionPlan, notes: str, sorting: str) -> NWBFile:
    animal = plan.animal
    return NWBFile(
        session_description="Free foraging for scattered seeds in a square arena, in dim light",
        identifier=f"gorse-heath/{plan.session}/{sorting}",
        session_id=plan.session,
        session_start_time=plan.start,
        experimenter=["Quill, Marrow"],
        institution="Gorse Heath Field Station",
        lab="Wayfinding",
        experiment_description="A simulated study: what heath runners' neurons say about their journeys.",
        keywords=["foraging", "simulated"],
        notes=notes,
        subject=Subject(
            subject_id=animal.subject_id,
            species=SPECIES,
            sex=animal.sex,
            age=animal.age,
            weight=f"{animal.weight_kg} kg",
            description=f"Heath runner, {animal.group.replace('_', ' ')}; a simulated animal.",
        ),
    )


def _add_tracking(nwbfile: NWBFile, camera: Camera) -> None:
    front = SpatialSeries(
        name="led_front",
        description="Light at the front of the head, time stamps on the camera's clock",
        data=_packed(camera.front_m),
        timestamps=_packed(camera.frame_time_s),
        unit="meters",
        reference_frame="Origin at the south-west corner of the arena floor, x to the east, y to the north",
        comments="NaN where the light was not seen.",
    )
    back = SpatialSeries(
        name="led_back",
        description="Light at the back of the head, time stamps on the camera's clock",
        data=_packed(camera.back_m),
        timestamps=front,
        unit="meters",
        reference_frame=front.reference_frame,
        comments="NaN where the light was not seen.",
    )
    module = nwbfile.create_processing_module("behavior", "Tracking of the animal, and the arena")
    module.add(Position(name="Position", spatial_series=[front, back]))


def _add_pulses(nwbfile: NWBFile, camera: Camera) -> None:
    nwbfile.add_acquisition(
        TimeSeries(
            name="camera_frame_pulses",
            description="Rising edges of the camera's exposure line, seen by the acquisition system",
            data=_packed(np.ones(camera.pulse_time_s.size, dtype=np.int8)),
            timestamps=_packed(camera.pulse_time_s),
            unit="n.a.",
            comments="One sample for each edge; the value is always 1.",
        )
    )


def _add_arena(nwbfile: NWBFile) -> None:
    corners = np.array([[0, 0], [1, 0], [1, 1], [0, 1]]) * ARENA_SIDE_M
    nwbfile.processing["behavior"].add(
        DynamicTable(
            name="arena",
            description="Corners of the arena floor, counter-clockwise, in the frame of the tracking",
            columns=[
                VectorData(name="x_m", description="East, in metres", data=corners[:, 0]),
                VectorData(name="y_m", description="North, in metres", data=corners[:, 1]),
            ],
        )
    )


def _add_electrodes(nwbfile: NWBFile) -> None:
    device = nwbfile.create_device(name="probe", description="Two-shank silicon probe on a microdrive")
    for shank, region in enumerate(REGIONS):
        group = nwbfile.create_electrode_group(
            name=f"shank_{shank + 1}",
            description=f"{CONTACTS_PER_SHANK} contacts in {region}",
            location=region,
            device=device,
        )
        for _ in range(CONTACTS_PER_SHANK):
            nwbfile.add_electrode(location=region, group=group)


def _add_units(nwbfile: NWBFile, plan: SessionPlan, units: Sequence[SortedUnit]) -> None:
    table = Units(name="units", description="Sorted units", resolution=1 / SAMPLE_RATE_HZ)
    nwbfile.units = table
    table.add_column("region", "Region of the shank that recorded the unit")
    table.add_column("isolation", "Share of the unit's spikes that no neighbouring cluster claims")
    table.add_column("short_interval_share", "Share of intervals between spikes shorter than 3 ms")
    table.add_column("presence_share", "Share of the session's minutes with at least one spike")
    table.add_column("sorting_label", "Judgement of the person who sorted: clear or faint")
    groups = list(nwbfile.electrode_groups.values())
    for unit in units:
        spikes = unit.spike_times_s
        shank = REGIONS.index(unit.region)
        first = shank * CONTACTS_PER_SHANK + unit.unit % (CONTACTS_PER_SHANK - 2)
        intervals = {"obs_intervals": unit.observed_s} if plan.partly_observed else {}
        table.add_unit(
            id=unit.unit,
            spike_times=spikes,
            electrodes=[first, first + 1, first + 2],
            electrode_group=groups[shank],
            region=unit.region,
            isolation=round(float(generator(plan.session, "isolation", unit.unit).uniform(0.9, 0.999)), 3),
            short_interval_share=_short_interval_share(spikes),
            presence_share=_presence_share(spikes, plan.duration_s),
            sorting_label="clear" if spikes.size >= 300 else "faint",
            **intervals,
        )


def _short_interval_share(spike_times_s: np.ndarray) -> float:
    intervals = np.diff(spike_times_s)
    return round(float(np.mean(intervals < 0.003)), 4) if intervals.size else 0.0


def _presence_share(spike_times_s: np.ndarray, duration_s: float) -> float:
    minutes = max(1, int(np.ceil(duration_s / 60)))
    counts, _ = np.histogram(spike_times_s, bins=minutes, range=(0, minutes * 60))
    return round(float(np.mean(counts > 0)), 3)


def _packed(values: np.ndarray) -> H5DataIO:
    """Values to be stored compressed; the byte shuffle halves the size of slowly changing series."""
    return H5DataIO(values, compression="gzip", compression_opts=2, shuffle=True)
