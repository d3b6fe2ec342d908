"""One picture per session: its clock, its tracking and its units, or why it was left out."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from matplotlib.patches import Patch

from odograph.figures.colours import INK, PAPER, RULE, SOFT_INK, TERM_COLOURS, VERDICT_COLOURS
from odograph.figures.panels import draw_arena, number, place_extent, say, square_map_axes, wrapped
from odograph.figures.style import as_it_stands, axes_at, figure_style, new_figure, rate_colours, text_at
from odograph.settings.figures import FiguresSettings

WIDTH_IN, HEIGHT_IN = 7.2, 6.2
_STAGES = ("intake", "sync", "behaviour")
_ORDER = {"pass": 0, "note": 0, "warn": 1, "fail": 2}
_REASON_COLOURS = ("#b3261e", "#d07818", "#8c4a86", "#1d4e89", "#6f6a1f", "#7b4a32", "#5d8fbf", "#8a8f96")
_VALID_COLOUR = "#bfe0d9"


def draw_session_quality(
    inventory: Mapping[str, Any],
    clock: Mapping[str, Any] | None,
    residuals: pd.DataFrame | None,
    behaviour: pd.DataFrame | None,
    audit: Mapping[str, Any] | None,
    settings: FiguresSettings,
) -> Figure:
    """Draw the quality of one session.

    Parameters
    ----------
    inventory, clock, audit : mapping
        The documents of intake, sync and behaviour: verdict, findings and their figures. `clock` and `audit`
        may be None or hold only the verdict, as they do for a session that failed before.
    residuals : DataFrame or None
        time_s, residual_ms of every matched pulse.
    behaviour : DataFrame or None
        The analysis bins: time_s, x_m, y_m, head_direction_rad, speed_cm_s, valid, reason.
    settings : FiguresSettings
        How it is drawn.

    Returns
    -------
    Figure
        7.2 inches wide, 6.2 high where all was computed and lower for a session that failed before.
    """
    documents = {"intake": inventory, "sync": clock or {}, "behaviour": audit or {}}
    corners = (inventory.get("arena") or {}).get("corners_m")
    with figure_style(settings):
        seen = _has(behaviour, "time_s", "valid")
        matched = residuals is not None and len(residuals) > 0
        # What was never computed takes no room: the reason stands where the picture would be.
        base = 0.0 if seen else -2.5 if matched else -3.6
        figure = new_figure(WIDTH_IN, HEIGHT_IN + base, settings)
        _draw_head(figure, inventory, documents)
        if not seen and not matched:
            _draw_findings(axes_at(figure, 0.1, 0.25, 7.0, 1.75), documents, 130)
            return figure
        _draw_findings(axes_at(figure, 3.6, 3.0 + base, 3.5, 2.55), documents, 66)
        _draw_residuals(axes_at(figure, 0.66, 3.2 + base, 2.5, 1.5), documents["sync"], residuals)
        if seen:
            _draw_strip(axes_at(figure, 0.5, 2.42, 6.5, 0.17), behaviour)
            _draw_occupancy(figure, behaviour, corners, settings)
            _draw_speed(axes_at(figure, 2.66, 0.5, 1.06, 0.98), behaviour)
            _draw_direction(axes_at(figure, 4.32, 0.5, 1.06, 0.98), behaviour)
            _draw_rates(axes_at(figure, 5.98, 0.5, 1.06, 0.98), inventory)
    return figure


def worst_verdict(documents: Mapping[str, Mapping[str, Any]]) -> str:
    """The worst verdict of a session's stages."""
    verdicts = [str(document.get("verdict") or "pass") for document in documents.values()]
    return max(verdicts, key=lambda verdict: _ORDER.get(verdict, 2), default="pass")


