"""Sorted units: spike times that can be trusted, their columns, and which of them the study keeps."""

from __future__ import annotations

from collections import Counter
from collections.abc import Collection
from typing import Any

import numpy as np

from odograph.errors import printable
from odograph.recording.choosing import choose_one
from odograph.recording.model import Scalar, Unit
from odograph.recording.opening import OpenRecording
from odograph.recording.ragged import read_ragged, row_ends
from odograph.settings.intake import IntakeSettings, UnitCondition

STRUCTURAL = ("spike_times", "obs_intervals", "electrodes", "electrode_group")
COARSEST_SPIKE_S = 1e-3
WHOLE_NUMBERS_FROM = 20


def unit_tables(opened: OpenRecording) -> dict[str, Any]:
    """Tables of sorted units, wherever they are in the file."""
    from pynwb.misc import Units

    return {place: thing for place, thing in opened.places.items() if isinstance(thing, Units)}


def read_units(
    opened: OpenRecording, settings: IntakeSettings, wanted: Collection[int] | None = None
) -> tuple[Unit, ...]:
    """The sorted units, by id.

    Parameters
    ----------
    opened : OpenRecording
        The file; findings are added to it.
    settings : IntakeSettings
        `units_place`, `unit_filter`, `region_column`, `unsorted_spikes` are used.
    wanted : collection of int, optional
        Ids to read; only their spikes are read. None reads all.

    Raises
    ------
    InputError
        No units, no spikes, ids that repeat, spike times that are not finite, not seconds or out of order,
        a filter on a column that is not there, a filter that no unit passes.
    """
    tables = unit_tables(opened)
    place = choose_one(opened, "sorted units", "units_place", settings.units_place, tables)
    if place not in tables:
        raise opened.refuse(
            f"this is not a table of units but: {type(opened.places[place]).__name__}",
            place=place,
            expected="a Units table",
            remedy="correct intake.units_place; `odograph look FILE` lists what the file holds",
        )
    table = tables[place]
    rows = _rows(opened, table, place, wanted)
    columns = scalar_columns(opened, table, place)
    regions = _regions(opened, table, place, settings, columns)
    spikes, observed = _ragged_columns(opened, table, place, list(rows.values()))
    units = []
    for unit_id, row in sorted(rows.items()):
        attributes = {name: values[row] for name, values in columns.items()}
        times = _spike_times(opened, spikes[row], f"{place} id {unit_id}", settings)
        intervals = _observed(opened, observed.get(row), times, f"{place} id {unit_id}")
        reason = _why_left_out(opened, place, attributes, columns, settings.unit_filter)
        reason = reason or (None if times.size else "no spikes")
        units.append(Unit(unit_id, times, intervals, attributes, regions.get(row), reason is None, reason))
    _check_together(opened, place, units, settings, all_read=wanted is None)
    return tuple(units)


def _rows(opened: OpenRecording, table: Any, place: str, wanted: Collection[int] | None) -> dict[int, int]:
    stored = opened.array(table.id.data, f"{place}/id")
    if stored.size and (stored.ndim != 1 or stored.dtype.kind not in "iu"):
        raise opened.refuse(
            f"ids of shape {stored.shape} and type {stored.dtype}",
            place=f"{place}/id",
            expected="whole numbers, one for each unit",
            remedy="number the units anew",
        )
    ids = [int(value) for value in stored.ravel()]
    if not ids:
        raise opened.refuse(
            "the table of units is empty",
            place=place,
            expected="sorted units",
            remedy="write the units of the spike sorting into the file",
        )
    repeated = sorted(unit_id for unit_id, count in Counter(ids).items() if count > 1)
    if repeated:
        raise opened.refuse(
            f"ids that occur more than once: {', '.join(map(str, repeated[:8]))}",
            place=f"{place}/id",
            expected="an id of its own for every unit",
            remedy="number the units anew",
        )
    rows = {unit_id: row for row, unit_id in enumerate(ids)}
    if wanted is None:
        return rows
    absent = sorted(set(wanted) - rows.keys())
    if absent:
        raise opened.refuse(
            f"no unit with the id {', '.join(map(str, absent[:8]))}",
            place=f"{place}/id",
            expected="the units that were there when the run was planned",
            remedy="run the workflow again; it plans anew from the file as it is now",
        )
    return {unit_id: rows[unit_id] for unit_id in wanted}


def _ragged_columns(
    opened: OpenRecording, table: Any, place: str, rows: list[int]
) -> tuple[dict[int, np.ndarray], dict[int, np.ndarray]]:
    if "spike_times" not in table.colnames:
        raise opened.refuse(
            f"the table of units has no spike times; its columns: {', '.join(table.colnames)}",
            place=place,
            expected="a column spike_times",
            remedy="write the spike times of every unit, in seconds",
        )
    spikes = read_ragged(opened, table, place, "spike_times", rows)
    if "obs_intervals" not in table.colnames:
        return spikes, {}
    return spikes, read_ragged(opened, table, place, "obs_intervals", rows)


