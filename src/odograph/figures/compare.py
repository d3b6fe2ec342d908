"""Two runs of a study beside each other: shares before and after, and what became of the units."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.figure import Figure

from odograph.figures.colours import INK, RULE, SOFT_INK
from odograph.figures.panels import say
from odograph.figures.shares import WIDTH_IN, headline
from odograph.figures.style import axes_at, figure_style, new_figure
from odograph.settings.figures import FiguresSettings

_BEFORE, _AFTER = "#98a2ac", "#1d4e89"


def draw_comparison(
    composition: Sequence[Mapping[str, Any]],
    relations: Mapping[str, int],
    changed: int,
    settings: FiguresSettings,
) -> Figure:
    """Draw the comparison of two runs.

    Parameters
    ----------
    composition : sequence of mapping
        From `odograph.provenance.compare.conclusions.composition_changes`.
    relations : mapping of str to int
        Groups of units by what became of them.
    changed : int
        Units with a conclusion that changed.
    settings : FiguresSettings
        How it is drawn.
    """
    rows = [row for row in composition if row["kind"] == "includes"]
    height = max(0.3 * len(rows), 1.2)
    with figure_style(settings):
        figure = new_figure(WIDTH_IN, 1.45 + height, settings)
        number = sum(relations.values())
        units = "1 unit" if changed == 1 else f"{changed} units"
        headline(figure, "two runs compared", f"{number} groups of units, {units} with another conclusion")
        shares, kinds = axes_at(figure, 2.2, 0.75, 2.5, height), axes_at(figure, 5.75, 0.75, 1.25, height)
        _draw_shares(shares, rows)
        _draw_relations(kinds, relations)
    return figure


def _draw_shares(axes: Any, rows: Sequence[Mapping[str, Any]]) -> None:
    axes.set_title("share of the fitted units")
    if not rows:
        say(axes, "No composition in either run.", 32)
        return
    for place, row in enumerate(reversed(rows)):
        for side, mark, colour, lift in (("before", "o", _BEFORE, 0.13), ("after", "D", _AFTER, -0.13)):
            share, low, high = (row[f"{side}_{key}"] for key in ("share", "low", "high"))
            if share is None or not np.isfinite(share):
                continue
            if low is not None and np.isfinite(low):
                axes.plot([low, high], [place + lift] * 2, color=colour, lw=1.1, solid_capstyle="butt")
            face = "white" if side == "before" else colour
            axes.plot(share, place + lift, mark, ms=4.5, mfc=face, mec=colour, mew=1.0, clip_on=False)
    axes.set_yticks(range(len(rows)), [_label(row["category"]) for row in reversed(rows)])
    axes.tick_params(axis="y", length=0)
    axes.set_ylim(-0.6, len(rows) - 0.4)
    axes.set_xlim(0, 1)
    axes.set_xlabel("circle: before; diamond: after; line: interval", color=SOFT_INK)


def _label(category: str) -> str:
    return category.removesuffix(", whatever else").replace("_", " ")


def _draw_relations(axes: Any, relations: Mapping[str, int]) -> None:
    axes.set_title("what became of units")
    names = [name for name in relations if relations[name]]
    if not names:
        say(axes, "No unit in both runs.", 18)
        return
    counts = [relations[name] for name in reversed(names)]
    axes.barh(range(len(names)), counts, height=0.55, color=RULE, lw=0)
    for place, count in enumerate(counts):
        axes.text(count, place, f" {count}", va="center", color=INK)
    axes.set_yticks(range(len(names)), list(reversed(names)))
    axes.tick_params(axis="y", length=0)
    axes.set_ylim(-0.6, len(names) - 0.4)
    axes.margins(x=0.25)
    axes.locator_params(axis="x", nbins=3, integer=True)
    axes.set_xlabel("groups")