def _draw_head(
    figure: Figure, inventory: Mapping[str, Any], documents: Mapping[str, Mapping[str, Any]]
) -> None:
    verdict = worst_verdict(documents)
    top = figure.get_size_inches()[1] - 0.16
    text_at(figure, 0.1, top, str(inventory.get("session")), va="top", fontsize=11, weight="bold")
    text_at(
        figure, WIDTH_IN - 0.12, top - 0.01, f" {verdict} ", va="top", ha="right", fontsize=10, weight="bold",
        color=PAPER, bbox={"boxstyle": "square,pad=0.3", "fc": VERDICT_COLOURS.get(verdict, INK), "lw": 0},
    )  # fmt: skip
    file, subject = inventory.get("file") or {}, inventory.get("subject") or {}
    units = inventory.get("units") or []
    parts = [
        file.get("name"),
        subject.get("subject_id"),
        subject.get("species"),
        str(file.get("session_start_time"))[:16].replace("T", " ")
        if file.get("session_start_time")
        else None,
        f"{sum(bool(unit.get('kept', True)) for unit in units)} of {len(units)} units kept"
        if units
        else None,
    ]
    line = "  ·  ".join(str(part) for part in parts if part)
    text_at(figure, 0.1, top - 0.24, wrapped(line, 120, 1), va="top", color=SOFT_INK)


def _draw_findings(axes: Any, documents: Mapping[str, Mapping[str, Any]], columns: int) -> None:
    """The stages' verdicts, then what was found, the worst first, as many as there is room for."""
    figure_width, figure_height = axes.figure.get_size_inches()
    box = axes.get_position()
    axes.set_axis_off()
    axes.set_xlim(0, box.width * figure_width)
    axes.set_ylim(0, box.height * figure_height)
    y = box.height * figure_height
    axes.text(0, y, "checks", va="top", weight="bold", fontsize=8)
    y -= 0.22
    told = []
    for stage in _STAGES:
        document = documents[stage]
        verdict = str(document.get("verdict") or "not run")
        axes.text(0, y, stage, va="top")
        axes.text(0.75, y, verdict, va="top", weight="bold", color=VERDICT_COLOURS.get(verdict, SOFT_INK))
        y -= 0.16
        told += [(stage, finding) for finding in document.get("findings") or []]
    y -= 0.08
    told.sort(key=lambda pair: -_ORDER.get(str(pair[1].get("level")), 0))
    for place, (stage, finding) in enumerate(told):
        level = str(finding.get("level") or "note")
        where = f" ({finding['place']})" if finding.get("place") else ""
        text = f"{stage}, {level}: {finding.get('found')}{where}"
        if finding.get("remedy") and level == "fail":
            text += f". What to do: {finding['remedy']}"
        lines = wrapped(text, columns, 6 if place == 0 else 3)
        height = 0.125 * (lines.count("\n") + 1) + 0.06
        if y - height < 0.08 and place + 1 < len(told):
            axes.text(0, y, f"and {len(told) - place} more, in the report", va="top", color=SOFT_INK)
            break
        colour = VERDICT_COLOURS.get(level, SOFT_INK)
        axes.text(0, y, as_it_stands(lines), va="top", color=colour, fontsize=7, linespacing=1.25)
        y -= height


def _draw_residuals(axes: Any, clock: Mapping[str, Any], residuals: pd.DataFrame | None) -> None:
    axes.set_title("camera clock against recording clock", pad=42)
    facts = []
    if clock.get("drift_ppm") is not None:
        facts.append(f"drift {number(clock['drift_ppm'], 2)} ppm")
    if clock.get("offset_s") is not None:
        facts.append(f"offset {number(clock['offset_s'], 3)} s")
    matched = clock.get("n_matched")
    if matched is not None:
        facts.append(f"{number(matched, 0)} of {number(clock.get('n_frames'), 0)} frames matched")
    if clock.get("dropped_frames") is not None:
        dropped, missing = (number(clock.get(name), 0) for name in ("dropped_frames", "missing_pulses"))
        facts.append(f"dropped frames {dropped}, frames without pulse {missing}")
    rows = ["  ·  ".join(facts[:2]), "  ·  ".join(facts[2:3]), "  ·  ".join(facts[3:])]
    axes.annotate(
        "\n".join(row for row in rows if row), (0, 1), (0, 5), xycoords="axes fraction",
        textcoords="offset points",
        va="bottom", color=SOFT_INK, linespacing=1.3,
    )  # fmt: skip
    if residuals is None or not len(residuals):
        say(axes, "No matched frame pulses to show." if facts or clock else "The clock was not checked.", 40)
        return
    time = residuals["time_s"].to_numpy(float)
    value = residuals["residual_ms"].to_numpy(float)
    order = np.argsort(time, kind="stable")
    time, value = time[order] / 60, value[order]
    axes.axhline(0, color=RULE, lw=0.8, zorder=0)
    axes.plot(
        time,
        value,
        ls="none",
        marker=".",
        ms=1.2,
        mew=0,
        color=TERM_COLOURS["position"],
        alpha=0.35,
        rasterized=True,
    )
    middle = _running_median(time, value)
    if middle is not None:
        axes.plot(*middle, color=INK, lw=1.1)
    axes.set_xlabel("recording time (min)")
    axes.set_ylabel("residual (ms)")
    axes.locator_params(axis="y", nbins=4)
    limit = float(np.nanquantile(np.abs(value), 0.999)) * 1.15 or 1.0
    axes.set_ylim(-limit, limit)
    axes.margins(x=0.01)


