"""What a reader of recordings must do with a damaged one: read it, or refuse it with all the facts."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from base_recordings import SETTINGS
from damage import damage

from odograph.errors import OdographError
from odograph.provenance.canonical import readable_json
from odograph.recording.inventory import failed_inventory
from odograph.recording.reader import read_recording
from odograph.recording.survey import survey
from odograph.settings.intake import IntakeSettings
from odograph.steps.survey_recordings import survey_recording

FACTS = ("file", "found", "expected", "remedy")


class WrongError(Exception):
    """A reader did what it must not do."""


def check_error(error: OdographError) -> str:
    """An expected failure tells its facts; returns what was found.

    Raises
    ------
    WrongError
        It lacks one.
    """
    check_facts(vars(error))
    readable_json(failed_inventory("walk", error)).encode()
    error.message().encode()
    return error.found


def check_facts(facts: dict[str, Any]) -> None:
    """A finding has a file, what was found, what was expected and what to do."""
    lacking = [name for name in FACTS if not isinstance(facts.get(name), str) or not facts[name]]
    if lacking:
        raise WrongError(f"the error lacks {', '.join(lacking)}: {facts}")


def write_recording(case: dict[str, Any], folder: Path) -> Path:
    """Write the damaged recording of a case."""
    path = folder / "recording.nwb"
    damage(case, path)
    return path


def read_case(case: dict[str, Any], path: Path) -> str:
    """Read a damaged recording as the planning does, and as `more` says; returns how it ended."""
    settings = IntakeSettings(**SETTINGS[case["base"]][case["settings"]])
    answer = survey_recording("walk", str(path), settings)
    json.loads(json.dumps(answer))
    readable_json(answer).encode()
    error = answer.get("error")
    if error is not None:
        if not answer["settled"]:
            raise WrongError(error["found"])
        check_facts(error)
    _read_more(case["more"], path, settings)
    return "read" if error is None else "refused"


def _read_more(what: str, path: Path, settings: IntakeSettings) -> None:
    try:
        if what == "look":
            readable_json(survey(path)).encode()
        elif what == "signals":
            read_recording(path, settings, signals=("tracking", "frame_pulses"), units=())
        elif what == "units":
            read_recording(path, settings, signals=(), units=(1, 2))
    except OdographError as error:
        check_error(error)
