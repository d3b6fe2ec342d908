"""The population's figures show the shares and intervals of the tables."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from matplotlib.text import Text

from odograph.figures.captions import CAPTIONS, POPULATION_FIGURES
from odograph.figures.compare import draw_comparison
from odograph.figures.gains import draw_speed_gains
from odograph.figures.population import draw_population_figure
from odograph.figures.style import figure_bytes
from odograph.settings.figures import FiguresSettings

STUDIES = {
    "one": ["heron"],
    "three": ["heron", "ibis", "stork"],
    "many": [f"animal{k:02d}" for k in range(13)],
}


def words(figure) -> str:
    return "\n".join(text.get_text() for text in figure.findobj(Text))


@pytest.mark.parametrize("size", [7, 9])
@pytest.mark.parametrize("study", STUDIES)
@pytest.mark.parametrize("name", POPULATION_FIGURES)
def test_nothing_is_cut_off_or_covered(name, study, size, population, misplaced):
    settings = FiguresSettings(dpi=72, font_size_pt=size)
    figure = draw_population_figure(name, *population(STUDIES[study]), settings)
    assert misplaced(figure) == []
    assert "n = " in words(figure)


@pytest.mark.parametrize("name", POPULATION_FIGURES)
def test_study_without_fits_says_so(name, population, settings, misplaced):
    units, scores, composition, speed = population(["heron"])
    empty = [units.iloc[:0], scores.iloc[:0], composition.iloc[:0], speed.iloc[:0]]
    figure = draw_population_figure(name, *empty, settings)
    assert words(figure).count("No unit") == 1
    assert misplaced(figure) == []


def test_unknown_figure_is_named(population, settings):
    with pytest.raises(KeyError, match="composition"):
        draw_population_figure("pie", *population(["heron"]), settings)


def test_composition_shows_shares_and_intervals(population, settings):
    tables = population(STUDIES["three"])
    figure = draw_population_figure("composition", *tables, settings)
    table = tables[2]
    whole = table[(table["level"] == "all") & (table["kind"] == "exact")]
    axes = next(a for a in figure.axes if a.get_title(loc="left") == "exact combinations")
    bars = [bar.get_width() for bar in axes.patches]
    np.testing.assert_allclose(bars, 100 * whole["share"])
    thick = [
        line.get_xdata() for line in axes.lines if line.get_linewidth() > 2 and len(line.get_xdata()) == 2
    ]
    np.testing.assert_allclose(thick, 100 * whole[["low", "high"]].to_numpy())
    labels = [label.get_text() for label in axes.get_yticklabels()]
    assert labels[0] == "none"
    assert labels[-1] == "position + head direction + speed"
    assert f"{whole['k'].iloc[0]} of {whole['n'].iloc[0]}" in words(figure)


def test_one_animal_takes_its_own_interval(population, settings):
    tables = population(STUDIES["one"])
    table = tables[2]
    own = table[(table["level"] == "animal") & (table["kind"] == "exact")]
    figure = draw_population_figure("composition", *tables, settings)
    axes = next(a for a in figure.axes if a.get_title(loc="left") == "exact combinations")
    thick = [
        line.get_xdata() for line in axes.lines if line.get_linewidth() > 2 and len(line.get_xdata()) == 2
    ]
    np.testing.assert_allclose(thick, 100 * own[["low", "high"]].to_numpy())


def test_pairs_of_slow_and_fast(population, settings):
    units, scores, composition, speed = population(STUDIES["three"])
    figure = draw_population_figure("slow_against_fast", units, scores, composition, speed, settings)
    axes = next(a for a in figure.axes if a.get_title(loc="left") == "about position")
    drawn = np.concatenate([line.get_xydata() for line in axes.lines if line.get_linestyle() == "None"])
    names = [f"position_information_{pace}_bits_per_spike" for pace in ("slow", "fast")]
    wanted = units.loc[units["status"] == "fitted", names].to_numpy()
    np.testing.assert_allclose(np.sort(drawn, axis=0), np.sort(wanted, axis=0))
    change = speed[(speed["measure"] == "position_information_change") & (speed["level"] == "all")].iloc[0]
    assert f"median change {change['value']:.3f}" in words(figure)


def test_pairs_with_missing_and_zero_information(population, settings, misplaced):
    units, scores, composition, speed = population(STUDIES["three"])
    units.loc[0, "position_information_slow_bits_per_spike"] = 0.0
    units["head_direction_information_fast_bits_per_spike"] = np.nan
    figure = draw_population_figure("slow_against_fast", units, scores, composition, speed, settings)
    assert "No unit has enough" in words(figure)
    axes = next(a for a in figure.axes if a.get_title(loc="left") == "about position")
    drawn = np.concatenate([line.get_xydata() for line in axes.lines if line.get_linestyle() == "None"])
    assert len(drawn) == (units["status"] == "fitted").sum(), (
        "a unit without information is drawn on the edge"
    )
    assert drawn[:, 0].min() == axes.get_xlim()[0]
    assert misplaced(figure) == []


def test_scores_leave_out_units_without_a_fit(population, settings):
    units, scores, composition, speed = population(STUDIES["one"])
    figure = draw_population_figure("held_out_scores", units, scores, composition, speed, settings)
    axes = next(a for a in figure.axes if a.get_title(loc="left").startswith("each unit"))
    dots = [line for line in axes.lines if line.get_marker() == "."]
    fitted = int((units["status"] == "fitted").sum())
    assert [len(line.get_xdata()) for line in dots] == [fitted] * 7


@pytest.mark.parametrize("name", POPULATION_FIGURES)
def test_order_of_rows_does_not_matter(name, population, settings, record_id):
    tables = population(STUDIES["three"])
    mixed = [tables[0].iloc[::-1], tables[1].iloc[::-1], tables[2], tables[3]]
    pictures = [
        figure_bytes(draw_population_figure(name, *given, settings), "png", record_id, "t")
        for given in (tables, mixed)
    ]
    assert pictures[0] == pictures[1]


def test_captions_name_tables():
    assert all(caption.table.startswith("population/") and caption.text for caption in CAPTIONS.values())


def test_gains_are_ordered_and_verdicts_marked(settings):
    n = 30
    gain = np.linspace(-0.5, 0.9, n)
    units = pd.DataFrame(
        {
            "session": "a",
            "unit": np.arange(n)[::-1],
            "animal": "one",
            "group": None,
            "region": None,
            "status": "fitted",
            "speed_gain_status": "fitted",
            "encodes_position": True,
            "position_speed_gain": gain,
            "position_speed_gain_se": 0.1,
            "position_sharpens": gain > 0.3,
            "position_blunts": gain < -0.3,
            **{
                f"position_fitted_{pace}_{unit}": 1.0 + (gain if pace == "fast" else 0)
                for pace in ("slow", "fast")
                for unit in ("bits_per_spike", "bits_per_s")
            },
        }
    )
    figure = draw_speed_gains(units, settings)
    gains = figure.axes[0]
    marks = {line.get_marker(): line for line in gains.lines if line.get_marker() not in ("None", "")}
    assert len(marks["^"].get_xdata()) == int((gain > 0.3).sum())
    assert len(marks["v"].get_xdata()) == int((gain < -0.3).sum())
    drawn = np.concatenate([np.column_stack(line.get_data()) for line in marks.values()])
    assert np.all(np.diff(drawn[np.argsort(drawn[:, 0]), 1]) > 0)
    assert f"{int((gain > 0.3).sum())} sharpen" in gains.get_xlabel()


def test_gains_that_leave_the_panel_and_fits_that_failed_are_said(population, settings, misplaced):
    units, *others = population(STUDIES["three"])
    encoding = np.flatnonzero(units["encodes_position"])
    units.loc[encoding[0], "position_speed_gain"] = 2.5
    units.loc[encoding[1], "position_speed_gain_se"] = 9.0
    units.loc[encoding[2], ["position_speed_gain", "head_direction_speed_gain"]] = np.nan
    units.loc[encoding[2], "speed_gain_status"] = "failed"
    figure = draw_population_figure("speed_gains", units, *others, settings)
    axes = next(a for a in figure.axes if a.get_title(loc="left") == "position: gain of each unit")
    drawn = np.concatenate([line.get_ydata() for line in axes.lines if line.get_linestyle() == "None"])
    low, high = axes.get_ylim()
    assert len(drawn) == len(encoding) - 1
    assert drawn.max() == high == 1.5 and low <= drawn.min()
    ends = np.concatenate([path.vertices[:, 1] for c in axes.collections for path in c.get_paths()])
    assert low <= ends.min() and ends.max() <= high
    assert "1 beyond the edge" in axes.get_xlabel()
    assert "1 fit failed" in words(figure)
    assert misplaced(figure) == []


def test_standard_errors_are_drawn(population, settings):
    units, *others = population(STUDIES["one"])
    figure = draw_population_figure("speed_gains", units, *others, settings)
    axes = next(a for a in figure.axes if a.get_title(loc="left") == "position: gain of each unit")
    chosen = units[units["encodes_position"]].sort_values("position_speed_gain")
    below, above = (
        np.array([path.vertices[:, 1] for path in lines.get_paths()]) for lines in axes.collections
    )
    np.testing.assert_allclose(below[:, 1], chosen["position_speed_gain"] - chosen["position_speed_gain_se"])
    np.testing.assert_allclose(above[:, 1], chosen["position_speed_gain"] + chosen["position_speed_gain_se"])


def test_two_runs_are_drawn_side_by_side(settings, misplaced):
    row = {"kind": "includes", "category": "position, whatever else"}
    before = {f"before_{key}": value for key, value in {"share": 0.4, "low": 0.3, "high": 0.5}.items()}
    after = {f"after_{key}": value for key, value in {"share": 0.6, "low": None, "high": None}.items()}
    missing = {f"{side}_{key}": None for side in ("before", "after") for key in ("share", "low", "high")}
    rows = [row | before | after, row | missing | {"category": "speed, whatever else"}]
    figure = draw_comparison(rows, {"same": 3, "merged": 1, "split": 0}, 1, settings)
    shares, kinds = figure.axes
    marks = {line.get_marker(): line.get_xdata()[0] for line in shares.lines if line.get_marker() in "oD"}
    assert marks == {"o": 0.4, "D": 0.6}
    assert [bar.get_width() for bar in kinds.patches] == [1, 3]
    assert any("1 unit with another conclusion" in text.get_text() for text in figure.texts)
    assert not misplaced(figure)
