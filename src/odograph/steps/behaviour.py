"""Step of rule `behaviour`: position, head direction and speed on the analysis bins, and what was dropped."""

from __future__ import annotations

import sys
from typing import Any

from odograph.errors import OdographError
from odograph.provenance.step import Step, left_out_because, refuse_if_failed, run_step


def work(step: Step) -> None:
    """Derive the behaviour from the tracked points, on the recording clock."""
    clock = step.read_json("clock")
    if clock["verdict"] == "fail":
        _write_nothing(step, left_out_because("sync", clock))
        return
    from odograph.behaviour.audit import audit_document
    from odograph.behaviour.derive import derive_behaviour
    from odograph.settings.behaviour import BehaviourSettings
    from odograph.steps.source import read_signals

    recording = read_signals(step)
    behaviour = derive_behaviour(
        recording.tracks,
        recording.direction,
        recording.covariates,
        (clock["slope"], clock["intercept_s"]),
        None,
        recording.invalid,
        recording.arena,
        step.stage_settings(BehaviourSettings),
    )
    document = audit_document(step.session, behaviour)
    refuse_if_failed(step, document)
    corners = None if recording.arena is None else recording.arena.corners_m
    step.write_json("audit", {**document, "arena_corners_m": corners})
    step.write_table("behaviour", behaviour_columns(behaviour))
    step.write_table("dropped", _dropped(behaviour.audit_rows))


def behaviour_columns(behaviour: Any) -> dict[str, Any]:
    """The table of analysis bins, covariates beside the columns that are always there."""
    names = (
        "time_s",
        "x_m",
        "y_m",
        "head_direction_rad",
        "speed_cm_s",
        "position_sd_m",
        "direction_sd_rad",
        "valid",
        "reason",
    )
    return {name: getattr(behaviour, name) for name in names} | dict(sorted(behaviour.covariates.items()))


def leave_out(step: Step, error: OdographError) -> None:
    """Write a table without bins and an audit that says why."""
    step.use(step.input("clock"))
    _write_nothing(step, error.finding())


def _write_nothing(step: Step, finding: dict[str, Any]) -> None:
    import pyarrow as pa

    audit = {"session": step.session, "verdict": "fail", "findings": [finding], "reasons": []}
    step.write_json("audit", {**audit, "arena_corners_m": None})
    numbers = (
        "time_s",
        "x_m",
        "y_m",
        "head_direction_rad",
        "speed_cm_s",
        "position_sd_m",
        "direction_sd_rad",
    )
    columns = {name: pa.array([], pa.float64()) for name in numbers}
    columns |= {"valid": pa.array([], pa.bool_()), "reason": pa.array([], pa.string())}
    step.write_table("behaviour", columns)
    step.write_table("dropped", _dropped([]))


def _dropped(rows: Any) -> Any:
    import pyarrow as pa

    kinds = {
        "start_s": pa.float64(),
        "stop_s": pa.float64(),
        "samples": pa.int64(),
        "reason": pa.string(),
        "action": pa.string(),
    }
    if hasattr(rows, "to_dict"):
        rows = rows.to_dict("records")
    return {name: pa.array([row[name] for row in rows], kind) for name, kind in kinds.items()}


if __name__ == "__main__":
    sys.exit(run_step("behaviour", work, leave_out))
