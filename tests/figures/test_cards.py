"""Cards show the numbers they are given, complete or not, and nothing on them is cut off or covered."""

from __future__ import annotations

import itertools

import numpy as np
import pandas as pd
import pytest
from matplotlib.text import Text

from odograph.figures.card import draw_card
from odograph.figures.card_curves import score_rows
from odograph.figures.style import figure_bytes
from odograph.settings.figures import FiguresSettings


def words(figure) -> str:
    return "\n".join(text.get_text() for text in figure.findobj(Text))


def axes_titled(figure, title: str):
    return next(axes for axes in figure.axes if title in (axes.get_title(), axes.get_title(loc="left")))


def test_card_shows_the_curves(unit_row, unit_scores, curves, behaviour, corners, settings):
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    speed = axes_titled(figure, "speed")
    assert any(np.array_equal(line.get_ydata(), curves["speed_rate_hz"]) for line in speed.lines)
    direction = axes_titled(figure, "head direction")
    fitted = next(
        line for line in direction.lines if np.array_equal(line.get_ydata(), curves["head_direction_rate_hz"])
    )
    np.testing.assert_allclose(fitted.get_xdata(), np.degrees(curves["head_direction_rad"]))
    observed = axes_titled(figure, "observed rate").images[0]
    np.testing.assert_array_equal(observed.get_array().mask, np.isnan(curves["position_observed_hz"]))
    assert tuple(observed.get_extent()) == pytest.approx((0, 1, 0, 1))


def test_fitted_map_is_shown_where_the_animal_was(
    unit_row, unit_scores, curves, behaviour, corners, settings
):
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    fitted = axes_titled(figure, "fitted by position").images[0]
    assert fitted.get_array().mask[0, 0]
    assert fitted.get_array().mask.sum() == 1
    observed = axes_titled(figure, "observed rate").images[0]
    assert fitted.get_clim() == observed.get_clim(), "the two maps share one scale"


def test_spikes_lie_where_the_animal_was(unit_row, unit_scores, curves, behaviour, corners, settings):
    curves["spike_bins"] = np.array([0, 5, 5, 1050, 3999, 99999, -1], dtype=np.int32)
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    dots = axes_titled(figure, "path and spikes").collections[0].get_offsets()
    # Bin 1050 is not valid, the last two are no bins at all.
    np.testing.assert_allclose(dots, behaviour.loc[[0, 5, 5, 3999], ["x_m", "y_m"]].to_numpy())


def test_sample_of_many_spikes_is_said(unit_row, unit_scores, curves, behaviour, corners):
    figure = draw_card(
        unit_row, unit_scores, curves, behaviour, corners, FiguresSettings(dpi=72, spike_dots=100)
    )
    assert "100 of 500 spikes" in words(figure)
    assert len(axes_titled(figure, "path and spikes").collections[0].get_offsets()) == 100


def test_path_is_broken_where_it_is_not_valid(unit_row, unit_scores, curves, behaviour, corners):
    few = FiguresSettings(dpi=72, path_points=500)
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, few)
    path = axes_titled(figure, "path and spikes").lines[0]
    assert len(path.get_xdata()) <= 500
    broken = np.isnan(path.get_xdata())
    assert broken.sum() == pytest.approx(500 * (100 + 400) / 4000, abs=4)


def test_selected_model_is_marked_and_n_is_there(unit_row, unit_scores, curves, behaviour, corners, settings):
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    scores = axes_titled(figure, "held-out score of every model")
    bold = [label.get_text() for label in scores.get_yticklabels() if label.get_weight() == "bold"]
    assert bold == ["position + head direction"]
    assert len(scores.get_yticklabels()) == 8
    told = words(figure)
    for part in (
        "n = 572 spikes",
        "selected, p < 0.001",
        "selected, p = 0.012",
        "not selected, p = 0.440",
        "MEC",
        "heron",
    ):
        assert part in told


def test_order_of_scores_does_not_matter(
    unit_row, unit_scores, curves, behaviour, corners, settings, record_id
):
    pictures = [
        figure_bytes(draw_card(unit_row, table, curves, behaviour, corners, settings), "png", record_id, "t")
        for table in (unit_scores, unit_scores.iloc[::-1])
    ]
    assert pictures[0] == pictures[1]


def test_few_of_many_models_are_listed_with_the_selected_one():
    names = ["a", "b", "c", "d", "e"]
    models = ["constant", *("+".join(part) for k in range(1, 6) for part in itertools.combinations(names, k))]
    scores = pd.DataFrame({"model": models, "bits_per_spike": np.arange(32.0), "bits_per_spike_se": 0.1})
    listed = score_rows(scores, "a")["model"].tolist()
    assert len(listed) == 12
    assert listed[0] == "constant"
    assert {"a", "a+b+c+d+e"} <= set(listed)


