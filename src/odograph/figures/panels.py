"""The small parts that cards and session pictures have in common."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from odograph.figures.colours import INK, PATH, SOFT_INK, term_colour, term_label
from odograph.figures.style import as_it_stands

Extent = tuple[float, float, float, float]


def number(value: Any, digits: int = 2, missing: str = "–") -> str:
    """A number as text with a thousands sign, a dash for what is missing."""
    if value is None:
        return missing
    try:
        value = float(value)
    except (TypeError, ValueError):
        return str(value)
    if not math.isfinite(value):
        return missing
    # Adding zero turns a negative zero into a plain one.
    return f"{round(value, digits) + 0.0:,.{digits}f}".replace("-", "−")


def wrapped(text: str, columns: int, lines: int) -> str:
    """Text broken at `columns`, with an ellipsis when it needs more than `lines`."""
    return "\n".join(textwrap.wrap(text, columns, max_lines=lines, placeholder=" …"))


def thinned(n: int, most: int) -> np.ndarray:
    """Indices of an even sample of at most `most` out of `n`."""
    if n <= most:
        return np.arange(n)
    return np.linspace(0, n - 1, most).round().astype(int)


def place_extent(x_m: np.ndarray, y_m: np.ndarray, corners_m: Any = None, margin: float = 0.012) -> Extent:
    """Left, right, bottom and top (m) that hold the path and the arena, with a margin around them."""
    x, y = np.asarray(x_m, float).ravel(), np.asarray(y_m, float).ravel()
    if corners_m is not None and len(corners_m):
        corners = np.asarray(corners_m, float)
        x, y = np.concatenate([x, corners[:, 0]]), np.concatenate([y, corners[:, 1]])
    x, y = x[np.isfinite(x)], y[np.isfinite(y)]
    if not x.size or not y.size:
        return (0.0, 1.0, 0.0, 1.0)
    wide = margin * max(np.ptp(x), np.ptp(y), 1e-3)
    return (x.min() - wide, x.max() + wide, y.min() - wide, y.max() + wide)


def draw_arena(axes: Any, corners_m: Any) -> None:
    """The arena's outline."""
    if corners_m is None or not len(corners_m):
        return
    corners = np.asarray(corners_m, float)
    closed = np.vstack([corners, corners[:1]])
    axes.plot(closed[:, 0], closed[:, 1], color=SOFT_INK, lw=0.9, solid_joinstyle="miter", zorder=4)


def draw_path(axes: Any, x_m: np.ndarray, y_m: np.ndarray, valid: np.ndarray, most: int) -> None:
    """The path as a thin line, broken where it is not valid."""
    x = np.where(valid, x_m, np.nan)
    y = np.where(valid, y_m, np.nan)
    # Every k-th sample, and a gap kept wherever one falls between two of them.
    step = max(1, math.ceil(len(x) / most))
    kept = len(x) // step * step
    broken = np.isnan(x[:kept].reshape(-1, step)).any(axis=1)
    x_thin, y_thin = x[:kept:step].copy(), y[:kept:step].copy()
    x_thin[broken] = np.nan
    axes.plot(x_thin, y_thin, color=PATH, lw=0.45, zorder=1, rasterized=True)


def square_map_axes(axes: Any, extent: Extent, first: bool = True) -> None:
    """Equal scales, three ticks, metres."""
    axes.set_xlim(extent[:2])
    axes.set_ylim(extent[2:])
    axes.set_aspect("equal", anchor="SW")
    axes.locator_params(nbins=4)
    axes.set_xlabel("x (m)")
    for side in ("left", "bottom"):
        axes.spines[side].set_visible(False)
    if first:
        axes.set_ylabel("y (m)")
    else:
        axes.tick_params(left=False, labelleft=False)


def edges_of(centres: np.ndarray) -> tuple[float, float]:
    """Outer edges of evenly spaced bins."""
    centres = np.asarray(centres, float)
    half = (centres[-1] - centres[0]) / (2 * (len(centres) - 1)) if len(centres) > 1 else 0.5
    return centres[0] - half, centres[-1] + half


def say(axes: Any, text: str, columns: int = 34) -> None:
    """A panel that has nothing to draw says why."""
    axes.set_axis_off()
    axes.text(
        0.0, 0.92, as_it_stands(wrapped(text, columns, 8)), transform=axes.transAxes, va="top", ha="left",
        color=SOFT_INK, linespacing=1.35,
    )  # fmt: skip


def column(behaviour: pd.DataFrame, name: str) -> np.ndarray:
    """A column of the behaviour as floats; NaN where there is no such column."""
    return behaviour[name].to_numpy(float) if name in behaviour else np.full(len(behaviour), np.nan)


def valid_bins(behaviour: pd.DataFrame) -> np.ndarray:
    """Which bins of the behaviour are valid, (n_bins,) bool."""
    return behaviour["valid"].to_numpy(bool) if "valid" in behaviour else np.ones(len(behaviour), bool)


def unit_status(row: Mapping[str, Any]) -> str:
    """A unit's status: fitted, too_few_spikes or failed."""
    return str(row.get("status") or "fitted")


def absent(row: Mapping[str, Any], what: str) -> str:
    """Why there is no fit of `what` for this unit."""
    status = unit_status(row)
    if status == "fitted":
        return f"There is no fit of {term_label(what)} for this unit."
    return "Not fitted: too few spikes." if status == "too_few_spikes" else "Not fitted: the fit failed."


def two_line_title(axes: Any, title: str, note: str, colour: str = INK) -> None:
    """A bold title and a quiet note below it; a second call takes the place of the first."""
    axes.set_title(title, color=colour, pad=14)
    for old in [text for text in axes.texts if text.get_gid() == "note"]:
        old.remove()
    axes.annotate(
        note, (0, 1), (0, 4), xycoords="axes fraction", textcoords="offset points",
        color=SOFT_INK, gid="note",
    )  # fmt: skip


def term_note(row: Mapping[str, Any], term: str) -> str:
    """Whether the selected model holds a variable, and the p of its test where there is one."""
    p = row.get(f"{term}_p")
    selected = term in str(row.get("selected_model") or "").split("+")
    notes = ["selected" if selected else "not selected"] if unit_status(row) == "fitted" else []
    if number(p) != "–":
        notes.append("p < 0.001" if float(p) < 0.001 else f"p = {float(p):.3f}")
    return ", ".join(notes)


def term_title(axes: Any, row: Mapping[str, Any], term: str) -> None:
    """A variable's name in its colour, and what was found about it."""
    two_line_title(axes, term_label(term), term_note(row, term), term_colour(term))
