"""Change with running speed: shapes counted by hand, paired tests against handbook examples."""

import numpy as np
import pandas as pd
import pytest

from odograph.population.adaptivity import speed_table
from odograph.population.gather import gather_units
from odograph.population.speed import information_pairs, signed_rank_p
from odograph.settings.population import PopulationSettings

SETTINGS = PopulationSettings(bootstrap_draws=400)


def test_signed_rank_of_depression_scale():
    """Hollander & Wolfe 1973, p. 29 (as in R's wilcox.test help): two-sided p 20 / 512."""
    x = np.array([1.83, 0.50, 1.62, 2.48, 1.68, 1.88, 1.55, 3.06, 1.30])
    y = np.array([0.878, 0.647, 0.598, 2.05, 1.06, 1.29, 1.06, 3.14, 1.29])
    assert signed_rank_p(x - y) == pytest.approx(0.0390625, abs=1e-12)
    assert signed_rank_p(np.append(x - y, [0.0, 0.0])) == pytest.approx(0.0390625, abs=1e-12)


def test_signed_rank_of_darwins_maize():
    """Differences from Fisher, The Design of Experiments; p as in scipy's documentation."""
    differences = [6, 8, 14, 16, 23, 24, 28, 29, 41, -48, 49, 56, 60, -67, 75]
    assert signed_rank_p(np.array(differences, float)) == pytest.approx(0.041259765625, abs=1e-12)


def test_signed_rank_without_differences():
    assert np.isnan(signed_rank_p(np.zeros(5)))
    assert np.isnan(signed_rank_p(np.empty(0)))


def paired(slow, fast):
    return {
        "position_information_slow_bits_per_spike": slow,
        "position_information_fast_bits_per_spike": fast,
    }


@pytest.fixture
def units(made_up):
    rows = [
        made_up.unit_row("a", 1, "position+speed", shape="rising", **paired(1.0, 1.5)),
        made_up.unit_row("a", 2, "position", **paired(2.0, 1.9)),
        made_up.unit_row("a", 3, "position+speed", shape="falling", **paired(1.0, np.nan)),
        made_up.unit_row("b", 1, "position+speed", shape="rising", **paired(1.0, 1.3)),
        made_up.unit_row("b", 2, "speed", shape="undecided", **paired(5.0, 9.0)),
        made_up.unit_row("b", 3, "position", status="failed", **paired(5.0, 9.0)),
        made_up.unit_row("b", 4, "position+speed", p={"speed": 0.9}, **paired(0.5, 0.5)),
    ]
    inventories = [made_up.inventory("a", [1, 2, 3], "one"), made_up.inventory("b", [1, 2, 3, 4], "two")]
    return gather_units([pd.DataFrame(rows)], inventories, made_up.sessions_table(), SETTINGS)


def test_pairs_by_hand(units):
    """Pairs are of fitted units that encode the variable and have both halves."""
    pairs = information_pairs(units, "position")
    assert pairs[["session", "unit"]].to_numpy().tolist() == [["a", 1], ["a", 2], ["b", 1], ["b", 4]]
    np.testing.assert_allclose(pairs["change_bits_per_spike"], [0.5, -0.1, 0.3, 0.0], atol=1e-12)


def test_table_by_hand(units):
    table = speed_table(units, SETTINGS)
    shapes = table[(table["measure"] == "speed_shape") & (table["level"] == "all")].set_index("category")
    assert shapes["k"].to_dict() == {"rising": 2, "falling": 1, "non_monotonic": 0, "undecided": 1}
    assert (shapes["n"] == 4).all() and (shapes["animals"] == 2).all()
    assert shapes["value"].sum() == 1
    change = table[table["measure"] == "position_information_change"].set_index("name")
    assert change.loc["all", ["k", "n", "animals"]].tolist() == [2, 4, 2]
    assert change.loc["all", ["value", "median_slow", "median_fast"]].tolist() == pytest.approx(
        [0.15, 1.0, 1.4]
    )
    assert change.loc["all", "low"] <= 0.15 <= change.loc["all", "high"]
    assert change.loc["all", "p"] == signed_rank_p(np.array([0.5, -0.1, 0.3, 0.0]))
    assert change.loc["one", ["k", "n", "animals"]].tolist() == [1, 2, 1]
    assert np.isnan(change.loc["one", "low"]) and "not available: 2 units" in change.loc["one", "method"]
    none = table[table["measure"] == "head_direction_information_change"]
    assert none["n"].tolist() == [0] and none["value"].isna().all() and none["p"].isna().all()


def test_a_change_that_every_animal_shows_is_outside_zero(made_up):
    rng = np.random.default_rng(0)
    rows, inventories = [], []
    for animal in "abcdef":
        for unit in range(12):
            slow = rng.gamma(2.0, 0.5)
            rows.append(
                made_up.unit_row(animal, unit, "position", **paired(slow, slow + rng.normal(0.3, 0.2)))
            )
        inventories.append(made_up.inventory(animal, range(12), animal))
    units = gather_units([pd.DataFrame(rows)], inventories, made_up.sessions_table(), SETTINGS)
    table = speed_table(units, SETTINGS)
    change = table[(table["measure"] == "position_information_change") & (table["level"] == "all")].iloc[0]
    # The true median is 0.3. Over 72 independent units its standard error is 1.2533 * 0.2 / sqrt(72) = 0.03,
    # and resampling both levels of animals that do not differ makes it up to sqrt(2) times larger.
    assert 0 < change["low"] < 0.3 < change["high"]
    assert change["high"] - change["low"] < 2 * 1.96 * 0.03 * 1.5
    assert change["p"] < 1e-6
    assert "bootstrap of 6 animals" in change["method"] and "72 units, as if independent" in change["method"]


def test_the_order_of_units_does_not_matter(made_up):
    tables, inventories, sessions = made_up.drawn_study(np.random.default_rng(6))
    units = gather_units(tables, inventories, sessions, SETTINGS)
    shuffled = units.sample(frac=1, random_state=4)
    pd.testing.assert_frame_equal(speed_table(units, SETTINGS), speed_table(shuffled, SETTINGS))


def test_no_unit_at_all(made_up):
    table = speed_table(gather_units([], [], made_up.sessions_table(), SETTINGS), SETTINGS)
    assert len(table) == 6 and (table["n"] == 0).all() and table["low"].isna().all()


def test_a_study_without_speed_has_no_speed_tuning(made_up):
    row = {name: value for name, value in made_up.unit_row("a", 1, "position").items() if "speed" not in name}
    units = gather_units(
        [pd.DataFrame([row])], [made_up.inventory("a", [1])], made_up.sessions_table(), SETTINGS
    )
    shapes = speed_table(units, SETTINGS).query("measure == 'speed_shape'")
    assert (shapes["n"] == 0).all()