def _running_median(
    time: np.ndarray, value: np.ndarray, pieces: int = 60
) -> tuple[np.ndarray, np.ndarray] | None:
    """Median in `pieces` equal stretches of time, where the slow part of a clock's fault shows."""
    if len(time) < 10 * pieces:
        return None
    piece = np.clip(((time - time[0]) / max(np.ptp(time), 1e-9) * pieces).astype(int), 0, pieces - 1)
    kept = [k for k in range(pieces) if (piece == k).any()]
    return (
        np.array([np.median(time[piece == k]) for k in kept]),
        np.array([np.median(value[piece == k]) for k in kept]),
    )


def _has(behaviour: pd.DataFrame | None, *columns: str) -> bool:
    return behaviour is not None and len(behaviour) > 1 and all(column in behaviour for column in columns)


def _draw_strip(axes: Any, behaviour: pd.DataFrame) -> None:
    time = behaviour["time_s"].to_numpy(float)
    valid = behaviour["valid"].to_numpy(bool)
    reason = behaviour["reason"].astype(str).to_numpy() if "reason" in behaviour else np.full(len(time), "")
    step = float(np.median(np.diff(time[:1000])))
    label = np.where(valid, "", np.where(reason == "", "no reason given", reason))
    names = sorted(set(label) - {""}, key=lambda name: (-int((label == name).sum()), name))
    # A column is wide enough to be seen, and is marked where any of its bins was dropped.
    columns = min(1200, len(time))
    column = np.clip(((time - time[0]) / (time[-1] - time[0] + step) * columns).astype(int), 0, columns - 1)
    strip = np.zeros(columns)
    for place, name in reversed(list(enumerate(names))):
        strip[np.bincount(column[label == name], minlength=columns) > 0] = place + 1
    colours = [_VALID_COLOUR, *(_REASON_COLOURS[place % len(_REASON_COLOURS)] for place in range(len(names)))]
    rgb = np.array([[int(colour[i : i + 2], 16) for i in (1, 3, 5)] for colour in colours], dtype=np.uint8)
    axes.imshow(
        rgb[strip.astype(int)][None],
        aspect="auto",
        extent=(time[0] / 60, time[-1] / 60, 0, 1),
        interpolation="nearest",
    )
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    axes.set_xlabel("recording time (min)")
    share = float(valid.mean())
    axes.set_title(
        f"valid time: {number(valid.sum() * step / 60, 1)} min, {100 * share:.1f} % of "
        f"{number(len(time) * step / 60, 1)} min"
    )
    handles = [
        Patch(color=colour, label=f"{name.replace('_', ' ')} {number((label == name).sum() * step, 1)} s")
        for name, colour in zip(names, colours[1:], strict=True)
    ]
    if handles:
        axes.legend(
            handles=handles[:8], loc="upper left", bbox_to_anchor=(0.0, -2.1), ncols=4,
            handlelength=0.9, handleheight=0.8, columnspacing=1.2, borderaxespad=0, fontsize=7,
        )  # fmt: skip


