"""Speed gains of all units: verdicts by scipy's adjustment, rows by hand."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from scipy.stats import false_discovery_control

from odograph.population.adaptivity import speed_table
from odograph.population.composition import composition
from odograph.population.gains import gain_variables, gained_units
from odograph.population.gather import gather_units
from odograph.population.sessions import session_table
from odograph.population.summarise import fit_line, summary, summary_lines
from odograph.settings.population import PopulationSettings

SETTINGS = PopulationSettings(bootstrap_draws=300)
GAINS = [0.5, 0.3, -0.4, 0.1, 0.02]
P = [0.001, 0.012, 0.02, 0.3, 0.9]


def gained(gain, p, slow=1.0, fast=1.0):
    return {
        "position_speed_gain": gain,
        "position_speed_gain_se": 0.05,
        "position_speed_gain_p": p,
        "position_fitted_slow_bits_per_spike": slow,
        "position_fitted_fast_bits_per_spike": fast,
        "position_fitted_slow_bits_per_s": 3 * slow,
        "position_fitted_fast_bits_per_s": 4 * fast,
        "speed_gain_status": "fitted" if np.isfinite(gain) else "not_fitted",
    }


@pytest.fixture
def study(made_up):
    rows = [
        made_up.unit_row("a", unit, "position", **gained(gain, p, 1.0, 1.0 + gain))
        for unit, (gain, p) in enumerate(zip(GAINS, P, strict=True))
    ]
    # The selected model has position, but its test does not: no gain of this unit counts.
    rows.append(made_up.unit_row("b", 0, "position", p={"position": 0.9}, **gained(0.9, 0.0001)))
    rows.append(made_up.unit_row("b", 1, "constant", **gained(np.nan, np.nan)))
    failed = gained(np.nan, np.nan) | {"speed_gain_status": "failed"}
    rows.append(made_up.unit_row("b", 2, "position", **failed))
    inventories = [
        made_up.inventory("a", range(5), "one", region={0: "upper", 1: "upper", 2: "lower"}),
        made_up.inventory("b", range(3), "two"),
    ]
    return gather_units([pd.DataFrame(rows)], inventories, made_up.sessions_table(), SETTINGS), inventories


def test_verdicts_are_adjusted_over_the_units_that_encode_the_variable(study):
    units, _ = study
    a = units[units["session"] == "a"]
    np.testing.assert_allclose(a["position_speed_gain_q"], false_discovery_control(P))
    assert a["position_sharpens"].tolist() == [True, True, False, False, False]
    assert a["position_blunts"].tolist() == [False, False, True, False, False]
    b = units[units["session"] == "b"]
    assert b["position_speed_gain_q"].isna().all()
    assert not b[["position_sharpens", "position_blunts"]].to_numpy().any()


def test_rows_by_hand(study):
    units, _ = study
    assert gain_variables(units) == ["position"]
    assert len(gained_units(units, "position")) == 5
    table = speed_table(units, SETTINGS)
    table = table[(table["measure"] == "position_speed_gain") & (table["level"] == "all")]
    rows = table.set_index("category")
    assert rows.loc["median gain", ["k", "n", "animals", "sessions", "value"]].tolist() == [4, 5, 1, 1, 0.1]
    mean = rows.loc["mean gain"]
    assert mean["value"] == pytest.approx(0.104) and mean["unit"] == "per standard deviation of z"
    assert np.isnan(mean["low"]) and mean["method"] == "not available: 1 animal"
    # The failed fit is a unit of the other animal, in the share of failures and nowhere else.
    assert rows.loc["failed", ["k", "n", "animals", "sessions"]].tolist() == [1, 6, 2, 2]
    assert rows.loc["sharpens", ["k", "n", "value"]].tolist() == [2, 5, 0.4]
    assert rows.loc["blunts", ["k", "n", "value"]].tolist() == [1, 5, 0.2]
    bits = rows.loc["fitted information, fast minus slow"]
    assert (
        bits["value"] == pytest.approx(0.1)
        and bits["median_slow"] == 1.0
        and bits["unit"] == "bits_per_spike"
    )
    rate = rows.loc["fitted information rate, fast minus slow"]
    assert rate["value"] == pytest.approx(4 * 1.1 - 3) and rate["unit"] == "bits_per_s"


def test_rows_of_regions_groups_and_animals(study):
    units, _ = study
    table = speed_table(units, SETTINGS)
    table = table[(table["measure"] == "position_speed_gain") & (table["category"] == "sharpens")]
    rows = table.set_index(["level", "name"])[["k", "n", "value"]]
    assert rows.loc[("region", "upper")].tolist() == [2, 2, 1.0]
    assert rows.loc[("region", "lower")].tolist() == [0, 1, 0.0]
    assert rows.loc[("animal", "one")].tolist() == [2, 5, 0.4]
    # The other animal's only unit that encodes position has no gain, for its fit failed.
    assert rows.loc[("animal", "two"), ["k", "n"]].tolist() == [0, 0]
    assert "group" not in rows.index.get_level_values("level")


def test_mean_within_an_animal_has_students_interval(study):
    units, _ = study
    table = speed_table(units, SETTINGS)
    row = table[
        (table["measure"] == "position_speed_gain")
        & (table["category"] == "mean gain")
        & (table["name"] == "one")
    ].iloc[0]
    expected = stats.t.interval(0.95, 4, np.mean(GAINS), stats.sem(GAINS))
    assert (row["low"], row["high"]) == pytest.approx(expected)
    assert row["method"] == "Student's t, over units"


def test_mean_over_animals_is_resampled_by_animal(made_up):
    """Three animals whose units agree: the draws are means of 3 values drawn with replacement (by hand)."""
    values = {"a": 0.0, "b": 0.3, "c": 0.9}
    rows = [
        made_up.unit_row(session, unit, "position", **gained(value, 0.5))
        for session, value in values.items()
        for unit in range(4)
    ]
    inventories = [made_up.inventory(session, range(4), session) for session in values]
    units = gather_units([pd.DataFrame(rows)], inventories, made_up.sessions_table(), SETTINGS)
    table = speed_table(units, PopulationSettings(bootstrap_draws=4000))
    row = table[(table["measure"] == "position_speed_gain") & (table["level"] == "all")]
    row = row.set_index("category").loc["mean gain"]
    assert row["value"] == pytest.approx(0.4)
    # Of the 27 equally likely triples one is (a, a, a) and one (c, c, c), each 3.7 % and so beyond 2.5 %.
    assert (row["low"], row["high"]) == pytest.approx((0.0, 0.9))
    assert row["sessions"] == 3 and "bootstrap of 3 animals" in row["method"]


def test_the_summary_says_how_many_sharpen(study, made_up):
    units, inventories = study
    documents = {"intake": inventories, "sync": [], "behaviour": []}
    sessions = session_table(documents, made_up.sessions_table(), units)
    found = summary(units, composition(units, SETTINGS), speed_table(units, SETTINGS), sessions)
    assert found["speed_gains"]["position"]["median"] == pytest.approx(0.1)
    assert found["speed_gains"]["position"]["mean"] == pytest.approx(0.104)
    assert found["speed_gains"]["position"]["failed"]["k"] == 1
    assert found["speed_gains_failed"] == 1
    lines = summary_lines(found)
    assert len(lines) == 10
    expected = "Tuning at higher speed: position 2 sharpen, 1 blunt of 5 (mean gain +0.10); 1 fit failed."
    assert expected in lines


def test_a_study_without_gains_tells_the_halves(made_up):
    row = made_up.unit_row("a", 1, "position")
    inventories = [made_up.inventory("a", [1], "one")]
    units = gather_units([pd.DataFrame([row])], inventories, made_up.sessions_table(), SETTINGS)
    documents = {"intake": inventories, "sync": [], "behaviour": []}
    sessions = session_table(documents, made_up.sessions_table(), units)
    found = summary(units, composition(units, SETTINGS), speed_table(units, SETTINGS), sessions)
    assert found["speed_gains"] == {}
    assert any(line.startswith("Fast minus slow running") for line in summary_lines(found))


def test_compatible_fits_are_counted_over_the_units_that_were_judged(made_up):
    p = [0.5, 0.2, 0.051, 0.049, np.nan]
    rows = [made_up.unit_row("a", unit, "position", rescaling_ks_p=value) for unit, value in enumerate(p)]
    rows.append(made_up.unit_row("a", 5, "position", status="failed", rescaling_ks_p=0.9))
    inventories = [made_up.inventory("a", range(6), "one", region={0: "upper", 3: "upper"})]
    units = gather_units([pd.DataFrame(rows)], inventories, made_up.sessions_table(), SETTINGS)
    parts = composition(units, SETTINGS)
    fits = parts[parts["kind"] == "fit"].set_index(["level", "name"])
    assert fits.loc[("all", "all"), ["k", "n", "share"]].tolist() == [3, 4, 0.75]
    assert fits.loc[("region", "upper"), ["k", "n"]].tolist() == [1, 2]
    documents = {"intake": inventories, "sync": [], "behaviour": []}
    found = summary(
        units, parts, speed_table(units, SETTINGS), session_table(documents, made_up.sessions_table(), units)
    )
    assert fit_line(found) == (
        "Goodness of fit on held-out time: rescaled intervals compatible with the selected model at 5 % in "
        "3 of 4 units (75 %)."
    )


def test_results_that_were_not_judged_say_nothing_of_the_fit(made_up):
    inventories = [made_up.inventory("a", [1], "one")]
    table = pd.DataFrame([made_up.unit_row("a", 1, "position")])
    units = gather_units([table], inventories, made_up.sessions_table(), SETTINGS)
    parts = composition(units, SETTINGS)
    assert "fit" not in set(parts["kind"])
    documents = {"intake": inventories, "sync": [], "behaviour": []}
    found = summary(
        units, parts, speed_table(units, SETTINGS), session_table(documents, made_up.sessions_table(), units)
    )
    assert found["rescaled_intervals_fit"] is None and fit_line(found) == ""
