"""Step of rule `sync`: the map from the camera's clock to the recording's clock."""

from __future__ import annotations

import sys

from odograph.errors import OdographError
from odograph.provenance.step import Step, refuse_if_failed, run_step


def work(step: Step) -> None:
    """Fit the clock and write it with its residuals."""
    from odograph.settings.sync import SyncSettings
    from odograph.steps.source import read_signals
    from odograph.sync.clock import clock_document, fit_clock, identity_clock

    settings = step.stage_settings(SyncSettings)
    recording = read_signals(step)
    frame_time_s = recording.tracks[0].time_s
    if recording.pulses is None:
        clock = identity_clock(len(frame_time_s))
    else:
        clock = fit_clock(frame_time_s, recording.pulses.time_s, settings)
    document = clock_document(step.session, clock)
    refuse_if_failed(step, document)
    _write(step, document, clock.residual_time_s, clock.residual_ms)


def leave_out(step: Step, error: OdographError) -> None:
    """Write a clock that says why there is none."""
    document = {"session": step.session, "verdict": "fail", "findings": [error.finding()]}
    _write(step, document, [], [])


def _write(step, document, residual_time_s, residual_ms) -> None:
    import pyarrow as pa

    step.write_json("clock", document)
    columns = {"time_s": residual_time_s, "residual_ms": residual_ms}
    step.write_table(
        "residuals", {name: pa.array(values, type=pa.float64()) for name, values in columns.items()}
    )


if __name__ == "__main__":
    sys.exit(run_step("sync", work, leave_out))