def _spike_times(
    opened: OpenRecording, stored: np.ndarray, place: str, settings: IntakeSettings
) -> np.ndarray:
    if stored.ndim != 1 or stored.dtype.kind not in "fiu":
        raise opened.refuse(
            f"spike times of shape {stored.shape} and type {stored.dtype}",
            place=place,
            expected="a list of seconds, float64",
            remedy="write the spike times anew",
        )
    times = stored.astype(np.float64)
    bad = np.flatnonzero(~np.isfinite(times))
    if bad.size:
        raise opened.refuse(
            f"{bad.size} of {times.size} spike times are not finite; the first is entry {bad[0]} "
            f"({times[bad[0]]})",
            place=place,
            expected="seconds",
            remedy="remove those entries from the unit",
        )
    _check_seconds(opened, stored, times, place)
    return _sorted_times(opened, times, place, settings)


def _check_seconds(opened: OpenRecording, stored: np.ndarray, times: np.ndarray, place: str) -> None:
    if times.size >= WHOLE_NUMBERS_FROM and np.all(times == np.round(times)):
        raise opened.refuse(
            f"all {times.size} spike times are whole numbers (up to {times.max():.0f}): sample numbers or "
            "milliseconds",
            place=place,
            expected="seconds",
            remedy="divide sample numbers by the sampling rate, milliseconds by 1000",
        )
    if stored.dtype.kind == "f" and stored.dtype.itemsize < 8 and times.size:
        coarse = float(np.spacing(np.abs(stored).max()))
        if coarse > COARSEST_SPIKE_S:
            raise opened.refuse(
                f"spike times near {np.abs(times).max():.6g} s are stored in steps of {coarse:.3g} s",
                place=place,
                expected=f"a resolution of {COARSEST_SPIKE_S:g} s or better",
                remedy="write the spike times as float64 seconds since the session's start",
            )


def _sorted_times(
    opened: OpenRecording, times: np.ndarray, place: str, settings: IntakeSettings
) -> np.ndarray:
    steps = np.diff(times)
    back = np.flatnonzero(steps < 0)
    if back.size:
        at = back[0]
        found = (
            f"spike times out of order {back.size} time(s), first after spike {at}: "
            f"{times[at]:.6f} s, then {times[at + 1]:.6f} s"
        )
        if settings.unsorted_spikes == "refuse":
            raise opened.refuse(
                found,
                place=place,
                expected="spike times in rising order",
                remedy="look at how the unit was put together; to have spike times sorted, set "
                "intake.unsorted_spikes to sort",
            )
        opened.note(
            "warn",
            f"{found}; they were sorted",
            place=place,
            expected="spike times in rising order",
            remedy="look at how the unit was put together",
        )
        times = np.sort(times)
        steps = np.diff(times)
    repeated = int(np.count_nonzero(steps == 0))
    if repeated:
        opened.note(
            "warn",
            f"{repeated} spike(s) at the time of the spike before",
            place=place,
            expected="one spike at a time",
            remedy="a unit merged from two may hold spikes twice; they are all counted",
        )
    return times


def _observed(opened: OpenRecording, stored: np.ndarray | None, times: np.ndarray, place: str) -> np.ndarray:
    if stored is None or stored.size == 0:
        return np.empty((0, 2))
    rows = stored.astype(np.float64).reshape(-1) if stored.dtype.kind in "fiu" else np.empty(0)
    pairs = stored.ndim == 2 and stored.shape[1] == 2 and rows.size
    if not pairs or not np.isfinite(rows).all() or np.any(np.diff(rows) < 0):
        raise opened.refuse(
            f"observed intervals that are no rising list of (start, stop): shape {stored.shape}, "
            f"type {stored.dtype}",
            place=f"{place}, obs_intervals",
            expected="seconds, shape (n, 2), in order and apart",
            remedy="correct the column obs_intervals",
        )
    before = np.searchsorted(rows, times, side="left")
    at_edge = np.isin(times, rows)
    outside = int(np.count_nonzero((before % 2 == 0) & ~at_edge))
    if outside:
        opened.note(
            "warn",
            f"{outside} of {times.size} spikes lie outside the observed intervals; they are not used",
            place=place,
            expected="spikes within obs_intervals",
            remedy="correct the column obs_intervals or the unit",
        )
    return rows.reshape(-1, 2)


def scalar_columns(opened: OpenRecording, table: Any, place: str) -> dict[str, list[Scalar]]:
    """Columns with one plain value per unit; waveforms, ragged columns and references are passed by."""
    columns: dict[str, list[Scalar]] = {}
    for name in sorted(table.colnames):
        column = table[name]
        data = getattr(column, "data", None)
        if name in STRUCTURAL or hasattr(column, "target") or np.ndim(data) != 1 or not len(data):
            continue
        values = [_plain(value) for value in opened.array(data, f"{place}/{name}")]
        if all(value is not None for value in values):
            columns[name] = [value for value in values if value is not None]
    return columns


