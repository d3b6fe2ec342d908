"""The pictures of all units together, by name: tables in, figures out."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from matplotlib.ticker import NullFormatter

from odograph.figures.captions import POPULATION_FIGURES
from odograph.figures.colours import INK, RULE, SOFT_INK, model_label, model_terms, term_colour, term_label
from odograph.figures.gains import draw_speed_gains
from odograph.figures.panels import number, say
from odograph.figures.shares import (
    WIDTH_IN,
    animal_legend,
    animal_marks,
    draw_composition,
    draw_speed_shapes,
    empty_figure,
    headline,
    n_text,
)
from odograph.figures.style import axes_at, figure_style, new_figure
from odograph.settings.figures import FiguresSettings

_OTHERS = "#98a2ac"
_TERM_ORDER = ("position", "head_direction", "speed")


def draw_population_figure(
    name: str,
    units: pd.DataFrame,
    scores: pd.DataFrame,
    composition: pd.DataFrame,
    speed: pd.DataFrame,
    settings: FiguresSettings,
) -> Figure:
    """Draw one of the population's figures.

    Parameters
    ----------
    name : str
        One of `odograph.figures.captions.POPULATION_FIGURES`.
    units, scores, composition, speed : DataFrame
        The population's tables; empty ones give a figure that says so.
    settings : FiguresSettings
        How it is drawn.

    Raises
    ------
    KeyError
        When there is no figure of that name.
    """
    figures = {
        "composition": lambda: draw_composition(composition, settings),
        "speed_shapes": lambda: draw_speed_shapes(speed, settings),
        "slow_against_fast": lambda: draw_slow_against_fast(units, speed, settings),
        "speed_gains": lambda: draw_speed_gains(units, settings),
        "held_out_scores": lambda: draw_held_out_scores(units, scores, settings),
    }
    if name not in figures:
        raise KeyError(f"no population figure {name!r}; there are {', '.join(POPULATION_FIGURES)}")
    return figures[name]()


def _fitted(units: pd.DataFrame) -> pd.DataFrame:
    return units[units["status"] == "fitted"] if len(units) else units


def _animals(units: pd.DataFrame) -> list[str]:
    return sorted({str(animal) for animal in units["animal"].dropna()}) if "animal" in units else []


def draw_slow_against_fast(units: pd.DataFrame, speed: pd.DataFrame, settings: FiguresSettings) -> Figure:
    """Information about position and head direction while running slowly and while running fast.

    Parameters
    ----------
    units : DataFrame
        The population's units table with `<variable>_information_slow_bits_per_spike` and `..._fast_...`.
    speed : DataFrame
        The population's speed table, whose rows `<variable>_information_change` give the median and its
        interval.
    settings : FiguresSettings
        How it is drawn.
    """
    title = "information at slow and at fast running"
    with figure_style(settings):
        fitted = _fitted(units)
        if not len(fitted):
            return empty_figure(settings, title, "No unit was fitted, so there is nothing to compare.")
        figure = new_figure(WIDTH_IN, 4.35, settings)
        headline(figure, title, n_text(len(fitted), len(_animals(fitted))))
        marks = animal_marks(_animals(fitted))
        for place, variable in enumerate(("position", "head_direction")):
            axes = axes_at(figure, 0.7 + 3.5 * place, 1.15, 2.6, 2.6)
            _draw_pairs(axes, fitted, speed, variable, marks)
        animal_legend(figure, marks, 0.1, 0.06)
    return figure


def _draw_pairs(
    axes: Any, fitted: pd.DataFrame, speed: pd.DataFrame, variable: str, marks: dict[str, str]
) -> None:
    names = [f"{variable}_information_{pace}_bits_per_spike" for pace in ("slow", "fast")]
    colour = term_colour(variable)
    axes.set_title(f"about {term_label(variable)}", color=colour)
    pairs = fitted.dropna(subset=names) if set(names) <= set(fitted.columns) else fitted.iloc[:0]
    if not len(pairs):
        say(axes, "No unit has enough of both slow and fast running to compare.", 32)
        return
    slow, fast = (pairs[name].to_numpy(float) for name in names)
    encodes = pairs[f"encodes_{variable}"].to_numpy(bool)
    animal = pairs["animal"].astype(str).to_numpy()
    positive = np.concatenate([slow, fast])
    positive = positive[positive > 0]
    low = max(float(np.quantile(positive, 0.01)) * 0.7, 1e-3) if positive.size else 1e-3
    high = max(float(positive.max()) * 1.3, low * 10) if positive.size else 1.0
    # On logarithmic axes what is at or below zero has no place but the edge.
    slow, fast = np.clip(slow, low, None), np.clip(fast, low, None)
    for name, mark in marks.items():
        for chosen, face, edge in ((~encodes, "white", _OTHERS), (encodes, colour, "white")):
            part = (animal == name) & chosen
            order = 3 if edge == "white" else 2
            axes.plot(
                slow[part],
                fast[part],
                mark,
                ms=3.8,
                mfc=face,
                mec=edge,
                mew=0.6,
                alpha=0.9,
                clip_on=False,
                zorder=order,
                ls="none",
            )
    steps = (1, 2, 5) if high / low < 30 else (1,)
    ticks = [step * 10.0**k for k in range(-3, 3) for step in steps if low <= step * 10.0**k <= high]
    for axis, scale in ((axes.xaxis, axes.set_xscale), (axes.yaxis, axes.set_yscale)):
        scale("log")
        axis.set_ticks(ticks, [f"{tick:g}" for tick in ticks])
        axis.set_minor_formatter(NullFormatter())
    axes.plot([low, high], [low, high], color=SOFT_INK, lw=0.7, ls=(0, (4, 3)), zorder=1)
    axes.set_xlim(low, high)
    axes.set_ylim(low, high)
    axes.set_aspect("equal")
    axes.set_xlabel("slow (bits per spike)")
    axes.set_ylabel("fast (bits per spike)")
    others = int((~encodes).sum())
    axes.annotate(
        _change_text(speed, variable, others), (0, 0), (0, -28), xycoords="axes fraction",
        textcoords="offset points", va="top", color=SOFT_INK, linespacing=1.35,
    )  # fmt: skip


def _change_text(speed: pd.DataFrame, variable: str, others: int) -> str:
    """What the filled and the open marks are, and the median change of the filled ones."""
    lines = []
    wanted = f"{variable}_information_change"
    rows = speed[(speed["measure"] == wanted) & (speed["level"] == "all")] if len(speed) else speed
    if len(rows) and int(rows["n"].iloc[0]):
        row = rows.iloc[0]
        interval = (
            f" ({number(row['low'], 3)} to {number(row['high'], 3)})" if np.isfinite(row["low"]) else ""
        )
        lines = [
            f"filled: {number(row['n'], 0)} units encode it, {number(row['k'], 0)} gain,",
            f"median change {number(row['value'], 3)}{interval}",
        ]
    return "\n".join([*lines, f"open: the other {number(others, 0)} units" if others else ""])


def draw_held_out_scores(units: pd.DataFrame, scores: pd.DataFrame, settings: FiguresSettings) -> Figure:
    """Held-out scores of every model over the population, and how often each was selected.

    Parameters
    ----------
    units, scores : DataFrame
        The population's tables.
    settings : FiguresSettings
        How it is drawn.
    """
    title = "held-out score of every model"
    with figure_style(settings):
        fitted = _fitted(units)
        table = (
            scores.merge(fitted[["session", "unit"]], on=["session", "unit"])
            if len(fitted) and len(scores)
            else []
        )
        if not len(table):
            return empty_figure(settings, title, "No unit was fitted, so there are no scores.")
        models = sorted(set(table["model"]) - {"constant"}, key=_model_rank)
        height = 0.32 * len(models)
        figure = new_figure(WIDTH_IN, 1.12 + height, settings)
        axes, counts = axes_at(figure, 2.45, 0.6, 2.95, height), axes_at(figure, 5.7, 0.6, 1.1, height)
        axes.set_title("each unit, quartiles and median")
        counts.set_title("times selected")
        limits = _score_limits(table["bits_per_spike"].dropna().to_numpy(float))
        jitter = np.random.default_rng(0)
        for place, model in enumerate(models):
            y = len(models) - 1 - place
            terms = model_terms(model)
            colour = term_colour(terms[0]) if len(terms) == 1 else INK
            of_model = table[table["model"] == model].sort_values(["session", "unit"])
            value = of_model["bits_per_spike"].dropna().to_numpy(float)
            _draw_spread(axes, value, y, colour, jitter, limits)
            chosen = int((fitted["selected_model"] == model).sum())
            counts.barh(y, chosen, height=0.6, color=colour, alpha=0.75, lw=0)
            counts.text(chosen, y, f" {chosen}", va="center", color=SOFT_INK)
        _finish_scores(axes, counts, models, limits)
        counts.set_xlabel(f"units (none: {int((fitted['selected_model'] == 'constant').sum())})")
        headline(figure, title, n_text(len(fitted), len(_animals(fitted))))
    return figure


def _score_limits(values: np.ndarray) -> tuple[float, float]:
    """Limits that the most extreme half percent of scores do not widen."""
    if not values.size:
        return -0.01, 0.01
    low, high = np.quantile(values, [0.005, 0.995])
    return min(float(low) * 1.1, -0.03 * float(high)), max(float(high) * 1.06, 0.01)


def _draw_spread(
    axes: Any,
    value: np.ndarray,
    y: float,
    colour: str,
    jitter: np.random.Generator,
    limits: tuple[float, float],
) -> None:
    at = y + jitter.uniform(-0.26, 0.26, value.size)
    shown = np.clip(value, *limits)
    axes.plot(shown, at, ".", ms=2.6, mew=0, color=colour, alpha=0.4, rasterized=True, clip_on=False)
    if value.size:
        quarter, middle, three = np.quantile(value, [0.25, 0.5, 0.75])
        axes.plot([quarter, three], [y, y], color=INK, lw=1.1, zorder=3)
        axes.plot(middle, y, "|", ms=9, mew=2, color=INK, zorder=4)


def _finish_scores(axes: Any, counts: Any, models: list[str], limits: tuple[float, float]) -> None:
    axes.axvline(0, color=RULE, lw=0.8, zorder=0)
    for each in (axes, counts):
        each.set_ylim(-0.6, len(models) - 0.4)
        each.locator_params(axis="x", nbins=4)
    axes.set_yticks(range(len(models))[::-1], [model_label(model) for model in models])
    counts.set_yticks([])
    axes.tick_params(axis="y", length=0)
    axes.set_xlim(*limits)
    axes.set_xlabel("bits per spike over constant rate")
    counts.margins(x=0.2)


def _model_rank(model: str) -> tuple[int, list[tuple[int, str]]]:
    terms = model_terms(model)
    return len(terms), [(_TERM_ORDER.index(t) if t in _TERM_ORDER else len(_TERM_ORDER), t) for t in terms]
