"""The card of one unit: path and spikes, maps and curves with bands, held-out scores, fit and speed gains."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.figure import Figure

from odograph.figures.card_curves import (
    draw_direction,
    draw_extra,
    draw_scores,
    draw_speed,
    extra_terms,
    score_rows,
)
from odograph.figures.card_fit import ROW_IN, draw_fit_row, has_fit_row
from odograph.figures.card_maps import draw_maps, draw_spikes
from odograph.figures.colours import SOFT_INK, VERDICT_COLOURS, model_label
from odograph.figures.panels import column, number, place_extent, unit_status, valid_bins, wrapped
from odograph.figures.style import axes_at, figure_style, new_figure, text_at
from odograph.settings.figures import FiguresSettings

WIDTH_IN, HEIGHT_IN = 7.2, 5.5
_MAP_IN, _MAP_BOTTOM_IN = 1.78, 2.76
_CURVE_IN, _CURVE_BOTTOM_IN = 1.2, 0.77


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
        The unit's row of the units table (session, unit, n_spikes, mean_rate_hz, status, selected_model,
        ...).
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
        7.2 by 7 inches (5.5 where results say nothing of gains and of the fit), taller where more variables
        than the usual three were fitted. A unit that was not fitted gets a card too, which says why.
    """
    with figure_style(settings):
        extent = place_extent(column(behaviour, "x_m"), column(behaviour, "y_m"), arena_corners_m)
        # A long low arena takes no more height than it needs.
        map_in = _MAP_IN * min(1.0, (extent[3] - extent[2]) / (extent[1] - extent[0]))
        if not any(name.endswith("_hz") for name in curves):
            return _bare_card(row, curves, behaviour, arena_corners_m, extent, map_in, settings)
        added = extra_terms(curves)
        # With more variables the curves take the whole row and the scores a row of their own below it.
        lift = 0.65 + 0.17 * len(score_rows(scores, str(row.get("selected_model")))) if added else 0.0
        foot = ROW_IN if has_fit_row(row, curves) else 0.0
        figure = new_figure(WIDTH_IN, HEIGHT_IN + foot + lift - _MAP_IN + map_in, settings)
        _head(figure, row, behaviour)
        bottom = _MAP_BOTTOM_IN + foot + lift
        curve_bottom = _CURVE_BOTTOM_IN + foot
        path, observed, fitted = (axes_at(figure, x, bottom, _MAP_IN, map_in) for x in (0.46, 2.62, 4.56))
        scale = axes_at(figure, 6.44, bottom, 0.09, map_in)
        draw_spikes(path, row, curves, behaviour, arena_corners_m, extent, settings)
        draw_maps(observed, fitted, scale, row, curves, arena_corners_m, extent, settings)
        if added:
            _curve_row(figure, row, curves, behaviour, added, curve_bottom + lift, settings)
            draw_scores(axes_at(figure, 3.4, curve_bottom, 3.6, lift - 0.65), row, scores, -0.82)
        else:
            draw_direction(axes_at(figure, 0.46, curve_bottom, 1.78, _CURVE_IN), row, curves, settings)
            draw_speed(axes_at(figure, 2.62, curve_bottom, 1.15, _CURVE_IN), row, curves, behaviour)
            draw_scores(axes_at(figure, 5.95, curve_bottom, 1.15, _CURVE_IN + 0.16), row, scores, -1.72)
        if foot:
            draw_fit_row(figure, row, curves)
        _foot(figure, row)
    return figure


def _bare_card(
    row: Mapping[str, Any],
    curves: Mapping[str, np.ndarray],
    behaviour: pd.DataFrame,
    corners: Any,
    extent: tuple[float, float, float, float],
    map_in: float,
    settings: FiguresSettings,
) -> Figure:
    """The card of a unit that has no curves: its path and spikes, and why there is no more."""
    figure = new_figure(WIDTH_IN, 1.5 + map_in, settings)
    _head(figure, row, behaviour)
    draw_spikes(
        axes_at(figure, 0.46, 0.55, _MAP_IN, map_in), row, curves, behaviour, corners, extent, settings
    )
    reason = wrapped(_status_text(row), 58, 5)
    text_at(figure, 2.62, 0.55 + map_in - 0.05, reason, va="top", color=_status_colour(row), linespacing=1.35)
    return figure


