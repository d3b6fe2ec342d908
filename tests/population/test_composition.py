"""How many units encode what: counts by hand, intervals by their own tests, order and small numbers."""

import numpy as np
import pandas as pd
import pytest
from statsmodels.stats.proportion import proportion_confint

from odograph.population.composition import AT_LEAST_ONE, TWO_OR_MORE, composition
from odograph.population.gather import gather_units
from odograph.settings.population import PopulationSettings

SETTINGS = PopulationSettings(bootstrap_draws=400)


def counted(table, level, name):
    part = table[(table["level"] == level) & (table["name"] == name)]
    return {row["category"]: (row["k"], row["n"]) for row in part.to_dict("records")}


@pytest.fixture
def by_hand(made_up):
    models = {
        "a": ["position", "position+speed", "constant", "position+head_direction+speed"],
        "b": ["head_direction", "speed", "constant"],
    }
    tables = [
        pd.DataFrame([made_up.unit_row(session, unit, model) for unit, model in enumerate(chosen)])
        for session, chosen in models.items()
    ]
    tables.append(pd.DataFrame([made_up.unit_row("b", 9, "position", status="failed")]))
    inventories = [
        made_up.inventory("a", range(4), region={0: "CA1", 1: "CA1", 2: "CA3"}),
        made_up.inventory("b", [*range(3), 9], region="CA3"),
    ]
    sessions = made_up.sessions_table(("a", "one", "old"), ("b", "two", "old"))
    return gather_units(tables, inventories, sessions, SETTINGS)


def test_counts_by_hand(by_hand):
    table = composition(by_hand, SETTINGS)
    assert counted(table, "all", "all") == {
        "position, whatever else": (3, 7),
        "head_direction, whatever else": (2, 7),
        "speed, whatever else": (3, 7),
        AT_LEAST_ONE: (5, 7),
        TWO_OR_MORE: (2, 7),
        "constant": (2, 7),
        "position": (1, 7),
        "head_direction": (1, 7),
        "speed": (1, 7),
        "position+head_direction": (0, 7),
        "position+speed": (1, 7),
        "head_direction+speed": (0, 7),
        "position+head_direction+speed": (1, 7),
    }
    assert counted(table, "animal", "two")["head_direction"] == (1, 3)
    assert counted(table, "group", "old") == counted(table, "all", "all")
    assert counted(table, "region", "CA1")["position, whatever else"] == (2, 2)
    assert counted(table, "region", "CA3")["constant"] == (2, 4)
    assert set(table["level"]) == {"all", "animal", "group", "region"}


def test_exact_combinations_add_up(made_up):
    tables, inventories, sessions = made_up.drawn_study(np.random.default_rng(2))
    table = composition(gather_units(tables, inventories, sessions, SETTINGS), SETTINGS)
    for (_, _), part in table.groupby(["level", "name"]):
        exact = part[part["kind"] == "exact"]
        assert exact["k"].sum() == exact["n"].iloc[0]
        assert exact["share"].sum() == pytest.approx(1)
    assert len(table[table["level"] == "animal"]["name"].unique()) == 4


def test_one_animal_takes_wilsons_interval(by_hand):
    table = composition(by_hand, SETTINGS)
    part = table[(table["level"] == "animal") & (table["name"] == "one")]
    for row in part.to_dict("records"):
        expected = proportion_confint(row["k"], row["n"], 0.05, method="wilson")
        assert (row["low"], row["high"]) == pytest.approx(expected, abs=1e-12)
        assert row["method"] == "Wilson, over units"


def test_several_animals_take_the_bootstrap(made_up):
    tables, inventories, sessions = made_up.drawn_study(np.random.default_rng(2))
    table = composition(gather_units(tables, inventories, sessions, SETTINGS), SETTINGS)
    whole = table[(table["level"] == "all") & (table["k"] > 0) & (table["k"] < table["n"])]
    assert len(whole) > 5
    assert (
        whole["method"].str.startswith("bootstrap of 4 animals, then their units (400 draws, seed 1848").all()
    )
    assert ((whole["low"] <= whole["share"]) & (whole["share"] <= whole["high"])).all()
    assert (whole["low"] < whole["high"]).all()


