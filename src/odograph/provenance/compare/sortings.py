"""The units of two runs, session by session, read from the recordings where these can still be read."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np

from odograph.errors import OdographError
from odograph.provenance.compare.differences import RunInputs
from odograph.provenance.compare.match import Relation, match_units
from odograph.provenance.places import local_place


def relate_sessions(
    folders: tuple[Path, Path], inputs: tuple[RunInputs, RunInputs], data: tuple[Path | None, Path | None]
) -> tuple[dict[str, list[Relation]], list[str]]:
    """Relate the units of every session that both runs have.

    Parameters
    ----------
    folders : tuple of Path
        The two studies' folders.
    inputs : tuple of RunInputs
    data : tuple of Path or None
        Folders in which recordings are looked for first, by name.

    Returns
    -------
    relations : dict of list of Relation
        By session.
    by_number : list of str
        Sessions whose units had to be matched by number and digest.
    """
    relations, by_number = {}, []
    for session in sorted(inputs[0].sessions & inputs[1].sessions):
        units = [one.units.get(session, {}) for one in inputs]
        if units[0] == units[1]:
            relations[session] = [Relation("same", (unit,), (unit,), 0) for unit in sorted(units[0])]
            continue
        trains = [spike_trains(*side, session) for side in zip(folders, inputs, data, strict=True)]
        if trains[0] is None or trains[1] is None:
            by_number.append(session)
            relations[session] = _by_number(*units)
        else:
            relations[session] = match_units(*trains)
    return relations, by_number


def _by_number(before: dict[int, str], after: dict[int, str]) -> list[Relation]:
    both = sorted(before.keys() & after.keys())
    found = [Relation("same" if before[u] == after[u] else "changed", (u,), (u,), 0) for u in both]
    found += [Relation("lost", (unit,), (), 0) for unit in sorted(before.keys() - after.keys())]
    return found + [Relation("new", (), (unit,), 0) for unit in sorted(after.keys() - before.keys())]


def spike_trains(
    folder: Path, inputs: RunInputs, data: Path | None, session: str
) -> dict[int, np.ndarray] | None:
    """Spike times of a session's units, if its recording can be read and is the one that was analysed."""
    from odograph.recording.digest import unit_digests
    from odograph.recording.reader import read_recording
    from odograph.settings.intake import IntakeSettings

    intake = {
        name.removeprefix("intake."): json.loads(value)
        for (name, own), value in inputs.settings.items()
        if own == session and name.startswith("intake.")
    }
    wanted = inputs.units[session]
    for path in _places(folder, inputs.files[session], data, session):
        try:
            settings = IntakeSettings.model_validate(intake)
            recording = read_recording(path, settings, signals=(), units=tuple(wanted))
        except OdographError:
            continue
        if unit_digests(recording) == wanted:
            return {unit.unit_id: np.sort(unit.spike_times_s) for unit in recording.units if unit.kept}
    return None


def _places(folder: Path, file: str, data: Path | None, session: str) -> list[Path]:
    """Where a recording may lie: the folder given, the records' place, the sessions table's."""
    from odograph.settings.load import load_settings, read_sessions

    found = sorted(data.rglob(Path(local_place(file)).name)) if data else []
    found.append(folder / local_place(file))
    try:
        table = load_settings(folder / "config" / "config.yaml").study.sessions_table
        found += [
            folder / local_place(row.nwb) for row in read_sessions(folder / table) if row.session == session
        ]
    except OdographError:
        pass
    return [path for path in dict.fromkeys(found) if path.is_file()]
