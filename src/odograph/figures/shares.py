"""Shares of the units, with their intervals and with the animals they come from."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from odograph.figures.colours import (
    INK,
    SOFT_INK,
    model_label,
    model_terms,
    shape_label,
    term_colour,
    term_label,
)
from odograph.figures.panels import number, say, wrapped
from odograph.figures.style import as_it_stands, axes_at, figure_style, new_figure, text_at
from odograph.settings.figures import FiguresSettings

WIDTH_IN = 7.2
ROW_IN = 0.36
ANIMAL_MARKS = ("o", "s", "^", "D", "v", "P", "X", "<", ">", "h")
# With more animals than marks, or than a row can hold apart, they are drawn alike and not named.
_MOST_NAMED = len(ANIMAL_MARKS)


def animal_marks(animals: list[str]) -> dict[str, str]:
    """A mark for each animal, in the order of their names."""
    names = sorted(set(animals))
    if len(names) > _MOST_NAMED:
        return dict.fromkeys(names, "o")
    return dict(zip(names, ANIMAL_MARKS, strict=False))


def animal_legend(figure: Figure, marks: dict[str, str], left_in: float, bottom_in: float) -> None:
    """Which mark is which animal, in one line at the foot."""
    if not 1 < len(marks) <= _MOST_NAMED:
        return
    width, height = figure.get_size_inches()
    handles = [
        Line2D([], [], ls="none", marker=mark, ms=4, mfc="white", mec=SOFT_INK, mew=0.8)
        for mark in marks.values()
    ]
    # The names come after: a label that begins with an underscore would be left out.
    legend = figure.legend(
        handles=handles, labels=["name"] * len(marks), loc="lower left",
        bbox_to_anchor=(left_in / width, bottom_in / height), ncols=len(marks), handletextpad=0.1,
        columnspacing=1.0, borderaxespad=0, borderpad=0,
    )  # fmt: skip
    for drawn, name in zip(legend.get_texts(), marks, strict=True):
        drawn.set_text(as_it_stands(name))


def headline(figure: Figure, title: str, note: str) -> None:
    """The figure's title, and n at its right."""
    width, height = figure.get_size_inches()
    text_at(figure, 0.1, height - 0.12, title, va="top", fontsize=10, weight="bold")
    text_at(figure, width - 0.1, height - 0.135, note, va="top", ha="right", color=SOFT_INK)


def empty_figure(settings: FiguresSettings, title: str, reason: str) -> Figure:
    """A figure that says why there is nothing to draw."""
    figure = new_figure(WIDTH_IN, 1.2, settings)
    headline(figure, title, "n = 0 units")
    say(axes_at(figure, 0.1, 0.1, 7.0, 0.65), reason, 110)
    return figure


def n_text(n: int, animals: int, what: str = "fitted units") -> str:
    """`n = 170 fitted units, 3 animals`."""
    what = what.replace("units", "unit") if n == 1 else what
    return f"n = {n:,} {what}, {animals} animal{'' if animals == 1 else 's'}"


def draw_composition(composition: pd.DataFrame, settings: FiguresSettings) -> Figure:
    """What the units encode: each variable whatever else, and each exact combination.

    Parameters
    ----------
    composition : DataFrame
        The population's composition table: level, name, kind, category, k, n, animals, share, low, high.
    settings : FiguresSettings
        How it is drawn.
    """
    title = "what the units encode"
    with figure_style(settings):
        whole = composition[composition["level"] == "all"]
        if not len(whole) or not int(whole["n"].iloc[0]):
            return empty_figure(settings, title, "No unit was fitted, so there is nothing to count.")
        included = whole.loc[whole["kind"] == "includes", "category"].tolist()
        exact = whole.loc[whole["kind"] == "exact", "category"].tolist()
        upper, lower = ROW_IN * len(included), ROW_IN * len(exact)
        figure = new_figure(WIDTH_IN, 2.1 + upper + lower, settings)
        headline(figure, title, n_text(int(whole["n"].iloc[0]), int(whole["animals"].iloc[0])))
        marks = animal_marks(composition.loc[composition["level"] == "animal", "name"].astype(str).tolist())
        axes = axes_at(figure, 2.5, 1.36 + lower, 3.75, upper)
        axes.set_title("each variable, whatever else the unit encodes", x=-0.64)
        rows = _rows(composition[composition["kind"] == "includes"], included, marks)
        draw_shares(
            axes, rows, [_included_colour(name) for name in included], [_included_label(n) for n in included]
        )
        axes = axes_at(figure, 2.5, 0.64, 3.75, lower)
        axes.set_title("exact combinations", x=-0.64)
        labels = ["none" if name == "constant" else model_label(name) for name in exact]
        rows = _rows(composition[composition["kind"] == "exact"], exact, marks)
        draw_shares(axes, rows, [_exact_colour(name) for name in exact], labels)
        for each in figure.axes:
            each.set_xlabel("share of fitted units (%)")
        animal_legend(figure, marks, 0.1, 0.06)
    return figure