@pytest.mark.parametrize(
    "status, word", [("too_few_spikes", "Too few spikes to fit"), ("failed", "The fit failed")]
)
def test_unit_without_a_fit_says_why(status, word, unit_row, behaviour, corners, settings, misplaced):
    unit_row |= {"status": status, "status_reason": "41 spikes in valid time; at least 100 are needed"}
    unit_row |= {"selected_model": None}
    no_scores = pd.DataFrame({"model": [], "bits_per_spike": [], "bits_per_spike_se": []})
    figure = draw_card(unit_row, no_scores, {"spike_bins": np.array([3])}, behaviour, corners, settings)
    told = words(figure)
    assert word in told
    assert "at least 100" in told.replace("\n", " ")
    assert misplaced(figure) == []


def test_failed_model_is_shown_as_failed(unit_row, unit_scores, curves, behaviour, corners, settings):
    unit_scores.loc[7, "bits_per_spike"] = np.nan
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    assert "failed" in [
        text.get_text() for text in axes_titled(figure, "held-out score of every model").texts
    ]


@pytest.mark.parametrize("missing", ["position", "head_direction", "speed"])
def test_absent_term_is_said(missing, unit_row, unit_scores, curves, behaviour, corners, settings, misplaced):
    kept = {name: values for name, values in curves.items() if not name.startswith(missing)}
    figure = draw_card(unit_row, unit_scores, kept, behaviour, corners, settings)
    assert (
        f"no fit of {missing.replace('_', ' ')}" in words(figure).replace("\n", " ") or missing == "position"
    )
    assert misplaced(figure) == []


def test_added_variable_gets_a_panel(unit_row, unit_scores, curves, behaviour, corners, settings, misplaced):
    curves |= {"licking_value": np.arange(5.0), "licking_rate_hz": np.arange(5.0)}
    unit_row |= {
        "speed_gain_status": "fitted",
        "theta_phase_speed_gain": 0.2,
        "theta_phase_speed_gain_se": 0.1,
    }
    curves |= {
        "theta_phase_rad": curves["head_direction_rad"],
        "theta_phase_rate_hz": curves["head_direction_rate_hz"],
    }
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    np.testing.assert_array_equal(axes_titled(figure, "licking").lines[0].get_ydata(), np.arange(5.0))
    assert axes_titled(figure, "theta phase").get_xlabel() == "theta phase (°)"
    assert misplaced(figure) == []


def test_session_without_valid_position(unit_row, unit_scores, curves, behaviour, settings):
    behaviour[["x_m", "y_m"]] = np.nan
    behaviour["valid"] = False
    assert "no valid position" in words(draw_card(unit_row, unit_scores, curves, behaviour, None, settings))


@pytest.mark.parametrize("size", [7, 9])
@pytest.mark.parametrize("selected", ["constant", "position+head_direction+speed"])
def test_nothing_is_cut_off_or_covered(
    size, selected, unit_row, unit_scores, curves, behaviour, corners, misplaced
):
    unit_row |= {"session": "2031-05-04_heron_the-long-name-of-a-session", "selected_model": selected}
    settings = FiguresSettings(dpi=72, font_size_pt=size)
    assert misplaced(draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)) == []


@pytest.mark.parametrize("scale", [0.01, 1e-4, 30])
def test_scores_of_any_size_have_readable_ticks(
    scale, unit_row, unit_scores, curves, behaviour, corners, settings, misplaced
):
    unit_scores[["bits_per_spike", "bits_per_spike_se"]] *= scale
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    assert misplaced(figure) == []
    assert np.ptp(axes_titled(figure, "held-out score of every model").get_xlim()) >= 0.02


@pytest.mark.parametrize("shape", [(2.0, 0.5), (0.4, 1.5)])
def test_arena_keeps_its_shape(shape, unit_row, unit_scores, curves, behaviour, settings, misplaced):
    behaviour["x_m"] *= shape[0]
    behaviour["y_m"] *= shape[1]
    curves["position_x_m"] = curves["position_x_m"] * shape[0]
    curves["position_y_m"] = curves["position_y_m"] * shape[1]
    corners = [[0, 0], [shape[0], 0], list(shape), [0, shape[1]]]
    figure = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    assert misplaced(figure) == []
    axes = axes_titled(figure, "observed rate")
    box = axes.get_window_extent()
    wide, high = np.ptp(axes.get_xlim()), np.ptp(axes.get_ylim())
    assert box.width / box.height == pytest.approx(wide / high, rel=0.01)


