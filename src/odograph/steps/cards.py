"""Step of rule `cards`: a picture for every unit of one shard."""

from __future__ import annotations

import sys
from pathlib import Path

from odograph.provenance import layout
from odograph.provenance.step import Step, run_step


def work(step: Step) -> None:
    """Draw the cards of the shard's units and remove those of units that are no more."""
    units = step.read_table("units")
    scores = step.read_table("scores")
    curves = step.read_arrays("curves")
    behaviour = step.read_table("behaviour")
    corners = step.read_json("audit").get("arena_corners_m")
    drawn: list[Path] = []
    if len(units):
        drawn = _draw(step, units, scores, curves, behaviour, corners)
    _remove_others(step, drawn)
    index = {"session": step.session, "shard": step.shard, "cards": [path.name for path in drawn]}
    step.write_json("index", index)


def _draw(step, units, scores, curves, behaviour, corners) -> list[Path]:
    from odograph.figures.card import draw_card
    from odograph.figures.style import figure_bytes
    from odograph.settings.figures import FiguresSettings

    settings, origin = step.stage_settings(FiguresSettings), step.origin
    drawn = []
    for row in units.to_dict("records"):
        unit = int(row["unit"])
        row |= {"animal": origin["animal"], "region": origin["regions"].get(str(unit))}
        own = {
            name.partition("/")[2]: values
            for name, values in curves.items()
            if name.partition("/")[0] == str(unit)
        }
        figure = draw_card(row, scores[scores["unit"] == unit], own, behaviour, corners, settings)
        for suffix in settings.formats:
            path = layout.cards_folder(step.session) / f"unit-{unit}.{suffix}"
            title = f"session {step.session}, unit {unit}"
            with step.product(path, unit=unit) as temporary:
                temporary.write_bytes(figure_bytes(figure, suffix, step.record_id, title))
            drawn.append(path)
    return drawn


def _remove_others(step: Step, drawn: list[Path]) -> None:
    """Remove cards of this shard's units, and indexes of shards, that are no more."""
    folder = layout.cards_folder(step.session)
    for path in folder.glob("unit-*"):
        number = path.stem.removeprefix("unit-")
        ours = number.isdecimal() and layout.shard_of(step.session, int(number), step.shards) == step.shard
        if ours and path not in drawn:
            step.remove(path)
    for path in folder.glob("shard-*.json"):
        number = path.name.partition(".")[0].removeprefix("shard-")
        if step.shard == 0 and number.isdecimal() and int(number) >= step.shards:
            step.remove(path)


if __name__ == "__main__":
    sys.exit(run_step("cards", work))