def draw_speed_shapes(speed: pd.DataFrame, settings: FiguresSettings) -> Figure:
    """How the rates of the units that encode speed follow it.

    Parameters
    ----------
    speed : DataFrame
        The population's speed table; its rows with measure "speed_shape" are drawn.
    settings : FiguresSettings
        How it is drawn.
    """
    title = "shape of the speed tuning"
    with figure_style(settings):
        shapes = speed[speed["measure"] == "speed_shape"] if len(speed) else speed
        whole = shapes[shapes["level"] == "all"] if len(shapes) else shapes
        if not len(whole) or not int(whole["n"].iloc[0]):
            return empty_figure(settings, title, "No unit encodes speed, so there are no shapes to count.")
        names = whole["category"].tolist()
        figure = new_figure(WIDTH_IN, 1.22 + ROW_IN * len(names), settings)
        headline(
            figure,
            title,
            n_text(int(whole["n"].iloc[0]), int(whole["animals"].iloc[0]), "units that encode speed"),
        )
        marks = animal_marks(shapes.loc[shapes["level"] == "animal", "name"].astype(str).tolist())
        axes = axes_at(figure, 2.5, 0.64, 3.75, ROW_IN * len(names))
        rows = _rows(shapes.assign(share=shapes["value"]), names, marks)
        colours = [SOFT_INK if name == "undecided" else term_colour("speed") for name in names]
        draw_shares(axes, rows, colours, [shape_label(name) for name in names])
        for place, name in enumerate(names):
            _draw_shape_sign(axes, name, len(names) - 1 - place, colours[place])
        axes.set_xlabel("share of the units that encode speed (%)")
        animal_legend(figure, marks, 0.1, 0.06)
    return figure


def _draw_shape_sign(axes: Any, shape: str, y: float, colour: str) -> None:
    """A small drawing of the shape beside its name."""
    lines = {"rising": (0, 0.5, 1), "falling": (1, 0.5, 0), "non_monotonic": (0, 1, 0)}
    if shape not in lines:
        return
    axes.plot(
        np.linspace(-0.33, -0.26, 3), y - 0.2 + 0.4 * np.array(lines[shape]), color=colour, lw=1.4,
        clip_on=False, transform=axes.get_yaxis_transform(), solid_joinstyle="round",
    )  # fmt: skip


def _included_label(category: str) -> str:
    return term_label(category.split(",")[0])


def _included_colour(category: str) -> str:
    name = category.split(",")[0]
    return INK if " " in name else term_colour(name)


def _exact_colour(category: str) -> str:
    terms = model_terms(category)
    if not terms:
        return SOFT_INK
    return term_colour(terms[0]) if len(terms) == 1 else INK


def _rows(table: pd.DataFrame, categories: list[str], marks: dict[str, str]) -> list[dict[str, Any]]:
    whole = table[table["level"] == "all"].set_index("category")
    single = table[table["level"] == "animal"].sort_values("name")
    rows = []
    for category in categories:
        animals = single[single["category"] == category].to_dict("records")
        rows.append(
            {
                "all": whole.loc[category].to_dict(),
                "animals": [{**animal, "mark": marks[str(animal["name"])]} for animal in animals],
            }
        )
    return rows


def draw_shares(axes: Any, rows: list[dict[str, Any]], colours: list[str], labels: list[str]) -> None:
    """Shares with their intervals, a row each: the whole as a bar, a dot and a thick line, the animals thin.

    Parameters
    ----------
    axes : Axes
        Where to draw.
    rows : list of dict
        `all` with share, low, high, k, n; `animals`, a list of the same with `mark`.
    colours, labels : list of str
        One for each row.
    """
    top = 0.0
    most = max((len(row["animals"]) for row in rows), default=0)
    for place, (row, colour) in enumerate(zip(rows, colours, strict=True)):
        y = len(rows) - 1 - place
        whole, animals = row["all"], row["animals"]
        if most == 1:
            # One animal is the whole: its own interval is all there is.
            whole = {**whole, "low": animals[0]["low"], "high": animals[0]["high"]}
            animals = []
        above = y + 0.2 if animals else y
        axes.barh(y, 100 * whole["share"], height=0.8, color=colour, alpha=0.14, lw=0, zorder=1)
        for animal, offset in zip(animals, np.linspace(-0.02, -0.32, len(animals)), strict=True):
            if np.isfinite(animal["low"]) and most <= _MOST_NAMED:
                line = [100 * animal["low"], 100 * animal["high"]]
                axes.plot(line, [y + offset] * 2, color=SOFT_INK, lw=0.5, zorder=2)
            at = 100 * animal["share"]
            axes.plot(
                at,
                y + offset,
                animal["mark"],
                ms=2.8,
                mfc="white",
                mec=SOFT_INK,
                mew=0.6,
                zorder=3,
                clip_on=False,
            )
            top = max(top, at, 100 * np.nan_to_num(animal["high"]) if most <= _MOST_NAMED else 0)
        if np.isfinite(whole["low"]):
            line = [100 * whole["low"], 100 * whole["high"]]
            axes.plot(line, [above, above], color=colour, lw=2.6, zorder=4, solid_capstyle="butt")
        at = 100 * whole["share"]
        axes.plot(at, above, "o", ms=5.4, color=colour, mec="white", mew=0.8, zorder=5, clip_on=False)
        top = max(top, at, 100 * np.nan_to_num(whole["high"]))
        axes.text(
            1.03, y, f"{number(whole['k'], 0)} of {number(whole['n'], 0)}",
            transform=axes.get_yaxis_transform(), va="center", color=SOFT_INK,
        )  # fmt: skip
    axes.set_xlim(0, min(100.0, top * 1.03) if top else 1.0)
    axes.set_ylim(-0.6, len(rows) - 0.4)
    axes.set_yticks(range(len(rows))[::-1], [wrapped(label, 34, 2) for label in labels])
    axes.tick_params(axis="y", length=0, pad=6)
    axes.locator_params(axis="x", nbins=6)
