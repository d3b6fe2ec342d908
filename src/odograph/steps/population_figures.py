"""Step of rule `population_figures`: the pictures of all units together."""

from __future__ import annotations

import sys

from odograph.provenance import layout
from odograph.provenance.step import Step, run_step


def work(step: Step) -> None:
    """Draw every figure of the population from its tables."""
    from odograph.figures.captions import CAPTIONS
    from odograph.figures.population import draw_population_figure
    from odograph.figures.style import figure_bytes
    from odograph.settings.figures import FiguresSettings

    settings = step.stage_settings(FiguresSettings)
    tables = [step.read_table(name) for name in ("units", "scores", "composition", "speed")]
    for name, caption in CAPTIONS.items():
        figure = draw_population_figure(name, *tables, settings)
        for suffix in settings.formats:
            with step.product(layout.FIGURES / f"{name}.{suffix}") as temporary:
                temporary.write_bytes(figure_bytes(figure, suffix, step.record_id, caption.title))


if __name__ == "__main__":
    sys.exit(run_step("population_figures", work))