@pytest.fixture
def judged_row(unit_row) -> dict:
    """A unit whose gains were fitted and whose fit was judged."""
    return unit_row | {
        "speed_gain_status": "fitted",
        "position_speed_gain": 0.213,
        "position_speed_gain_se": 0.041,
        "position_speed_gain_p": 0.0003,
        "position_fitted_slow_bits_per_spike": 0.412,
        "position_fitted_fast_bits_per_spike": 0.875,
        "head_direction_speed_gain": -0.05,
        "head_direction_speed_gain_se": 0.06,
        "head_direction_speed_gain_p": 0.44,
        "rescaling_ks": 0.0213,
        "rescaling_ks_p": 0.31,
        "rescaling_intervals": 1571,
        "residual_correlation_peak": 0.034,
        "residual_correlation_peak_lag_s": 0.04,
    }


@pytest.fixture
def judged_curves(curves) -> dict:
    lag_s = 0.02 * np.arange(1, 51)
    residuals = 0.1 * np.exp(-lag_s / 0.1) - 0.01
    return curves | {
        "residual_lag_s": lag_s,
        "residual_autocorrelation": residuals,
        "residual_band": np.full(50, 0.02),
    }


@pytest.mark.parametrize("size", [7, 9])
def test_gains_and_fit_have_a_row(
    size, judged_row, judged_curves, unit_scores, behaviour, corners, record_id, misplaced
):
    figure = draw_card(
        judged_row, unit_scores, judged_curves, behaviour, corners, FiguresSettings(dpi=72, font_size_pt=size)
    )
    told = words(figure).splitlines()
    for line in (
        "position +0.21 ± 0.04, p < 0.001",
        "  slow 0.41, fast 0.88 bits per spike",
        "head direction −0.05 ± 0.06, p = 0.440",
        "KS 0.021 of 1,571 rescaled intervals,",
        "p = 0.310: compatible at 5 %",
        "largest residual correlation +0.03 at 40 ms",
    ):
        assert line in told
    axes = axes_titled(figure, "residual autocorrelation")
    drawn = [line.get_ydata() for line in axes.lines]
    assert any(np.array_equal(values, judged_curves["residual_autocorrelation"]) for values in drawn)
    (band,) = axes.collections
    edges = band.get_paths()[0].vertices[:, 1]
    assert (edges.min(), edges.max()) == (-0.02, 0.02)
    assert misplaced(figure) == []


def test_stamp_of_the_record_has_its_place(
    judged_row, judged_curves, unit_scores, behaviour, corners, settings
):
    """The stamp comes when the file is written: the lowest line has to leave the right corner free."""
    judged_row |= {f"head_direction_information_{pace}_bits_per_spike": 0.1 for pace in ("slow", "fast")}
    figure = draw_card(judged_row, unit_scores, judged_curves, behaviour, corners, settings)
    figure.draw_without_rendering()
    lowest = [text for text in figure.texts if text.get_position()[1] * figure.get_size_inches()[1] < 0.12]
    assert len(lowest) == 1
    assert lowest[0].get_window_extent().x1 < figure.bbox.x1 - 1.2 * figure.dpi


@pytest.mark.parametrize(
    "change, line",
    [
        ({"speed_gain_status": "failed", "position_speed_gain": np.nan}, "The fit failed."),
        (
            {"position_speed_gain": np.nan, "head_direction_speed_gain": np.nan},
            "was selected and passed its test.",
        ),
        ({"rescaling_ks_p": 0.04}, "p = 0.040: not compatible at 5 %"),
        ({"rescaling_ks": np.nan, "rescaling_ks_p": np.nan}, "It was not judged for this unit."),
        ({"position_speed_gain_p": np.nan}, "position +0.21 ± 0.04"),
    ],
)
def test_gains_and_fits_that_are_not_there_are_said(
    change, line, judged_row, curves, unit_scores, behaviour, corners, settings, misplaced
):
    figure = draw_card(judged_row | change, unit_scores, curves, behaviour, corners, settings)
    assert line in words(figure).splitlines()
    assert "Residuals were not kept" in words(figure)
    assert misplaced(figure) == []


def test_card_of_results_without_them_is_as_it_was(
    unit_row, judged_row, unit_scores, curves, behaviour, corners, settings
):
    old = draw_card(unit_row, unit_scores, curves, behaviour, corners, settings)
    new = draw_card(judged_row, unit_scores, curves, behaviour, corners, settings)
    assert "speed gain" not in words(old)
    assert new.get_size_inches()[1] - old.get_size_inches()[1] == pytest.approx(1.5)
