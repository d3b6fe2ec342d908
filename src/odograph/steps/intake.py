"""Step of rule `intake`: the inventory of one recording, and its verdict."""

from __future__ import annotations

import sys

from odograph.errors import ChangedInputError, InputError
from odograph.provenance.step import Step, refuse_if_failed, run_step

_FACTS = ("place", "expected", "remedy")


def work(step: Step) -> None:
    """Read the whole recording and write what it holds."""
    from odograph.provenance.survey import named_in_finding
    from odograph.recording.inventory import failed_inventory, make_inventory
    from odograph.recording.reader import read_recording
    from odograph.settings.intake import IntakeSettings
    from odograph.steps.source import recording_name, signal_places
    from odograph.steps.survey_recordings import inventory_digest

    source = step.source
    file, told = source["nwb"], recording_name(source)
    error = _error_again(step, file) if "error" in step.plan else None
    try:
        if error is not None:
            raise error
        recording = read_recording(file, step.stage_settings(IntakeSettings))
        document = make_inventory(step.session, recording)
    except InputError as refusal:
        recording, document = None, failed_inventory(step.session, refusal)
        document["findings"] = [named_in_finding(one, file, told) for one in document["findings"]]
    if (recording is None) != ("error" in step.plan) or (
        recording is not None and inventory_digest(document) != step.plan["inventory"]
    ):
        raise ChangedInputError(
            "the recording changed since this run was planned", file=told, remedy="run snakemake again"
        )
    refuse_if_failed(step, document)
    if recording is not None:
        places = signal_places(recording)
        for name, digest in step.plan["signals"].items():
            step.record.add_signal_input(name, digest, file=told, place=places.get(name))
        for unit, digest in step.plan["units"].items():
            step.record.add_unit_input(int(unit), digest, file=told)
    step.write_json("inventory", document)


def _error_again(step: Step, file: str) -> InputError | None:
    """Why a recording cannot be used; read in a process of its own, which a damaged file may kill or stop."""
    import json

    from odograph.provenance.survey import Request, survey

    if step.plan.get("fetched") is False:
        # Only the planning asks servers.
        error = dict(step.plan["error"])
        return InputError(error["found"], file=file, **{name: error.get(name) for name in _FACTS})
    request = Request(str(step.session), file, json.dumps(step.source["intake"]))
    error = survey([request], workers=1)[request.session].get("error")
    if error is None:
        return None
    facts = {name: error.get(name) for name in _FACTS}
    return InputError(error["found"], file=error.get("file") or file, **facts)


if __name__ == "__main__":
    sys.exit(run_step("intake", work))
