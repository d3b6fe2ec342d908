"""The lower rows of a card: curves with bands, and the held-out scores of all models."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from odograph.figures.colours import (
    INK,
    RULE,
    SOFT_INK,
    VERDICT_COLOURS,
    model_label,
    model_terms,
    term_colour,
    term_label,
)
from odograph.figures.panels import absent, column, number, say, term_title, valid_bins, wrapped
from odograph.figures.style import direction_colours
from odograph.settings.figures import FiguresSettings

STANDARD_TERMS = ("position", "head_direction", "speed")
MOST_MODELS = 12
LEAST_SCORE_AXIS = 0.024


def _draw_curve(
    axes: Any, x: np.ndarray, curves: Mapping[str, np.ndarray], term: str, row: Mapping[str, Any]
) -> float:
    colour = term_colour(term)
    rate = np.asarray(curves[f"{term}_rate_hz"], float)
    low, high = curves.get(f"{term}_rate_low_hz"), curves.get(f"{term}_rate_high_hz")
    observed = curves.get(f"{term}_observed_hz")
    top = float(np.nanmax(rate)) if np.isfinite(rate).any() else 1.0
    if low is not None and high is not None:
        axes.fill_between(x, low, high, color=colour, alpha=0.22, lw=0, zorder=2)
        top = max(top, min(float(np.nanmax(high)), 3 * top))
    if observed is not None and np.isfinite(observed).any():
        axes.plot(x, observed, ls="none", marker=".", ms=2.6, mew=0, color=SOFT_INK, zorder=3)
        top = max(top, min(float(np.nanmax(observed)), 3 * top))
    axes.plot(x, rate, color=colour, lw=1.5, zorder=4)
    if number(row.get("mean_rate_hz")) != "–":
        axes.axhline(float(row["mean_rate_hz"]), color=SOFT_INK, lw=0.6, ls=(0, (4, 3)), zorder=1)
    axes.set_ylabel("rate (Hz)")
    axes.locator_params(axis="y", nbins=4)
    return top * 1.06 if top > 0 else 1.0


def draw_direction(
    axes: Any, row: Mapping[str, Any], curves: Mapping[str, np.ndarray], settings: FiguresSettings
) -> None:
    """The curve of head direction over a strip of the colours that the spikes are drawn in."""
    term_title(axes, row, "head_direction")
    if "head_direction_rate_hz" not in curves:
        say(axes, absent(row, "head_direction"))
        return
    degrees = np.degrees(np.asarray(curves["head_direction_rad"], float))
    top = _draw_curve(axes, degrees, curves, "head_direction", row)
    strip = direction_colours(settings)(np.linspace(0, 1, 181)[None, :-1])
    axes.imshow(strip, extent=(0, 360, -0.1 * top, -0.03 * top), aspect="auto", zorder=1)
    axes.set_xlim(0, 360)
    axes.set_ylim(-0.1 * top, top)
    axes.set_yticks([tick for tick in axes.get_yticks() if 0 <= tick <= top])
    axes.set_xticks([0, 90, 180, 270, 360])
    axes.set_xlabel("head direction (°)")


def draw_speed(
    axes: Any, row: Mapping[str, Any], curves: Mapping[str, np.ndarray], behaviour: pd.DataFrame
) -> None:
    """The curve of running speed over a histogram of the time spent at each speed."""
    term_title(axes, row, "speed")
    if "speed_rate_hz" not in curves:
        say(axes, absent(row, "speed"), 24)
        return
    speed = np.asarray(curves["speed_cm_s"], float)
    top = _draw_curve(axes, speed, curves, "speed", row)
    # How the session's time is spread over speed, so that a curve's thin end is seen for what it is.
    visited = column(behaviour, "speed_cm_s")[valid_bins(behaviour)]
    visited = visited[np.isfinite(visited)]
    right = float(speed[-1])
    if visited.size:
        share, edges = np.histogram(visited, bins=24, range=(0, right))
        height = share / max(share.max(), 1) * 0.18 * top
        axes.bar(edges[:-1], height, width=np.diff(edges), align="edge", color=RULE, lw=0, zorder=0)
    axes.set_xlim(0, right)
    axes.set_ylim(0, top)
    axes.set_xlabel("speed (cm/s)")


def extra_terms(curves: Mapping[str, np.ndarray]) -> list[str]:
    """Terms with a curve along one axis, other than head direction and speed, by name."""
    names = {name.removesuffix("_rate_hz") for name in curves if name.endswith("_rate_hz")}
    return sorted(
        name
        for name in names - set(STANDARD_TERMS)
        if np.ndim(curves[f"{name}_rate_hz"]) == 1 and _axis_of(curves, name) is not None
    )


def _axis_of(curves: Mapping[str, np.ndarray], term: str) -> tuple[np.ndarray, str] | None:
    if f"{term}_rad" in curves:
        return np.degrees(np.asarray(curves[f"{term}_rad"], float)), f"{term_label(term)} (°)"
    if f"{term}_value" in curves:
        return np.asarray(curves[f"{term}_value"], float), term_label(term)
    return None


def draw_extra(axes: Any, row: Mapping[str, Any], curves: Mapping[str, np.ndarray], term: str) -> None:
    """The curve of a variable that the laboratory added."""
    term_title(axes, row, term)
    x, label = _axis_of(curves, term)
    top = _draw_curve(axes, x, curves, term, row)
    axes.set_xlim(float(np.min(x)), float(np.max(x)))
    axes.set_ylim(0, top)
    axes.locator_params(axis="x", nbins=4)
    axes.set_xlabel(label)


def score_rows(scores: pd.DataFrame, selected: str) -> pd.DataFrame:
    """The models to list, singles first; of many the best, the selected and the constant one."""
    order = [
        "".join("0" if term in model_terms(model) else "1" for term in STANDARD_TERMS)
        for model in scores["model"]
    ]
    table = scores.assign(terms=[len(model_terms(model)) for model in scores["model"]], order=order)
    if len(table) > MOST_MODELS:
        kept = table.nlargest(MOST_MODELS - 2, "bits_per_spike")["model"]
        table = table[table["model"].isin({*kept, selected, "constant"})]
    return table.sort_values(["terms", "order", "model"], kind="stable")


def draw_scores(axes: Any, row: Mapping[str, Any], scores: pd.DataFrame, title_left: float) -> None:
    """Held-out scores with their standard errors, the selected model marked.

    `title_left` is where the panel's title begins, in widths of the axes.
    """
    selected = str(row.get("selected_model") or "")
    if not len(scores):
        axes.set_title("held-out score of every model", x=title_left)
        axes.set_axis_off()
        axes.text(
            title_left, 0.92, wrapped(absent(row, "the models"), 44, 6), transform=axes.transAxes, va="top",
            color=SOFT_INK,
        )  # fmt: skip
        return
    table = score_rows(scores, selected)
    every = len(table) == len(scores)
    title = (
        "held-out score of every model" if every else f"held-out scores, {len(table)} of {len(scores)} models"
    )
    axes.set_title(title, x=title_left)
    level = np.arange(len(table))[::-1]
    score = table["bits_per_spike"].to_numpy(float)
    spread = np.nan_to_num(table["bits_per_spike_se"].to_numpy(float))
    for y, model, value, error in zip(level, table["model"], score, spread, strict=True):
        chosen = model == selected
        colour = INK if chosen else SOFT_INK
        if not np.isfinite(value):
            across = axes.get_yaxis_transform()
            axes.text(0.02, y, "failed", transform=across, va="center", color=VERDICT_COLOURS["fail"])
            continue
        axes.plot([value - error, value + error], [y, y], color=colour, lw=1.4 if chosen else 0.9, zorder=2)
        mark, size, face = ("D", 4.6, INK) if chosen else ("o", 3.4, "white")
        axes.plot(value, y, mark, ms=size, mec=colour, mew=0.9, mfc=face, zorder=3)
    axes.axvline(0, color=RULE, lw=0.8, zorder=0)
    axes.set_ylim(-0.6, len(table) - 0.4)
    axes.set_yticks(level, [model_label(model) for model in table["model"]])
    for label, model in zip(axes.get_yticklabels(), table["model"], strict=True):
        label.set_weight("bold" if model == selected else "normal")
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    # Scores that are all next to nothing are not blown up to the width of the panel.
    left, right = axes.get_xlim()
    axes.set_xlim(min(left, -0.002), max(right, LEAST_SCORE_AXIS))
    axes.locator_params(axis="x", nbins=3)
    axes.set_xlabel("bits per spike")
