"""What is in a recording before anything is configured: candidates for every setting, and a proposal."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from odograph.errors import OdographError
from odograph.recording.context import arena_candidates, read_subject
from odograph.recording.model import verdict_of
from odograph.recording.opening import OpenRecording, open_recording
from odograph.recording.pulses import event_count, pulse_candidates
from odograph.recording.reader import read_recording
from odograph.recording.tracking import METRES, direction_candidates, point_candidates
from odograph.recording.units import scalar_columns, unit_tables
from odograph.settings.intake import IntakeSettings

FRONT_WORDS = ("front", "anterior", "nose", "snout", "head")
BACK_WORDS = ("back", "rear", "posterior", "neck", "tail")
PULSE_WORDS = ("frame", "camera", "video", "sync", "pulse", "ttl")
STEPS_LOOKED_AT = 1000
VALUES_SHOWN = 6


def survey(path: str | Path) -> dict[str, Any]:
    """Look into a recording and try it with settings proposed from what is there.

    Parameters
    ----------
    path : str or Path
        The file.

    Returns
    -------
    dict
        `file`, `subject`; `tracking`, `directions`, `pulses`, `arenas`, `units`: lists of what was found,
        each with its place; `proposed`: settings of intake as a mapping; `choices`: settings that only the
        user can make, each with its candidates; `verdict` and `findings` of reading it so.

    Raises
    ------
    InputError
        The file cannot be opened at all.
    """
    with open_recording(path, IntakeSettings(missing_links="warn")) as opened:
        found = {
            "file": _file(opened),
            "subject": vars(read_subject(opened)).copy(),
            "tracking": [_series_entry(*item) for item in point_candidates(opened).items()],
            "directions": [_series_entry(*item) for item in direction_candidates(opened).items()],
            "pulses": [
                {**_series_entry(place, thing), "events": event_count(thing)}
                for place, thing in pulse_candidates(opened).items()
            ],
            "arenas": [
                {"place": place, "corners": len(thing.id)}
                for place, thing in arena_candidates(opened).items()
            ],
            "units": [_units_entry(opened, *item) for item in unit_tables(opened).items()],
        }
        lost = list(opened.lost_places)
    proposed, choices = propose(found)
    if lost:
        proposed["missing_links"] = "warn"
    return {**found, "proposed": proposed, "choices": choices, **_try(path, proposed)}


def _try(path: str | Path, proposed: Mapping[str, Any]) -> dict[str, Any]:
    try:
        recording = read_recording(path, IntakeSettings(**proposed))
    except OdographError as error:
        return {"verdict": "fail", "findings": [error.finding()]}
    findings = [dict(entry) for entry in recording.findings]
    return {"verdict": verdict_of(findings), "findings": findings}


def _file(opened: OpenRecording) -> dict[str, str | None]:
    facts = {key: value for key, value in vars(opened.facts).items() if isinstance(value, str | None)}
    return {"name": opened.facts.name, **facts}


def _series_entry(place: str, series: Any) -> dict[str, Any]:
    data = getattr(series, "data", None)
    return {
        "place": place,
        "kind": type(series).__name__,
        "shape": list(np.shape(data)) if data is not None else None,
        "unit": str(series.unit) if getattr(series, "unit", None) else None,
        "rate_hz": _rate_hz(series),
    }


def _rate_hz(series: Any) -> float | None:
    if getattr(series, "rate", None):
        return float(series.rate)
    stamps = getattr(series, "timestamps", None)
    if stamps is None or np.ndim(stamps) != 1 or len(stamps) < 2:
        return None
    first = np.asarray(stamps[:STEPS_LOOKED_AT])
    if first.dtype.kind not in "fiu":
        return None
    steps = np.diff(first.astype(np.float64))
    step = float(np.median(steps))
    return 1 / step if np.isfinite(step) and step > 0 else None


def _units_entry(opened: OpenRecording, place: str, table: Any) -> dict[str, Any]:
    columns = scalar_columns(opened, table, place)
    n_spikes = len(table["spike_times"].target.data) if "spike_times" in table.colnames else 0
    return {
        "place": place,
        "units": len(table.id),
        "spikes": n_spikes,
        "observed_intervals": "obs_intervals" in table.colnames,
        "electrodes": "electrodes" in table.colnames,
        "columns": [{"column": name, "values": _values(values)} for name, values in columns.items()],
    }


def _values(values: list[Any]) -> str:
    if all(isinstance(value, int | float) and not isinstance(value, bool) for value in values):
        finite = [value for value in values if np.isfinite(value)]
        return f"{min(finite):g} to {max(finite):g}" if finite else "no finite value"
    kinds = sorted({str(value) for value in values})
    return ", ".join(kinds[:VALUES_SHOWN]) + (", ..." if len(kinds) > VALUES_SHOWN else "")


def propose(found: Mapping[str, Any]) -> tuple[dict[str, Any], dict[str, list[str]]]:
    """Settings that a survey suggests, by names and counts; and those where only the user can choose.

    Parameters
    ----------
    found : Mapping
        The lists `tracking`, `directions`, `pulses`, `arenas`, `units` of a survey.

    Returns
    -------
    dict
        Settings of intake.
    dict
        Candidates by the setting that has to choose among them.
    """
    proposed: dict[str, Any] = {}
    choices: dict[str, list[str]] = {}
    _propose_tracking(found["tracking"], proposed, choices)
    for key, entries in (
        ("direction_place", found["directions"]),
        ("arena_place", found["arenas"]),
        ("units_place", found["units"]),
    ):
        places = [entry["place"] for entry in entries]
        if len(places) == 1:
            proposed[key] = places[0]
        elif places:
            choices[key] = places
    n_frames = max(((entry["shape"] or [0])[0] for entry in found["tracking"]), default=0)
    pulses = _likely_pulses(found["pulses"], n_frames)
    if pulses is not None:
        proposed["frame_pulses_place"] = pulses
    elif found["pulses"]:
        choices["frame_pulses_place"] = [entry["place"] for entry in found["pulses"]]
    return proposed, choices


def _propose_tracking(
    entries: list[dict[str, Any]], proposed: dict[str, Any], choices: dict[str, list[str]]
) -> None:
    holders: dict[str, list[str]] = defaultdict(list)
    for entry in entries:
        above, _, name = entry["place"].rpartition("/")
        holders[above].append(name)
    if len(entries) == 1:
        proposed["position_place"] = entries[0]["place"]
    elif len(holders) == 1:
        holder, names = next(iter(holders.items()))
        front, back = _named_like(names, FRONT_WORDS), _named_like(names, BACK_WORDS)
        proposed["position_place"] = holder
        if front and back and front != back:
            proposed |= {"front_point": front, "back_point": back}
        else:
            choices |= {"front_point": names, "back_point": names}
    elif entries:
        choices["position_place"] = [entry["place"] for entry in entries]
    # A unit that has to be corrected cannot be guessed; the user is asked for it.
    if any((entry["unit"] or "").strip().lower() not in METRES for entry in entries):
        choices["length_unit"] = ["metres", "centimetres", "millimetres", "pixels"]


def _named_like(names: list[str], words: tuple[str, ...]) -> str | None:
    # The plainer words come first, so that `head_front` and `head_back` are told apart.
    for word in words:
        matches = [name for name in names if word in name.lower()]
        if len(matches) == 1:
            return matches[0]
    return None


def _likely_pulses(entries: list[dict[str, Any]], n_frames: int) -> str | None:
    def likeness(entry: dict[str, Any]) -> tuple[bool, int]:
        name = entry["place"].rpartition("/")[2].lower()
        as_many = bool(entry["events"]) and abs(entry["events"] - n_frames) <= 0.2 * n_frames
        return as_many, sum(word in name for word in PULSE_WORDS)

    likely = [entry for entry in entries if any(likeness(entry))]
    ranked = sorted(likely, key=lambda entry: (*likeness(entry), entry["place"]), reverse=True)
    if not ranked or (len(ranked) > 1 and likeness(ranked[0]) == likeness(ranked[1])):
        return None
    return ranked[0]["place"]
