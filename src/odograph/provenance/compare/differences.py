"""What went into two runs: sessions, signals, units, settings, code and libraries, from their records."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from odograph.errors import InputError
from odograph.provenance.canonical import canonical_json
from odograph.provenance.records import read_record
from odograph.provenance.root import all_record_files


@dataclass
class RunInputs:
    """What one run was made from.

    Parameters
    ----------
    signals, units : dict
        Digests by session, then by signal or unit.
    files : dict of str to str
        The recording of each session, as its records tell it.
    settings : dict
        Values, as canonical JSON, by (setting, session); the session is None for the study's.
    code, software : dict of str to str
        Fingerprints by step; versions by library.
    """

    signals: dict[str, dict[str, str]] = field(default_factory=dict)
    units: dict[str, dict[int, str]] = field(default_factory=dict)
    files: dict[str, str] = field(default_factory=dict)
    settings: dict[tuple[str, str | None], str] = field(default_factory=dict)
    code: dict[str, str] = field(default_factory=dict)
    software: dict[str, str] = field(default_factory=dict)

    @property
    def sessions(self) -> set[str]:
        """Sessions whose recording was read."""
        return set(self.files)


def run_inputs(folder: Path) -> RunInputs:
    """Gather what the records of a study's results name.

    Raises
    ------
    InputError
        There are no records.
    RecordError
        A record was changed.
    """
    found = RunInputs()
    files = all_record_files(folder)
    if not files:
        raise InputError(
            "there are no records",
            file=str(folder),
            expected="a study's folder with `results` in it, or an unpacked archive's `data`",
            remedy="name the folder that holds `results`",
        )
    for file in files:
        _add(found, read_record(file))
    return found


def _add(found: RunInputs, record: dict[str, Any]) -> None:
    session = record["keys"].get("session")
    for entry in record["inputs"]:
        if entry["kind"] == "signal":
            found.signals.setdefault(session, {})[entry["signal"]] = entry["digest"]
            found.files[session] = entry["file"]
        elif entry["kind"] == "unit":
            found.units.setdefault(session, {})[entry["unit"]] = entry["digest"]
            found.files[session] = entry["file"]
    for stage, values in record["settings"].items():
        for key, value in values.items():
            found.settings[f"{stage}.{key}", session] = canonical_json(value)
    found.code |= record["code"]
    found.software |= record["software"]


@dataclass(frozen=True)
class Difference:
    """One thing that differs: of which kind, what, for which session (None: all), before and after."""

    kind: str
    what: str
    session: str | None
    before: str | None
    after: str | None


def input_differences(old: RunInputs, new: RunInputs) -> list[Difference]:
    """Everything but units that differs between what two runs were made from; sorted.

    Kinds are "session", "signal", "setting", "code" and "software". A setting that differs in the same way
    for all sessions of a step is told once.
    """
    found = [
        Difference(
            "session", session, session, *(("read", None) if session in old.sessions else (None, "read"))
        )
        for session in sorted(old.sessions ^ new.sessions)
    ]
    for session in sorted(old.sessions & new.sessions):
        before, after = old.signals.get(session, {}), new.signals.get(session, {})
        found += [
            Difference("signal", name, session, before.get(name), after.get(name))
            for name in sorted({*before, *after})
            if before.get(name) != after.get(name)
        ]
    found += _settings(old, new)
    for kind, before, after in (("code", old.code, new.code), ("software", old.software, new.software)):
        found += [
            Difference(kind, name, None, before.get(name), after.get(name))
            for name in sorted({*before, *after})
            if before.get(name) != after.get(name)
        ]
    return found


def _settings(old: RunInputs, new: RunInputs) -> list[Difference]:
    changed: dict[tuple[str, str, str], list[str | None]] = {}
    for name, session in sorted(old.settings.keys() & new.settings.keys(), key=str):
        before, after = old.settings[name, session], new.settings[name, session]
        if before != after:
            changed.setdefault((name, before, after), []).append(session)
    found = []
    for (name, before, after), sessions in sorted(changed.items()):
        asked = {session for key, session in old.settings.keys() & new.settings.keys() if key == name}
        everywhere = set(sessions) == asked
        found += [
            Difference("setting", name, session, before, after)
            for session in ([None] if everywhere else sorted(sessions, key=str))
        ]
    return found
