"""Step of rule `session_quality`: one picture of how good a session is."""

from __future__ import annotations

import sys

from odograph.provenance import layout
from odograph.provenance.files import read_json, read_table
from odograph.provenance.step import Step, run_step


def work(step: Step) -> None:
    """Draw the checks of intake, sync and behaviour; a session that failed is drawn with its reason."""
    from odograph.figures.session_quality import draw_session_quality
    from odograph.figures.style import figure_bytes
    from odograph.settings.figures import FiguresSettings

    settings, session = step.stage_settings(FiguresSettings), step.session
    inventory = read_json(step.use(layout.inventory(session)))
    clock = residuals = behaviour = audit = None
    if inventory["verdict"] != "fail":
        clock = read_json(step.use(layout.clock(session)))
        residuals = read_table(step.use(layout.residuals(session)))
        behaviour = read_table(step.use(layout.behaviour(session)))
        audit = read_json(step.use(layout.audit(session)))
    figure = draw_session_quality(inventory, clock, residuals, behaviour, audit, settings)
    for suffix in settings.formats:
        path = layout.session_folder(session) / f"session_quality.{suffix}"
        with step.product(path) as temporary:
            temporary.write_bytes(
                figure_bytes(figure, suffix, step.record_id, f"quality of session {session}")
            )


if __name__ == "__main__":
    sys.exit(run_step("session_quality", work))