def _curve_row(
    figure: Figure,
    row: Mapping[str, Any],
    curves: Mapping[str, np.ndarray],
    behaviour: pd.DataFrame,
    added: list[str],
    bottom_in: float,
    settings: FiguresSettings,
) -> None:
    """All curves beside each other: head direction, speed, then what was added."""
    terms = [term for term in ("head_direction", "speed") if f"{term}_rate_hz" in curves] + added
    step = (WIDTH_IN - 0.36) / len(terms)
    for place, term in enumerate(terms):
        axes = axes_at(figure, 0.46 + place * step, bottom_in, step - 0.5, _CURVE_IN)
        if term == "head_direction":
            draw_direction(axes, row, curves, settings)
        elif term == "speed":
            draw_speed(axes, row, curves, behaviour)
        else:
            draw_extra(axes, row, curves, term)


def _status_text(row: Mapping[str, Any]) -> str:
    reason = row.get("status_reason")
    reason = reason if isinstance(reason, str) and reason else "no reason was recorded"
    words = {"too_few_spikes": "Too few spikes to fit", "failed": "The fit failed"}
    return f"{words.get(unit_status(row), unit_status(row).replace('_', ' '))}: {reason}"


def _status_colour(row: Mapping[str, Any]) -> str:
    return VERDICT_COLOURS["fail" if unit_status(row) == "failed" else "warn"]


def _head(figure: Figure, row: Mapping[str, Any], behaviour: pd.DataFrame) -> None:
    top = figure.get_size_inches()[1] - 0.16
    title = f"{row.get('session')}  unit {row.get('unit')}"
    outcome = _outcome(row)
    # 0.0096 in is the mean width of a bold letter per point; a long name gets smaller letters.
    room = WIDTH_IN - 0.5 - 9 * 0.0096 * len(outcome)
    size = float(np.clip(room / (0.0096 * len(title)), 7, 11))
    text_at(figure, 0.1, top, title, va="top", fontsize=size, weight="bold")
    seconds = 0.0
    if len(behaviour) > 1 and "time_s" in behaviour:
        seconds = float(np.median(np.diff(behaviour["time_s"].to_numpy(float)[:1000]))) * int(
            valid_bins(behaviour).sum()
        )
    facts = [
        str(row["region"]) if isinstance(row.get("region"), str) and row.get("region") else None,
        str(row["animal"]) if isinstance(row.get("animal"), str) and row.get("animal") else None,
        f"n = {number(row.get('n_spikes'), 0)} spikes in {number(seconds / 60, 1)} min",
        f"mean {number(row.get('mean_rate_hz'))} Hz",
    ]
    text_at(figure, 0.1, top - 0.24, "  ·  ".join(part for part in facts if part), va="top", color=SOFT_INK)
    right = WIDTH_IN - 0.1
    if unit_status(row) != "fitted":
        text_at(
            figure,
            right,
            top,
            outcome,
            va="top",
            ha="right",
            color=_status_colour(row),
            fontsize=9,
            weight="bold",
        )
        return
    text_at(figure, right, top, outcome, va="top", ha="right", fontsize=9, weight="bold")
    if str(row.get("selected_model") or "constant") != "constant":
        score = f"held out {number(row.get('selected_bits_per_spike'), 3)} bits per spike"
        text_at(figure, right, top - 0.24, score, va="top", ha="right", color=SOFT_INK)


def _outcome(row: Mapping[str, Any]) -> str:
    if unit_status(row) != "fitted":
        return "not fitted"
    model = str(row.get("selected_model") or "constant")
    return "selected: no variable" if model == "constant" else f"selected: {model_label(model)}"


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
    if unit_status(row) == "fitted":
        key = (
            "Curves: fitted with 95 % band; dots: observed; broken line: mean rate. "
            "Scores ± standard error; diamond: selected."
        )
        text_at(figure, 0.1, 0.19, key, va="bottom", fontsize=7, color=SOFT_INK)
    if parts:
        text = "Information, bits per spike: " + "; ".join(parts)
        text_at(figure, 0.1, 0.05, text, va="bottom", fontsize=7, color=SOFT_INK)
