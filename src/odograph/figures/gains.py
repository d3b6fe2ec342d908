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
from odograph.population.gains import gained_units
from odograph.settings.figures import FiguresSettings

VARIABLES = ("position", "head_direction")
LARGEST_SHOWN = 1.5
_OTHERS = "#98a2ac"


def draw_speed_gains(units: pd.DataFrame, settings: FiguresSettings) -> Figure:
    """Gains of the units that encode position and of those that encode head direction, ordered by size.

    Parameters
    ----------
    units : DataFrame
        The population's units table.
    settings : FiguresSettings
        How it is drawn.
    """
    title = "speed gain of the tuning"
    shown = [name for name in VARIABLES if f"{name}_speed_gain" in units]
    tables = {name: gained_units(units, name) for name in shown}
    with figure_style(settings):
        if not any(len(table) for table in tables.values()):
            return empty_figure(settings, title, "No unit that encodes position or direction has a gain.")
        figure = new_figure(WIDTH_IN, 1.1 + 2.75 * len(shown), settings)
        together = pd.concat([table[["session", "unit", "animal"]] for table in tables.values()])
        together = together.drop_duplicates()
        headline(figure, title, n_text(len(together), together["animal"].nunique()))
        for place, (name, table) in enumerate(tables.items()):
            bottom = 0.65 + 2.75 * (len(shown) - 1 - place)
            _draw_gains(axes_at(figure, 0.7, bottom, 3.6, 1.85), table, name)
            _draw_information(axes_at(figure, 5.15, bottom, 1.85, 1.85), table, name)
    return figure


def _verdicts(table: pd.DataFrame) -> list[tuple[np.ndarray, str, bool]]:
    """Which units, with which mark, filled or not."""
    sharpens, blunts = (table[name].to_numpy(bool) for name in ("sharpens", "blunts"))
    return [(~sharpens & ~blunts, "o", False), (sharpens, "^", True), (blunts, "v", True)]


def _draw_gains(axes: Any, table: pd.DataFrame, variable: str) -> None:
    colour = term_colour(variable)
    axes.set_title(f"{term_label(variable)}: gain of each unit", color=colour)
    axes.set_ylabel("gain per s.d. of log speed")
    if not len(table):
        say(axes, "No unit that encodes it has a gain.", 32)
        return
    table = table.sort_values(["gain", "session", "unit"], ignore_index=True)
    gain, error = table["gain"].to_numpy(float), table["standard_error"].to_numpy(float)
    at, limit = np.arange(len(table)), min(float(np.max(np.abs(gain) + error)) * 1.08, LARGEST_SHOWN)
    within = np.clip(gain, -limit, limit)
    axes.vlines(at, gain - error, gain + error, color=RULE, lw=0.9, zorder=1)
    for chosen, mark, filled in _verdicts(table):
        face, edge = (colour, "white") if filled else ("white", _OTHERS)
        axes.plot(
            at[chosen], within[chosen], mark, ms=4.6 if filled else 3.6, mfc=face, mec=edge, mew=0.6,
            ls="none", zorder=3 if filled else 2, clip_on=False,
        )  # fmt: skip
    axes.axhline(0, color=SOFT_INK, lw=0.7, ls=(0, (4, 3)), zorder=0)
    axes.set_xlim(-1, len(table))
    axes.set_ylim(-limit, limit)
    axes.set_xticks([])
    beyond = int(np.sum(np.abs(gain) > limit))
    told = [
        f"{len(table)} units by size: {int(table['sharpens'].sum())} sharpen (▲), "
        f"{int(table['blunts'].sum())} blunt (▼), median {number(np.median(gain), 2)}"
    ]
    told += [f"{beyond} beyond the edge"] * bool(beyond)
    axes.set_xlabel("; ".join(told))


def _draw_information(axes: Any, table: pd.DataFrame, variable: str) -> None:
    colour = term_colour(variable)
    axes.set_title("fitted information", color=colour)
    slow, fast = (table[f"{pace}_bits_per_spike"].to_numpy(float) for pace in ("slow", "fast"))
    known = (slow > 0) & (fast > 0)
    if not known.any():
        say(axes, "Nothing to compare.", 24)
        return
    both = np.concatenate([slow[known], fast[known]])
    low = max(float(np.quantile(both, 0.02)) * 0.7, 1e-3)
    high = max(float(both.max()) * 1.3, 10 * low)
    for chosen, mark, filled in _verdicts(table):
        part, (face, edge) = chosen & known, (colour, "white") if filled else ("white", _OTHERS)
        axes.plot(
            np.clip(slow[part], low, None), np.clip(fast[part], low, None), mark,
            ms=4.6 if filled else 3.6, mfc=face, mec=edge, mew=0.6, ls="none",
            zorder=3 if filled else 2, clip_on=False,
        )  # fmt: skip
    axes.plot([low, high], [low, high], color=SOFT_INK, lw=0.7, ls=(0, (4, 3)), zorder=0)
    ticks = [step * 10.0**k for k in range(-3, 2) for step in (1, 3) if low <= step * 10.0**k <= high]
    for axis, scale in ((axes.xaxis, axes.set_xscale), (axes.yaxis, axes.set_yscale)):
        scale("log")
        axis.set_ticks(ticks, [f"{tick:g}" for tick in ticks])
        axis.set_minor_formatter(NullFormatter())
    axes.set_xlim(low, high)
    axes.set_ylim(low, high)
    axes.set_xlabel("slow (bits per spike)")
    axes.set_ylabel("fast (bits per spike)")
