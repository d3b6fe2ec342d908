"""A session's picture shows its clock, tracking and units, or why there are none."""

from __future__ import annotations

import numpy as np
import pytest
from matplotlib.text import Text

from odograph.figures.session_quality import draw_session_quality, worst_verdict
from odograph.settings.figures import FiguresSettings


def words(figure) -> str:
    return "\n".join(text.get_text() for text in figure.findobj(Text)).replace("\n", " ")


@pytest.mark.parametrize("size", [7, 9])
def test_whole_session(size, inventory, clock, residuals, behaviour, audit, misplaced):
    settings = FiguresSettings(dpi=72, font_size_pt=size)
    figure = draw_session_quality(inventory, clock, residuals, behaviour, audit, settings)
    told = words(figure)
    for part in (
        "drift 41.25 ppm",
        "3,990 of 4,000 frames",
        "20 pulses have no frame",
        "lost 2.0 s",
        "invalid time 8.0 s",
    ):
        assert part in told
    assert "1.2 min, 87.5 % of 1.3 min" in told
    assert "8 of 9 units" in told
    assert misplaced(figure) == []


def test_residuals_are_drawn(inventory, clock, residuals, behaviour, audit, settings):
    figure = draw_session_quality(inventory, clock, residuals.iloc[::-1], behaviour, audit, settings)
    axes = next(axes for axes in figure.axes if axes.get_ylabel() == "residual (ms)")
    dots = max(axes.lines, key=lambda line: len(line.get_xdata()))
    np.testing.assert_allclose(dots.get_xdata(), residuals["time_s"] / 60)
    np.testing.assert_array_equal(dots.get_ydata(), residuals["residual_ms"])


def test_shortest_loss_is_still_seen(inventory, clock, residuals, behaviour, audit, settings):
    behaviour["valid"], behaviour["reason"] = True, ""
    behaviour.loc[1234, ["valid", "reason"]] = [False, "jump"]
    figure = draw_session_quality(inventory, clock, residuals, behaviour, audit, settings)
    strip = next(axes for axes in figure.axes if axes.get_title(loc="left").startswith("valid time")).images[
        0
    ]
    colours = np.unique(np.asarray(strip.get_array()).reshape(-1, 3), axis=0)
    assert len(colours) == 2


def test_time_per_place_adds_up(inventory, clock, residuals, behaviour, audit, settings):
    figure = draw_session_quality(inventory, clock, residuals, behaviour, audit, settings)
    axes = next(axes for axes in figure.axes if axes.get_title(loc="left") == "time per place")
    assert axes.images[0].get_array().sum() == pytest.approx(0.02 * behaviour["valid"].sum())


def failing(found: str, remedy: str | None = None) -> dict:
    return {
        "verdict": "fail",
        "findings": [{"level": "fail", "place": "units", "found": found, "remedy": remedy}],
    }


def test_unreadable_session_shows_the_reason(settings, misplaced):
    inventory = {"session": "heron_09", **failing("the file ends too early", "copy it again")}
    inventory |= {"file": None, "subject": None, "units": [], "arena": None}
    figure = draw_session_quality(inventory, None, None, None, None, settings)
    told = words(figure)
    assert "the file ends too early" in told
    assert "copy it again" in told
    assert "not run" in told
    assert misplaced(figure) == []


def test_failed_clock_shows_residuals_and_reason(inventory, clock, residuals, behaviour, settings, misplaced):
    clock |= failing("the clock jumps at 512.3 s")
    audit = failing("left out because sync failed")
    figure = draw_session_quality(inventory, clock, residuals, behaviour.iloc[:0], audit, settings)
    told = words(figure)
    assert "the clock jumps at 512.3 s" in told
    assert "residual (ms)" in told
    assert misplaced(figure) == []


def test_empty_products_of_a_failed_session(inventory, residuals, behaviour, settings):
    draw_session_quality(
        inventory, failing("no pulses"), residuals.iloc[:0], behaviour.iloc[:0], failing("left out"), settings
    )


def test_many_findings_stay_inside(inventory, clock, residuals, behaviour, audit, settings, misplaced):
    text = "something that takes quite some words to say and then a few more words so that it runs over lines"
    clock["findings"] = [{"level": "warn", "place": None, "found": f"{k}: {text}"} for k in range(30)]
    figure = draw_session_quality(inventory, clock, residuals, behaviour, audit, settings)
    assert "more, in the report" in words(figure)
    assert misplaced(figure) == []


def test_failures_come_before_warnings(inventory, clock, residuals, behaviour, settings):
    audit = failing("too little valid time")
    told = words(draw_session_quality(inventory, clock, residuals, behaviour, audit, settings))
    assert told.index("too little valid time") < told.index("20 pulses have no frame")


def test_worst_verdict():
    assert worst_verdict({"a": {"verdict": "pass"}, "b": {"verdict": "warn"}}) == "warn"
    assert worst_verdict({"a": {"verdict": "fail"}, "b": {"verdict": "warn"}}) == "fail"
    assert worst_verdict({"a": {}}) == "pass"


def test_no_direction_and_no_arena(inventory, clock, residuals, behaviour, audit, settings, misplaced):
    behaviour["head_direction_rad"] = np.nan
    inventory["arena"] = None
    figure = draw_session_quality(inventory, clock, residuals, behaviour, audit, settings)
    assert "No head direction." in words(figure)
    assert misplaced(figure) == []
