"""Speed gains of all units: how much each unit's tuning deepens as the animal runs faster."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from matplotlib.ticker import NullFormatter

from odograph.figures.colours import RULE, SOFT_INK, term_colour, term_label
from odograph.figures.panels import number, say
from odograph.figures.shares import WIDTH_IN, empty_figure, headline, n_text
from odograph.figures.style import axes_at, figure_style, new_figure
from odograph.population.gains import gain_variables, gained_units
from odograph.settings.figures import FiguresSettings

LARGEST_SHOWN = 1.5
_OTHERS = "#98a2ac"
_ROW_IN, _PANEL_IN = 2.75, 1.9


def draw_speed_gains(units: pd.DataFrame, settings: FiguresSettings) -> Figure:
    """Gains of the units that encode a variable, ordered by size, and what they make of its information.

    Parameters
    ----------
    units : DataFrame
        The population's units table. Each variable whose gain some unit has gets a row of panels.
    settings : FiguresSettings
        How it is drawn.
    """
    title = "speed gain of the tuning"
    with figure_style(settings):
        tables = {name: gained_units(units, name) for name in gain_variables(units)}
        tables = {name: table for name, table in tables.items() if len(table)}
        if not tables:
            return empty_figure(settings, title, "No unit that encodes position or direction has a gain.")
        figure = new_figure(WIDTH_IN, 0.5 + _ROW_IN * len(tables), settings)
        headline(figure, title, _n_text(units, tables))
        for place, (name, table) in enumerate(tables.items()):
            bottom = 0.74 + _ROW_IN * (len(tables) - 1 - place)
            _draw_gains(axes_at(figure, 0.62, bottom, 3.75, _PANEL_IN), table, name)
            _draw_information(axes_at(figure, 5.2, bottom, _PANEL_IN, _PANEL_IN), table, name)
    return figure


def _n_text(units: pd.DataFrame, tables: dict[str, pd.DataFrame]) -> str:
    """How many units and animals stand behind the figure, and how many gains could not be fitted."""
    together = pd.concat([table[["session", "unit", "animal"]] for table in tables.values()])
    together = together.drop_duplicates()
    text = n_text(len(together), together["animal"].nunique(), "units with a gain")
    failed = int((units["speed_gain_status"] == "failed").sum())
    return f"{text}; {failed} fit{'' if failed == 1 else 's'} failed" if failed else text


def _verdicts(table: pd.DataFrame, variable: str) -> list[tuple[np.ndarray, dict[str, Any]]]:
    """Which units, and how they are marked: those that sharpen or blunt by shape and filling too."""
    sharpens, blunts = (table[name].to_numpy(bool) for name in ("sharpens", "blunts"))
    plain = {"marker": "o", "ms": 3.4, "mfc": "white", "mec": _OTHERS, "zorder": 2}
    filled = {"ms": 5.0, "mfc": term_colour(variable), "mec": "white", "zorder": 3}
    marks = [
        (~sharpens & ~blunts, plain),
        (sharpens, filled | {"marker": "^"}),
        (blunts, filled | {"marker": "v"}),
    ]
    return [(chosen, look | {"mew": 0.7, "ls": "none", "clip_on": False}) for chosen, look in marks]


def _draw_gains(axes: Any, table: pd.DataFrame, variable: str) -> None:
    axes.set_title(f"{term_label(variable)}: gain of each unit", color=term_colour(variable))
    axes.set_ylabel("gain (per s.d. of log speed)")
    table = table.sort_values(["gain", "session", "unit"], ignore_index=True)
    gain, error = (table[name].to_numpy(float) for name in ("gain", "standard_error"))
    low, high = _gain_limits(gain, np.nan_to_num(error))
    at = np.arange(len(table))
    for side in (-1, 1):
        # A standard error that leaves the panel ends at its edge.
        end = np.clip(gain + side * np.nan_to_num(error), low, high)
        axes.vlines(at, np.clip(gain, low, high), end, color=RULE, lw=1.0, zorder=1)
    for chosen, look in _verdicts(table, variable):
        axes.plot(at[chosen], np.clip(gain[chosen], low, high), **look)
    axes.axhline(0, color=SOFT_INK, lw=0.7, ls=(0, (4, 3)), zorder=0)
    axes.set_xlim(-1, len(table))
    axes.set_ylim(low, high)
    axes.set_xticks([])
    beyond = int(np.sum((gain < low) | (gain > high)))
    told = (
        f"{len(table)} units by size: {int(table['sharpens'].sum())} sharpen (▲), "
        f"{int(table['blunts'].sum())} blunt (▼)"
        f"\nmean {number(gain.mean(), 2)}, median {number(np.median(gain), 2)}"
    )
    axes.set_xlabel(f"{told}; {beyond} beyond the edge" if beyond else told, linespacing=1.35)


def _gain_limits(gain: np.ndarray, error: np.ndarray) -> tuple[float, float]:
    """Limits that hold 0, every gain and its error, except what few large ones would take from the others."""
    low, high = min(0.0, float((gain - error).min())), max(0.0, float((gain + error).max()))
    room = 0.06 * max(high - low, 0.1)
    return max(low - room, -LARGEST_SHOWN), min(high + room, LARGEST_SHOWN)


def _draw_information(axes: Any, table: pd.DataFrame, variable: str) -> None:
    axes.set_title("fitted information", color=term_colour(variable))
    slow, fast = (table[f"{pace}_bits_per_spike"].to_numpy(float) for pace in ("slow", "fast"))
    known = np.isfinite(slow) & np.isfinite(fast)
    positive = np.concatenate([slow[known], fast[known]])
    positive = positive[positive > 0]
    if not positive.size:
        say(axes, "The fitted tuning tells nothing at either speed.", 24)
        return
    low = max(float(np.quantile(positive, 0.01)) * 0.7, 1e-3)
    high = max(float(positive.max()) * 1.3, 10 * low)
    # On logarithmic axes what is at or below zero has no place but the edge.
    slow, fast = np.clip(slow, low, None), np.clip(fast, low, None)
    for chosen, look in _verdicts(table, variable):
        axes.plot(slow[chosen & known], fast[chosen & known], **look)
    axes.plot([low, high], [low, high], color=SOFT_INK, lw=0.7, ls=(0, (4, 3)), zorder=0)
    steps = (1, 3) if high / low < 300 else (1,)
    ticks = [step * 10.0**k for k in range(-3, 3) for step in steps if low <= step * 10.0**k <= high]
    for axis, scale in ((axes.xaxis, axes.set_xscale), (axes.yaxis, axes.set_yscale)):
        scale("log")
        axis.set_ticks(ticks, [f"{tick:g}" for tick in ticks])
        axis.set_minor_formatter(NullFormatter())
    axes.set_xlim(low, high)
    axes.set_ylim(low, high)
    axes.set_xlabel("at 20th percentile of speed\n(bits per spike)", linespacing=1.35)
    axes.set_ylabel("at 80th percentile\n(bits per spike)", linespacing=1.35)
