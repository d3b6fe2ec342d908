"""Survey of recordings for the planning: reads requests line by line and answers each with its digests.

Started by `odograph.provenance.survey`; no rule runs it.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from odograph.errors import OdographError, printable
from odograph.provenance.canonical import digest_value
from odograph.recording.digest import signal_digests, unit_digests
from odograph.recording.inventory import make_inventory
from odograph.recording.links import follow_links
from odograph.recording.reader import read_recording
from odograph.settings.intake import IntakeSettings


def survey_recording(session: str, nwb: str, settings: IntakeSettings) -> dict[str, Any]:
    """Digest everything of a recording that any step uses.

    Parameters
    ----------
    session : str
        Name of the session.
    nwb : str
        Path of the recording.
    settings : IntakeSettings
        How to read it.

    Returns
    -------
    dict
        ``inventory`` (digest), ``signals`` and ``units`` (digests by name), ``links`` (paths of other files
        that it links to), ``animal`` and ``regions`` (by unit) as the file names them, ``duration_s`` of the
        tracking; or ``error`` (a finding) and ``settled``, whether reading again would end the same.
    """
    try:
        recording = read_recording(nwb, settings)
        document = make_inventory(session, recording)
        links = linked_files(nwb)
    except OdographError as error:
        return {"error": error.finding() | {"file": error.file or nwb}, "settled": True, "links": _links(nwb)}
    except Exception as error:
        return {"error": _unforeseen(error, nwb), "settled": False}
    return {
        "inventory": inventory_digest(document),
        "signals": signal_digests(recording),
        "units": {str(unit): digest for unit, digest in unit_digests(recording).items()},
        "links": links,
        "animal": document["subject"]["subject_id"],
        "duration_s": _duration_s(document),
        "regions": {str(unit["unit"]): unit["region"] for unit in document["units"] if unit["region"]},
    }


def linked_files(nwb: str) -> list[str]:
    """Other files that a recording links to: the planning must look at their time stamps too.

    Parameters
    ----------
    nwb : str
        Path of an HDF5 file that can be read.

    Returns
    -------
    list of str
        Sorted paths, relative to the folder of the file that names them.
    """
    return [path.as_posix() for path in follow_links(Path(nwb)).named]


def _links(nwb: str) -> list[str]:
    """Other files that a refused recording names: it is read again when one of them comes back."""
    try:
        return linked_files(nwb)
    except Exception:  # the file may be damaged in any way; it was refused for it already
        return []


def _duration_s(document: Mapping[str, Any]) -> float | None:
    """From the first to the last sample of the tracking."""
    for signal in document["signals"]:
        if signal["signal"] == "tracking" and signal["samples"]:
            return signal["last_s"] - signal["first_s"]
    return None


def inventory_digest(document: Mapping[str, Any]) -> str:
    """Digest of an inventory; the name of the file has no part in it, so a file may be moved and renamed."""
    named = {key: value for key, value in document["file"].items() if key != "name"}
    return digest_value({**document, "file": named})


def _unforeseen(error: Exception, nwb: str) -> dict[str, Any]:
    return {
        "level": "fail",
        "file": nwb,
        "place": None,
        "found": printable(f"the recording could not be read ({type(error).__name__}: {error})"),
        "expected": "a readable NWB file",
        "remedy": "look into the file with `odograph look`; if it is sound, please report this",
    }


def main() -> None:
    """Answer the requests on the standard input until it ends."""
    answers, sys.stdout = sys.stdout, sys.stderr
    for line in sys.stdin:
        request = json.loads(line)
        settings = IntakeSettings.model_validate_json(request["settings"])
        answer = survey_recording(request["session"], request["nwb"], settings)
        answers.write(json.dumps(answer) + "\n")
        answers.flush()


if __name__ == "__main__":
    main()
