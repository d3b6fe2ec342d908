"""The card of one unit: its path and spikes, its maps and curves with bands, and the held-out scores of all models."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.figure import Figure

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
from odograph.figures.panels import (
    draw_arena,
    draw_path,
    edges_of,
    number,
    place_extent,
    say,
    square_map_axes,
    thinned,
    wrapped,
)
from odograph.figures.style import axes_at, direction_colours, figure_style, new_figure, rate_colours, text_at
from odograph.settings.figures import FiguresSettings

WIDTH_IN, HEIGHT_IN = 7.2, 5.1
_MAP_IN, _MAP_BOTTOM_IN = 1.78, 2.6


def draw_card(
    row: Mapping[str, Any],
    scores: pd.DataFrame,
    curves: Mapping[str, np.ndarray],
    behaviour: pd.DataFrame,
    arena_corners_m: Any,
    settings: FiguresSettings,
) -> Figure:
    """Draw the card of one unit.

    Parameters
    ----------
    row : mapping
        The unit's row of the units table (session, unit, n_spikes, mean_rate_hz, status, selected_model, ...).
    scores : DataFrame
        The unit's rows of the scores table: model, bits_per_spike, bits_per_spike_se, converged, ...
    curves : mapping of arrays
        Maps and curves of the unit, in m, rad, cm/s and Hz; what is absent is said on the card, not drawn.
    behaviour : DataFrame
        One row per analysis bin: time_s, x_m, y_m, head_direction_rad, speed_cm_s, valid.
    arena_corners_m : (k, 2) array or None
        Corners of the arena.
    settings : FiguresSettings
        How it is drawn.

    Returns
    -------
    Figure
        7.2 by 5.1 inches. A unit that was not fitted gets a card too, which says why.
    """
    with figure_style(settings):
        figure = new_figure(WIDTH_IN, HEIGHT_IN, settings)
        _head(figure, row, behaviour)
        extent = place_extent(_column(behaviour, "x_m"), _column(behaviour, "y_m"), arena_corners_m)
        path = axes_at(figure, 0.46, _MAP_BOTTOM_IN, _MAP_IN, _MAP_IN)
        _draw_spikes(path, row, curves, behaviour, arena_corners_m, extent, settings)
        observed = axes_at(figure, 2.62, _MAP_BOTTOM_IN, _MAP_IN, _MAP_IN)
        fitted = axes_at(figure, 4.56, _MAP_BOTTOM_IN, _MAP_IN, _MAP_IN)
        scale = axes_at(figure, 6.44, _MAP_BOTTOM_IN, 0.09, _MAP_IN)
        _draw_maps(observed, fitted, scale, row, curves, arena_corners_m, extent, settings)
        _draw_direction(axes_at(figure, 0.46, 0.6, 1.78, 1.2), row, curves, settings)
        _draw_speed(axes_at(figure, 2.62, 0.6, 1.25, 1.2), row, curves, behaviour)
        _draw_scores(axes_at(figure, 5.86, 0.6, 1.24, 1.36), row, scores)
        _foot(figure, row)
    return figure


def _column(behaviour: pd.DataFrame, name: str) -> np.ndarray:
    return behaviour[name].to_numpy(float) if name in behaviour else np.full(len(behaviour), np.nan)


def _valid(behaviour: pd.DataFrame) -> np.ndarray:
    return behaviour["valid"].to_numpy(bool) if "valid" in behaviour else np.ones(len(behaviour), bool)


def _status(row: Mapping[str, Any]) -> str:
    return str(row.get("status") or "fitted")


def _status_text(row: Mapping[str, Any]) -> str:
    reason = row.get("status_reason")
    reason = reason if isinstance(reason, str) and reason else "no reason was recorded"
    words = {"too_few_spikes": "Too few spikes to fit", "failed": "The fit failed"}
    return f"{words.get(_status(row), _status(row).replace('_', ' '))}: {reason}"


def _absent(row: Mapping[str, Any], what: str) -> str:
    if _status(row) == "fitted":
        return f"There is no fit of {term_label(what)} for this unit."
    return (
        "Not fitted: too few spikes." if _status(row) == "too_few_spikes" else "Not fitted: the fit failed."
    )


def _head(figure: Figure, row: Mapping[str, Any], behaviour: pd.DataFrame) -> None:
    top = HEIGHT_IN - 0.16
    size = 11
    text_at(
        figure,
        0.1,
        top,
        f"{row.get('session')}  unit {row.get('unit')}",
        va="top",
        fontsize=size,
        weight="bold",
    )
    seconds = 0.0
    if len(behaviour) > 1 and "time_s" in behaviour:
        seconds = float(np.median(np.diff(behaviour["time_s"].to_numpy(float)[:1000]))) * int(
            _valid(behaviour).sum()
        )
    facts = [
        str(row["region"]) if isinstance(row.get("region"), str) and row.get("region") else None,
        str(row["animal"]) if isinstance(row.get("animal"), str) and row.get("animal") else None,
        f"n = {number(row.get('n_spikes'), 0)} spikes in {number(seconds / 60, 1)} min",
        f"mean {number(row.get('mean_rate_hz'))} Hz",
    ]
    text_at(figure, 0.1, top - 0.24, "  ·  ".join(part for part in facts if part), va="top", color=SOFT_INK)
    right = WIDTH_IN - 0.1
    if _status(row) == "fitted":
        model = str(row.get("selected_model") or "constant")
        text = "no variable" if model == "constant" else model_label(model)
        text_at(
            figure, right, top, f"selected: {text}", va="top", ha="right", fontsize=size - 2, weight="bold"
        )
        score = f"held out {number(row.get('selected_bits_per_spike'), 3)} bits per spike"
        if model != "constant":
            text_at(figure, right, top - 0.24, score, va="top", ha="right", color=SOFT_INK)
        return
    text_at(
        figure, right, top, wrapped(_status_text(row), 58, 2), va="top", ha="right",
        color=VERDICT_COLOURS["fail" if _status(row) == "failed" else "warn"], weight="bold",
    )  # fmt: skip


def _foot(figure: Figure, row: Mapping[str, Any]) -> None:
    parts = []
    for term, label in (("position", "position"), ("head_direction", "head direction")):
        whole = row.get(f"{term}_information_bits_per_spike")
        slow, fast = (row.get(f"{term}_information_{pace}_bits_per_spike") for pace in ("slow", "fast"))
        if number(whole) != "–":
            text = f"{label} {number(whole)}"
            if number(slow) != "–" and number(fast) != "–":
                text += f" (slow {number(slow)}, fast {number(fast)})"
            parts.append(text)
    if parts:
        text = "Information, bits per spike: " + "; ".join(parts)
        text_at(figure, 0.1, 0.05, text, va="bottom", fontsize=7, color=SOFT_INK)


def _draw_spikes(
    axes: Any,
    row: Mapping[str, Any],
    curves: Mapping[str, np.ndarray],
    behaviour: pd.DataFrame,
    corners: Any,
    extent: tuple[float, float, float, float],
    settings: FiguresSettings,
) -> None:
    x, y, valid = _column(behaviour, "x_m"), _column(behaviour, "y_m"), _valid(behaviour)
    axes.set_title("path and spikes")
    if not len(x) or not np.isfinite(x).any():
        say(axes, "There is no valid position in this session.")
        return
    draw_path(axes, x, y, valid, settings.path_points)
    draw_arena(axes, corners)
    square_map_axes(axes, extent)
    bins = np.asarray(curves.get("spike_bins", ()), dtype=int)
    bins = bins[(bins >= 0) & (bins < len(x))]
    bins = bins[valid[bins]]
    if not bins.size:
        return
    shown = bins[thinned(len(bins), settings.spike_dots)]
    direction = _column(behaviour, "head_direction_rad")[shown]
    known = np.isfinite(direction)
    colours: Any = INK
    if known.any():
        colours = direction_colours(settings)(np.nan_to_num(direction) / (2 * np.pi) % 1.0)
        colours[~known] = (0.4, 0.4, 0.4, 1.0)
    axes.scatter(x[shown], y[shown], s=3.2, c=colours, lw=0, alpha=0.85, zorder=3, rasterized=True)
    if len(shown) < len(bins):
        axes.set_title(f"path, {len(shown):,} of {len(bins):,} spikes")


def _draw_maps(
    observed_axes: Any,
    fitted_axes: Any,
    scale_axes: Any,
    row: Mapping[str, Any],
    curves: Mapping[str, np.ndarray],
    corners: Any,
    extent: tuple[float, float, float, float],
    settings: FiguresSettings,
) -> None:
    observed, fitted = curves.get("position_observed_hz"), curves.get("position_rate_hz")
    observed_axes.set_title("observed rate")
    fitted_axes.set_title("fitted by position")
    if observed is not None and fitted is not None and np.shape(observed) == np.shape(fitted):
        fitted = np.where(np.isfinite(observed), fitted, np.nan)
    shown = [np.asarray(values, float) for values in (observed, fitted) if values is not None]
    finite = [values[np.isfinite(values)] for values in shown]
    finite = [values for values in finite if values.size]
    if not finite:
        say(observed_axes, "No rate map of this unit is available.")
        say(fitted_axes, _absent(row, "position"))
        scale_axes.set_axis_off()
        return
    top = max(float(values.max()) for values in finite) or 1.0
    box = (*edges_of(curves["position_x_m"]), *edges_of(curves["position_y_m"]))
    colours, norm = rate_colours(settings), Normalize(0.0, top)
    for axes, values, nothing in (
        (observed_axes, observed, "No rate map of this unit is available."),
        (fitted_axes, fitted, _absent(row, "position")),
    ):
        if values is None:
            say(axes, nothing)
            continue
        axes.imshow(
            values, origin="lower", extent=box, cmap=colours, norm=norm, interpolation="nearest", zorder=1
        )
        draw_arena(axes, corners)
        square_map_axes(axes, extent, first=False)
    bar = scale_axes.figure.colorbar(ScalarMappable(norm, colours), cax=scale_axes)
    bar.outline.set_visible(False)
    bar.ax.tick_params(length=2)
    bar.set_label("rate (Hz)", labelpad=2)


def _term_title(axes: Any, row: Mapping[str, Any], term: str) -> None:
    encoded = bool(row.get(f"encodes_{term}") or False)
    p = row.get(f"{term}_p")
    notes = ["encoded" if encoded else "not encoded"] if _status(row) == "fitted" else []
    if number(p) != "–":
        notes.append("p < 0.001" if float(p) < 0.001 else f"p = {float(p):.3f}")
    axes.set_title(term_label(term), color=term_colour(term), pad=14 if notes else None)
    axes.annotate(
        ", ".join(notes), (0, 1), (0, 4), xycoords="axes fraction", textcoords="offset points", color=SOFT_INK,
    )  # fmt: skip


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


def _draw_direction(
    axes: Any, row: Mapping[str, Any], curves: Mapping[str, np.ndarray], settings: FiguresSettings
) -> None:
    _term_title(axes, row, "head_direction")
    if "head_direction_rate_hz" not in curves:
        say(axes, _absent(row, "head_direction"))
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


def _draw_speed(
    axes: Any, row: Mapping[str, Any], curves: Mapping[str, np.ndarray], behaviour: pd.DataFrame
) -> None:
    _term_title(axes, row, "speed")
    if "speed_rate_hz" not in curves:
        say(axes, _absent(row, "speed"), 24)
        return
    speed = np.asarray(curves["speed_cm_s"], float)
    top = _draw_curve(axes, speed, curves, "speed", row)
    # How the session's time is spread over speed, so that a curve's thin end is seen for what it is.
    visited = _column(behaviour, "speed_cm_s")[_valid(behaviour)]
    visited = visited[np.isfinite(visited)]
    right = float(speed[-1])
    if visited.size:
        share, edges = np.histogram(visited, bins=24, range=(0, right))
        height = share / max(share.max(), 1) * 0.18 * top
        axes.bar(edges[:-1], height, width=np.diff(edges), align="edge", color=RULE, lw=0, zorder=0)
    axes.set_xlim(0, right)
    axes.set_ylim(0, top)
    axes.set_xlabel("speed (cm/s)")


def _draw_scores(axes: Any, row: Mapping[str, Any], scores: pd.DataFrame) -> None:
    axes.set_title("held-out score of every model", x=-1.47)
    if scores is None or not len(scores):
        axes.set_axis_off()
        axes.text(
            -1.47, 0.92, wrapped(_absent(row, "the models"), 44, 6),
            transform=axes.transAxes, va="top", color=SOFT_INK, linespacing=1.35,
        )  # fmt: skip
        return
    table = scores.assign(
        terms=[len(model_terms(model)) for model in scores["model"]],
        order=["".join("0" if term in model_terms(model) else "1" for term in ("position", "head_direction", "speed"))
               for model in scores["model"]],
    ).sort_values(["terms", "order", "model"], kind="stable")  # fmt: skip
    selected = str(row.get("selected_model") or "")
    level = np.arange(len(table))[::-1]
    score = table["bits_per_spike"].to_numpy(float)
    spread = (
        np.nan_to_num(table["bits_per_spike_se"].to_numpy(float))
        if "bits_per_spike_se" in table
        else score * 0
    )
    for y, model, value, se in zip(level, table["model"], score, spread, strict=True):
        chosen = model == selected
        if not np.isfinite(value):
            axes.text(
                0.02,
                y,
                "failed",
                transform=axes.get_yaxis_transform(),
                va="center",
                color=VERDICT_COLOURS["fail"],
            )
            continue
        colour = INK if chosen else SOFT_INK
        axes.plot([value - se, value + se], [y, y], color=colour, lw=1.4 if chosen else 0.9, zorder=2)
        axes.plot(value, y, "D" if chosen else "o", ms=4.6 if chosen else 3.4, mec=colour, mew=0.9,
                  mfc=INK if chosen else "white", zorder=3)  # fmt: skip
    axes.axvline(0, color=RULE, lw=0.8, zorder=0)
    axes.set_ylim(-0.6, len(table) - 0.4)
    axes.set_yticks(level, [model_label(model) for model in table["model"]])
    for label, model in zip(axes.get_yticklabels(), table["model"], strict=True):
        label.set_weight("bold" if model == selected else "normal")
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    axes.locator_params(axis="x", nbins=4)
    axes.set_xlabel("bits per spike")