def _plain(value: Any) -> Scalar | None:
    if isinstance(value, bytes):
        value = value.decode("utf-8", "replace")
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, str):
        return printable(value)
    return value if isinstance(value, (bool, int, float)) else None


def _regions(
    opened: OpenRecording,
    table: Any,
    place: str,
    settings: IntakeSettings,
    columns: dict[str, list[Scalar]],
) -> dict[int, str]:
    name = settings.region_column
    if name is not None:
        if name not in columns:
            raise _no_column(opened, place, name, columns, "region_column")
        return {row: str(value) for row, value in enumerate(columns[name])}
    if "electrodes" not in table.colnames:
        return {}
    return _electrode_regions(opened, table, place)


def _electrode_regions(opened: OpenRecording, table: Any, place: str) -> dict[int, str]:
    column = table["electrodes"]
    region = getattr(column, "target", column)
    electrodes = getattr(region, "table", None)
    if electrodes is None or "location" not in electrodes.colnames:
        return {}
    stored = opened.array(electrodes["location"].data, "general/extracellular_ephys/electrodes/location")
    locations = [str(_plain(value)) for value in stored.ravel()]
    numbers = opened.array(region.data, f"{place}/electrodes")
    if numbers.ndim != 1 or numbers.dtype.kind not in "iu":
        raise opened.refuse(
            f"electrodes of shape {numbers.shape} and type {numbers.dtype}",
            place=f"{place}/electrodes",
            expected="rows of the table of electrodes",
            remedy="write the column anew, or set intake.region_column",
        )
    if region is column:
        per_row = [[number] for number in numbers]
    else:
        per_row = np.split(numbers, row_ends(opened, table, place, "electrodes")[:-1])
    regions = {}
    for row, members in enumerate(per_row):
        names = sorted(
            {locations[number] for number in members if 0 <= number < len(locations)} - {"", "unknown"}
        )
        if names:
            regions[row] = "/".join(names)
    return regions


def _why_left_out(
    opened: OpenRecording,
    place: str,
    attributes: dict[str, Scalar],
    columns: dict[str, list[Scalar]],
    conditions: list[UnitCondition],
) -> str | None:
    for condition in conditions:
        if condition.column not in columns:
            raise _no_column(opened, place, condition.column, columns, "unit_filter")
        value = attributes[condition.column]
        if condition.keep is not None:
            if value not in condition.keep:
                return f"{condition.column} is {value}, not {' or '.join(map(str, condition.keep))}"
            continue
        if not isinstance(value, (int, float)):
            raise opened.refuse(
                f"the column {condition.column} holds {value!r}, which is no number",
                place=f"{place}/{condition.column}",
                expected="numbers, for at_least and at_most",
                remedy="use `keep: [values]` for this column in intake.unit_filter",
            )
        if condition.at_least is not None and not value >= condition.at_least:
            return f"{condition.column} is {value:g}, below {condition.at_least:g}"
        if condition.at_most is not None and not value <= condition.at_most:
            return f"{condition.column} is {value:g}, above {condition.at_most:g}"
    return None


def _no_column(
    opened: OpenRecording, place: str, name: str, columns: dict[str, list[Scalar]], key: str
) -> Exception:
    return opened.refuse(
        f"the table of units has no usable column {name!r}",
        place=place,
        expected="one of: " + (", ".join(columns) or "(the table has no plain columns)"),
        remedy=f"correct intake.{key}",
    )


def _check_together(
    opened: OpenRecording, place: str, units: list[Unit], settings: IntakeSettings, *, all_read: bool
) -> None:
    if not all_read:
        return
    empty = [unit.unit_id for unit in units if not unit.spike_times_s.size]
    if len(empty) == len(units):
        raise opened.refuse(
            f"no spikes: all {len(units)} units are empty",
            place=f"{place}/spike_times",
            expected="spike times in seconds",
            remedy="write the spike times of the sorting into the file",
        )
    if empty:
        opened.note(
            "warn",
            f"{len(empty)} unit(s) without spikes: {', '.join(map(str, empty[:8]))}",
            place=place,
            expected="units with spikes",
            remedy="nothing; they are left out",
        )
    if not any(unit.kept for unit in units):
        raise opened.refuse(
            f"none of the {len(units)} units meets the conditions; the first: {units[0].reason}",
            place=place,
            expected="; ".join(_condition_text(condition) for condition in settings.unit_filter),
            remedy="loosen intake.unit_filter",
        )


def _condition_text(condition: UnitCondition) -> str:
    if condition.keep is not None:
        return f"{condition.column} one of {', '.join(map(str, condition.keep))}"
    if condition.at_least is not None:
        return f"{condition.column} at least {condition.at_least:g}"
    return f"{condition.column} at most {condition.at_most:g}"