def test_unlike_animals_widen_the_interval(made_up):
    """The same 40 of 80 units: in one study every animal has half of them, in the other two have all."""

    def width(shares):
        tables, inventories, rows = [], [], []
        for i, share in enumerate(shares):
            models = ["position" if unit < share * 20 else "constant" for unit in range(20)]
            tables.append(pd.DataFrame([made_up.unit_row(f"s{i}", u, m) for u, m in enumerate(models)]))
            inventories.append(made_up.inventory(f"s{i}", range(20)))
            rows.append((f"s{i}", f"animal{i}", None))
        units = gather_units(tables, inventories, made_up.sessions_table(*rows), SETTINGS)
        row = composition(units, SETTINGS).iloc[0]
        assert (row["category"], row["k"], row["n"]) == ("position, whatever else", 40, 80)
        return row["high"] - row["low"]

    assert width([1, 1, 0, 0]) > 2 * width([0.5, 0.5, 0.5, 0.5])


def test_a_share_of_none_or_all_is_not_certain(made_up):
    tables = [pd.DataFrame([made_up.unit_row(s, u) for u in range(10)]) for s in "abc"]
    inventories = [made_up.inventory(s, range(10), animal=s) for s in "abc"]
    table = composition(gather_units(tables, inventories, made_up.sessions_table(), SETTINGS), SETTINGS)
    whole = table[table["level"] == "all"].set_index("category")
    low, high = proportion_confint(0, 30, 0.05, method="wilson")
    assert (whole.loc["speed", "low"], whole.loc["speed", "high"]) == pytest.approx((low, high))
    assert whole.loc["constant", "high"] == 1 and whole.loc["constant", "low"] < 0.9
    assert "all alike" in whole.loc["constant", "method"]


def test_one_animal_has_no_interval_over_animals(made_up):
    table = pd.DataFrame([made_up.unit_row("a", u, m) for u, m in enumerate(["position", "constant"])])
    units = gather_units([table], [made_up.inventory("a", [0, 1], "one")], made_up.sessions_table(), SETTINGS)
    whole = composition(units, SETTINGS)
    whole = whole[whole["level"] == "all"]
    assert whole["low"].isna().all() and whole["high"].isna().all()
    assert (whole["method"] == "not available: 1 animal").all()
    assert (whole["share"] >= 0).all()


def test_no_fitted_unit(made_up):
    table = composition(gather_units([], [], made_up.sessions_table(), SETTINGS), SETTINGS)
    assert (table["n"] == 0).all() and table["share"].isna().all() and table["low"].isna().all()
    assert set(table["method"]) == {"not available: no units"}


def test_the_order_of_units_does_not_matter(made_up):
    tables, inventories, sessions = made_up.drawn_study(np.random.default_rng(2))
    units = gather_units(tables, inventories, sessions, SETTINGS)
    shuffled = units.sample(frac=1, random_state=4)
    pd.testing.assert_frame_equal(composition(units, SETTINGS), composition(shuffled, SETTINGS))


def test_a_new_region_leaves_the_other_intervals_alone(made_up):
    tables, inventories, sessions = made_up.drawn_study(np.random.default_rng(2))
    before = composition(gather_units(tables, inventories, sessions, SETTINGS), SETTINGS)
    for document in inventories:
        for entry in document["units"]:
            entry["region"] = "a third one" if entry["region"] == "lower" else entry["region"]
    after = composition(gather_units(tables, inventories, sessions, SETTINGS), SETTINGS)
    untouched = before["name"] != "lower"
    pd.testing.assert_frame_equal(
        before[untouched].reset_index(drop=True),
        after[after["name"] != "a third one"].reset_index(drop=True),
    )


def test_many_variables_list_only_the_combinations_that_are_there(made_up):
    extra = {f"encodes_{name}": False for name in ("bait", "grooming")}
    rows = [made_up.unit_row("a", 1, "position+bait", **extra), made_up.unit_row("a", 2, "bait", **extra)]
    units = gather_units(
        [pd.DataFrame(rows)], [made_up.inventory("a", [1, 2])], made_up.sessions_table(), SETTINGS
    )
    exact = composition(units, SETTINGS).query("level == 'all' and kind == 'exact'")
    assert exact["category"].tolist() == ["constant", "bait", "position+bait"]
