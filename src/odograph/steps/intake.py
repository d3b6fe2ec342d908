"""Step of rule `intake`: the inventory of one recording, and its verdict."""

from __future__ import annotations

import sys

from odograph.errors import ChangedInputError, InputError
from odograph.provenance.step import Step, refuse_if_failed, run_step


def work(step: Step) -> None:
    """Read the whole recording and write what it holds."""
    from odograph.recording.inventory import failed_inventory, make_inventory
    from odograph.recording.reader import read_recording
    from odograph.settings.intake import IntakeSettings
    from odograph.steps.source import signal_places
    from odograph.steps.survey_recordings import inventory_digest

    file = step.source["nwb"]
    try:
        recording = read_recording(file, step.stage_settings(IntakeSettings))
        document = make_inventory(step.session, recording)
    except InputError as error:
        recording, document = None, failed_inventory(step.session, error)
    if (recording is None) != ("error" in step.plan) or (
        recording is not None and inventory_digest(document) != step.plan["inventory"]
    ):
        raise ChangedInputError(
            "the recording changed since this run was planned", file=file, remedy="run snakemake again"
        )
    refuse_if_failed(step, document)
    if recording is not None:
        places = signal_places(recording)
        for name, digest in step.plan["signals"].items():
            step.record.add_signal_input(name, digest, file=file, place=places.get(name))
        for unit, digest in step.plan["units"].items():
            step.record.add_unit_input(int(unit), digest, file=file)
    step.write_json("inventory", document)


if __name__ == "__main__":
    sys.exit(run_step("intake", work))
