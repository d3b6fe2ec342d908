"""The lowest row of a card: how the model fits held-out time, and whether tuning deepens with speed."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.figure import Figure

from odograph.figures.colours import INK, RULE, SOFT_INK, term_colour, term_label
from odograph.figures.panels import number, say, two_line_title
from odograph.figures.style import axes_at, text_at

ROW_IN = 1.5
LEVEL_OF_FIT = 0.05
_PANEL_IN, _PANEL_BOTTOM_IN = 0.62, 0.78
_LINE_IN, _TEXT_PT = 0.135, 7
_MOST_TERMS = 2
_STANDARD = ("position", "head_direction")


def has_fit_row(row: Mapping[str, Any], curves: Mapping[str, np.ndarray]) -> bool:
    """Whether a unit's results say anything of gains or of the fit; those of older versions do not."""
    return "speed_gain_status" in row or "rescaling_ks" in row or "residual_autocorrelation" in curves


def draw_fit_row(figure: Figure, row: Mapping[str, Any], curves: Mapping[str, np.ndarray]) -> None:
    """Draw the row at the foot of a card.

    Parameters
    ----------
    figure : Figure
        The card.
    row : mapping
        The unit's row: `<term>_speed_gain`, `..._se` and `..._p`, `<term>_fitted_slow_bits_per_spike` and
        `..._fast_...`, `speed_gain_status`, `rescaling_ks`, `..._p`, `rescaling_intervals`,
        `residual_correlation_peak` and `..._lag_s`; what is absent is said.
    curves : mapping of arrays
        `residual_lag_s`, `residual_autocorrelation` and `residual_band`, (n_lags,).
    """
    _draw_residuals(axes_at(figure, 0.46, _PANEL_BOTTOM_IN, 1.78, _PANEL_IN), curves)
    _write(figure, 2.62, "fit on held-out time", fit_lines(row))
    _write(figure, 4.95, "speed gain (± standard error)", gain_lines(row))


def _draw_residuals(axes: Any, curves: Mapping[str, np.ndarray]) -> None:
    names = ("residual_lag_s", "residual_autocorrelation", "residual_band")
    if not all(name in curves for name in names):
        axes.set_title("residual autocorrelation")
        say(axes, "Residuals were not kept for this unit.")
        return
    two_line_title(axes, "residual autocorrelation", "grey: 95 % if the model is right")
    lag, correlation, band = (np.asarray(curves[name], float) for name in names)
    axes.fill_between(lag, -band, band, color=RULE, lw=0, zorder=1)
    axes.axhline(0, color=SOFT_INK, lw=0.5, zorder=2)
    axes.plot(lag, correlation, color=INK, lw=0.9, zorder=3)
    axes.set_xlim(0, float(lag[-1]))
    reach = 1.08 * max(float(np.abs(correlation).max()), float(np.median(band)) * 2)
    axes.set_ylim(min(float(correlation.min()) * 1.08, -1.5 * float(np.median(band))), reach)
    axes.locator_params(axis="x", nbins=5)
    axes.locator_params(axis="y", nbins=3)
    axes.set_xlabel("lag (s)")


def _write(figure: Figure, left_in: float, title: str, lines: list[tuple[str, str]]) -> None:
    """A bold head and lines of text, each with its colour."""
    top = _PANEL_BOTTOM_IN + _PANEL_IN + 0.19
    text_at(figure, left_in, top, title, va="bottom", weight="bold")
    for place, (line, colour) in enumerate(lines):
        at = top - 0.06 - _LINE_IN * place
        text_at(figure, left_in, at, line, va="top", fontsize=_TEXT_PT, color=colour)


def fit_lines(row: Mapping[str, Any]) -> list[tuple[str, str]]:
    """How the selected model fits held-out time: lines and their colours."""
    ks, p = row.get("rescaling_ks"), row.get("rescaling_ks_p")
    if number(ks) == "–":
        return [("It was not judged for this unit.", SOFT_INK)]
    verdict = "compatible" if float(p) > LEVEL_OF_FIT else "not compatible"
    lines = [
        f"KS {number(ks, 3)} of {number(row.get('rescaling_intervals'), 0)} rescaled intervals,",
        f"{_p_text(p)}: {verdict} at 5 %",
    ]
    peak, lag_s = row.get("residual_correlation_peak"), row.get("residual_correlation_peak_lag_s")
    if number(peak) != "–":
        lines.append(f"largest residual correlation {_signed(peak)} at {number(1000 * float(lag_s), 0)} ms")
    return [(line, SOFT_INK) for line in lines]


def gain_lines(row: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Each term's gain, its standard error and p, and what it makes of the information: lines and colours."""
    if row.get("speed_gain_status") == "failed":
        return [("The fit failed.", SOFT_INK)]
    gained = [
        name.removesuffix("_speed_gain")
        for name in row
        if name.endswith("_speed_gain") and number(row[name]) != "–"
    ]
    gained.sort(key=lambda term: (_STANDARD.index(term) if term in _STANDARD else len(_STANDARD), term))
    if not gained:
        return [
            ("Not fitted: no tuning that can sharpen", SOFT_INK),
            ("was selected and passed its test.", SOFT_INK),
        ]
    lines = []
    for term in gained[:_MOST_TERMS]:
        gain, error, p = (row.get(f"{term}_speed_gain{suffix}") for suffix in ("", "_se", "_p"))
        tested = f", {_p_text(p)}" if number(p) != "–" else ""
        text = f"{term_label(term)} {_signed(gain)} ± {number(error)}{tested}"
        lines.append((text, term_colour(term)))
        slow, fast = (row.get(f"{term}_fitted_{pace}_bits_per_spike") for pace in ("slow", "fast"))
        if number(slow) != "–" and number(fast) != "–":
            lines.append((f"  slow {number(slow)}, fast {number(fast)} bits per spike", SOFT_INK))
    if len(gained) > _MOST_TERMS:
        lines.append((f"and {len(gained) - _MOST_TERMS} more in the table of units", SOFT_INK))
    return lines


def _signed(value: Any) -> str:
    text = number(value)
    return text if text.startswith("−") else f"+{text}"


def _p_text(p: Any) -> str:
    return "p < 0.001" if float(p) < 0.001 else f"p = {float(p):.3f}"