def _draw_occupancy(
    figure: Figure, behaviour: pd.DataFrame | None, corners: Any, settings: FiguresSettings
) -> None:
    axes = axes_at(figure, 0.5, 0.5, 0.98, 0.98)
    axes.set_title("time per place")
    if not _has(behaviour, "x_m", "y_m", "valid", "time_s") or not behaviour["valid"].any():
        say(axes, "No valid position.", 20)
        return
    valid = behaviour["valid"].to_numpy(bool)
    x, y = behaviour["x_m"].to_numpy(float)[valid], behaviour["y_m"].to_numpy(float)[valid]
    extent = place_extent(x, y, corners)
    step = float(np.median(np.diff(behaviour["time_s"].to_numpy(float)[:1000])))
    cell = max(extent[1] - extent[0], extent[3] - extent[2]) / 24
    counts = [max(1, round((extent[i + 1] - extent[i]) / cell)) for i in (0, 2)]
    seconds = np.histogram2d(y, x, bins=counts[::-1], range=[extent[2:], extent[:2]])[0] * step
    top = max(float(np.quantile(seconds[seconds > 0], 0.98)), step)
    shown = np.where(seconds > 0, seconds, np.nan)
    image = axes.imshow(
        shown,
        origin="lower",
        extent=extent,
        cmap=rate_colours(settings),
        vmin=0,
        vmax=top,
        interpolation="nearest",
    )
    draw_arena(axes, corners)
    square_map_axes(axes, extent)
    bar = figure.colorbar(image, cax=axes_at(figure, 1.56, 0.5, 0.07, 0.98), extend="max")
    bar.outline.set_visible(False)
    bar.set_label("s per cell", labelpad=2)
    bar.ax.tick_params(length=2)
    bar.ax.locator_params(nbins=4)


def _valid_values(behaviour: pd.DataFrame | None, column: str) -> np.ndarray:
    if not _has(behaviour, column, "valid"):
        return np.zeros(0)
    values = behaviour[column].to_numpy(float)[behaviour["valid"].to_numpy(bool)]
    return values[np.isfinite(values)]


def _draw_speed(axes: Any, behaviour: pd.DataFrame | None) -> None:
    axes.set_title("speed")
    speed = _valid_values(behaviour, "speed_cm_s")
    if not speed.size:
        say(axes, "No speed.", 20)
        return
    top = float(np.quantile(speed, 0.998))
    axes.hist(
        speed,
        bins=30,
        range=(0, max(top, 1.0)),
        weights=np.full(speed.size, 100 / speed.size),
        color=TERM_COLOURS["speed"],
    )
    axes.axvline(float(np.median(speed)), color=INK, lw=0.9, ls=(0, (3, 2)))
    axes.set_xlim(0, max(top, 1.0))
    axes.set_xlabel("speed (cm/s)")
    axes.set_ylabel("time (%)")
    axes.locator_params(nbins=4)


def _draw_direction(axes: Any, behaviour: pd.DataFrame | None) -> None:
    axes.set_title("head direction")
    direction = _valid_values(behaviour, "head_direction_rad")
    if not direction.size:
        say(axes, "No head direction.", 20)
        return
    axes.hist(
        np.degrees(direction), bins=36, range=(0, 360), weights=np.full(direction.size, 100 / direction.size),
        color=TERM_COLOURS["head_direction"],
    )  # fmt: skip
    axes.axhline(100 / 36, color=INK, lw=0.9, ls=(0, (3, 2)))
    axes.set_xlim(0, 360)
    axes.set_xticks([0, 180, 360])
    axes.set_xlabel("direction (°)")
    axes.set_ylabel("time (%)")
    axes.locator_params(axis="y", nbins=4)


def _draw_rates(axes: Any, inventory: Mapping[str, Any]) -> None:
    axes.set_title("units")
    units = [unit for unit in inventory.get("units") or [] if unit.get("mean_rate_hz") is not None]
    if not units:
        say(axes, "No units.", 20)
        return
    rate = np.array([float(unit["mean_rate_hz"]) for unit in units])
    kept = np.array([bool(unit.get("kept", True)) for unit in units])
    rate = np.clip(rate, 0.01, None)
    edges = np.geomspace(rate.min() * 0.9, max(rate.max() * 1.1, rate.min() * 1.5), 14)
    groups, colours = [rate[kept]], [TERM_COLOURS["position"]]
    if not kept.all():
        groups, colours = [*groups, rate[~kept]], [*colours, RULE]
    axes.hist(groups, bins=edges, stacked=True, color=colours, edgecolor=PAPER, lw=0.3)
    axes.set_title(f"{int(kept.sum())} of {len(kept)} units")
    axes.set_xscale("log")
    ticks = [tick for tick in (0.01, 0.03, 0.1, 0.3, 1, 3, 10, 30, 100) if edges[0] <= tick <= edges[-1]]
    axes.set_xticks(ticks, [f"{tick:g}" for tick in ticks])
    axes.minorticks_off()
    axes.set_xlabel("mean rate (Hz)")
    axes.set_ylabel("units")
    axes.locator_params(axis="y", nbins=4, integer=True)
