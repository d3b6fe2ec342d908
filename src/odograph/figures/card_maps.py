"""The upper row of a card: the path with its spikes, the observed and the fitted map."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize

from odograph.figures.colours import INK, term_colour
from odograph.figures.panels import (
    absent,
    column,
    draw_arena,
    draw_path,
    edges_of,
    number,
    say,
    square_map_axes,
    term_note,
    thinned,
    two_line_title,
    valid_bins,
)
from odograph.figures.style import direction_colours, rate_colours
from odograph.settings.figures import FiguresSettings


def draw_spikes(
    axes: Any,
    row: Mapping[str, Any],
    curves: Mapping[str, np.ndarray],
    behaviour: pd.DataFrame,
    corners: Any,
    extent: tuple[float, float, float, float],
    settings: FiguresSettings,
) -> None:
    """The path with a dot at every spike, coloured by head direction where that is known."""
    x, y, valid = column(behaviour, "x_m"), column(behaviour, "y_m"), valid_bins(behaviour)
    two_line_title(axes, "path and spikes", "")
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
    direction = column(behaviour, "head_direction_rad")[shown]
    known = np.isfinite(direction)
    colours: Any = INK
    if known.any():
        colours = direction_colours(settings)(np.nan_to_num(direction) / (2 * np.pi) % 1.0)
        colours[~known] = (0.4, 0.4, 0.4, 1.0)
    axes.scatter(x[shown], y[shown], s=3.2, c=colours, lw=0, alpha=0.85, zorder=3, rasterized=True)
    share = f"{len(shown):,} of {len(bins):,} spikes" if len(shown) < len(bins) else f"{len(bins):,} spikes"
    two_line_title(axes, "path and spikes", share)


def draw_maps(
    observed_axes: Any,
    fitted_axes: Any,
    scale_axes: Any,
    row: Mapping[str, Any],
    curves: Mapping[str, np.ndarray],
    corners: Any,
    extent: tuple[float, float, float, float],
    settings: FiguresSettings,
) -> None:
    """The observed and the fitted rate on one colour scale, the unvisited in grey."""
    observed, fitted = curves.get("position_observed_hz"), curves.get("position_rate_hz")
    two_line_title(observed_axes, "observed rate", "")
    two_line_title(fitted_axes, "fitted by position", "", term_colour("position"))
    if observed is not None and fitted is not None and np.shape(observed) == np.shape(fitted):
        fitted = np.where(np.isfinite(observed), fitted, np.nan)
    shown = [np.asarray(values, float) for values in (observed, fitted) if values is not None]
    finite = [values[np.isfinite(values)] for values in shown]
    finite = [values for values in finite if values.size]
    if not finite:
        say(observed_axes, "No rate map of this unit is available.")
        say(fitted_axes, absent(row, "position"))
        scale_axes.set_axis_off()
        return
    top = max(float(values.max()) for values in finite) or 1.0
    box = (*edges_of(curves["position_x_m"]), *edges_of(curves["position_y_m"]))
    colours, norm = rate_colours(settings), Normalize(0.0, top)
    for axes, values, nothing in (
        (observed_axes, observed, "No rate map of this unit is available."),
        (fitted_axes, fitted, absent(row, "position")),
    ):
        if values is None:
            say(axes, nothing)
            continue
        axes.imshow(
            values, origin="lower", extent=box, cmap=colours, norm=norm, interpolation="nearest", zorder=1
        )
        draw_arena(axes, corners)
        square_map_axes(axes, extent, first=False)
    if observed is not None:
        two_line_title(observed_axes, "observed rate", f"smoothed, peak {number(np.nanmax(observed), 1)} Hz")
    if fitted is not None:
        two_line_title(fitted_axes, "fitted by position", term_note(row, "position"), term_colour("position"))
    bar = scale_axes.figure.colorbar(ScalarMappable(norm, colours), cax=scale_axes)
    bar.outline.set_visible(False)
    bar.ax.tick_params(length=2)
    bar.set_label("rate (Hz)", labelpad=2)
