"""Step of rule `report`: the page that shows the whole run."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

from odograph.provenance import layout
from odograph.provenance.files import read_arrays, read_json
from odograph.provenance.records import producer_of, software_versions
from odograph.provenance.step import Step, run_step


def work(step: Step) -> None:
    """Gather what the page shows and write it."""
    from odograph.figures.captions import POPULATION_FIGURES
    from odograph.population.summarise import fit_line
    from odograph.report.context import PageContext, PageFigure
    from odograph.report.page import build_page, build_units_page
    from odograph.report.unit_table import MOST_UNITS_ON_THE_PAGE
    from odograph.settings.all import Settings
    from odograph.settings.load import settings_table

    members = step.plan["sessions"]
    step.record.add_table_input("sessions", members)
    settings = Settings.model_validate(step.settings)
    units, speed, sessions = (step.read_table(name) for name in ("units", "speed", "sessions"))
    summary = step.read_json("summary")
    documents = _documents(step, members)
    curves = {row["session"]: _curve_files(step, row) for row in members if row["readable"]}
    listed = sorted(units["session"].unique()) if len(units) > MOST_UNITS_ON_THE_PAGE else []
    miniatures = {} if listed else _miniatures(curves, settings.figures)
    figures = []
    for name in POPULATION_FIGURES:
        path = step.use(layout.FIGURES / f"{name}.png")
        place = path.relative_to(layout.RESULTS).as_posix()
        figures.append(PageFigure(name, path.read_bytes(), producer_of(path), place))
    context = PageContext(
        study=settings.study.name,
        summary_lines=summary["lines"],
        verdicts=sessions,
        documents=documents,
        units=units,
        miniatures=miniatures,
        figures=figures,
        settings=settings_table(settings),
        session_settings={row["session"]: row["settings"] for row in members if row["settings"]},
        record_id=step.record_id,
        software=software_versions(),
        results_folder=layout.RESULTS.as_posix(),
        speed=speed,
        fit_line=fit_line(summary),
        unit_pages={session: f"units/{session}.html" for session in listed},
    )
    for session in listed:
        own = _miniatures({session: curves[session]}, settings.figures)
        with step.product(layout.RESULTS / context.unit_pages[session]) as temporary:
            temporary.write_text(build_units_page(context, session, own), encoding="utf-8")
    for page in (layout.RESULTS / "units").glob("*.html"):
        if page.stem not in listed:
            page.unlink()
    with step.product(step.output("page")) as temporary:
        temporary.write_text(build_page(context), encoding="utf-8")


def _documents(step: Step, members: list[dict[str, Any]]) -> dict[str, dict[str, Any]]:
    """The documents of every stage by session, as far as they are there."""
    readable = [row["session"] for row in members if row["readable"]]
    return {
        "intake": {row["session"]: read_json(step.use(layout.inventory(row["session"]))) for row in members},
        "sync": {session: read_json(step.use(layout.clock(session))) for session in readable},
        "behaviour": {session: read_json(step.use(layout.audit(session))) for session in readable},
    }


def _curve_files(step: Step, member: dict[str, Any]) -> list[Path]:
    """The curves of one session's units, as inputs of this job."""
    folders = (layout.shard_folder(member["session"], shard) for shard in range(member["shards"]))
    return [step.use(folder / "curves.npz") for folder in folders]


def _miniatures(files: dict[str, list[Path]], settings: Any) -> dict[tuple[str, int], Any]:
    """A small picture of every unit that has curves."""
    from odograph.figures.miniature import DRAWN_FROM, draw_miniature

    def shown(name: str) -> bool:
        return name.partition("/")[2] in DRAWN_FROM

    drawn = {}
    for session, shards in files.items():
        for file in shards:
            curves: dict[int, dict[str, Any]] = {}
            for name, values in read_arrays(file, shown).items():
                unit, _, curve = name.partition("/")
                curves.setdefault(int(unit), {})[curve] = values
            for unit, own in curves.items():
                drawn[session, unit] = draw_miniature(own, settings)
    return drawn


if __name__ == "__main__":
    sys.exit(run_step("report", work))
