"""All units in one table: joining, judging, sorting, refusing."""

import numpy as np
import pandas as pd
import pytest

from odograph.errors import InputError
from odograph.population.gather import UNNAMED_ANIMAL, gather_scores, gather_units, variables_of
from odograph.settings.population import PopulationSettings

SETTINGS = PopulationSettings()


def test_rows_meet_their_animal_group_region_and_attributes(made_up):
    rows = [made_up.unit_row("b", 2), made_up.unit_row("a", 7), made_up.unit_row("a", 1)]
    inventories = [
        made_up.inventory("a", [1, 7, 9], animal="subject-a", region={1: "CA1"}),
        made_up.inventory("b", [2], animal="subject-b", region="MEC"),
    ]
    inventories[0]["units"][0]["attributes"] = {"snr": 3, "sorter_label": "good"}
    inventories[1]["units"][0]["attributes"] = {"snr": 4.5}
    sessions = made_up.sessions_table(("a", None, "old"), ("b", "renamed", None))
    units = gather_units([pd.DataFrame(rows)], inventories, sessions, SETTINGS)
    assert units[["session", "unit"]].to_numpy().tolist() == [["a", 1], ["a", 7], ["b", 2]]
    assert units["animal"].tolist() == ["subject-a", "subject-a", "renamed"]
    assert units["group"].tolist() == ["old", "old", None]
    assert units["region"].tolist() == ["CA1", None, "MEC"]
    np.testing.assert_array_equal(units["attribute_snr"], [3, np.nan, 4.5])
    assert units["attribute_sorter_label"].tolist() == ["good", None, None]


def test_sessions_without_any_animal_are_one_animal(made_up):
    tables = [pd.DataFrame([made_up.unit_row(session, 1)]) for session in "ab"]
    inventories = [made_up.inventory("a", [1], animal=" "), {**made_up.inventory("b", [1]), "subject": None}]
    units = gather_units(tables, inventories, made_up.sessions_table(("a", None, None)), SETTINGS)
    assert units["animal"].tolist() == [UNNAMED_ANIMAL, UNNAMED_ANIMAL]


def test_a_selected_variable_must_pass_benjamini_hochberg(made_up):
    """By hand: of 4 p-values .01 .02 .03 .50 at rate .05 the largest k with p <= k/4 * .05 is 3."""
    p_values = [0.01, 0.02, 0.03, 0.50]
    rows = [made_up.unit_row("a", i, "position", p={"position": p}) for i, p in enumerate(p_values)]
    table = pd.DataFrame(rows)
    found = gather_units([table], [made_up.inventory("a", range(4), "x")], made_up.sessions_table(), SETTINGS)
    np.testing.assert_allclose(found["position_q"], [0.04, 0.04, 0.04, 0.5])
    assert found["encodes_position"].tolist() == [True, True, True, False]
    assert found["encoded"].tolist() == ["position"] * 3 + ["constant"]
    assert found["selected_model"].tolist() == ["position"] * 4
    strict = PopulationSettings(false_discovery_rate=0.03)
    found = gather_units([table], [made_up.inventory("a", range(4), "x")], made_up.sessions_table(), strict)
    assert not found["encodes_position"].any()


def test_a_significant_variable_must_be_selected(made_up):
    row = made_up.unit_row("a", 1, "speed", p={"position": 1e-4, "speed": 1e-4})
    found = gather_units(
        [pd.DataFrame([row])], [made_up.inventory("a", [1])], made_up.sessions_table(), SETTINGS
    )
    assert found["encoded"].tolist() == ["speed"]


def test_without_a_test_the_selection_stands(made_up):
    row = made_up.unit_row("a", 1, "position+speed")
    for missing in (row, {name: value for name, value in row.items() if not name.endswith("_p")}):
        table = pd.DataFrame([missing])
        found = gather_units([table], [made_up.inventory("a", [1])], made_up.sessions_table(), SETTINGS)
        assert found["encoded"].tolist() == ["position+speed"]
        assert found["encodes_head_direction"].tolist() == [False]


def test_units_that_were_not_fitted_encode_nothing_and_are_no_tests(made_up):
    rows = [
        made_up.unit_row("a", 1, "position", p={"position": 0.04}),
        made_up.unit_row("a", 2, "position", status="failed", p={"position": 0.9}),
        made_up.unit_row("a", 3, "", status="too_few_spikes"),
    ]
    found = gather_units(
        [pd.DataFrame(rows)], [made_up.inventory("a", [1, 2, 3])], made_up.sessions_table(), SETTINGS
    )
    assert found["encodes_position"].tolist() == [True, False, False]
    np.testing.assert_array_equal(found["position_q"], [0.04, np.nan, np.nan])
    assert found["encoded"].tolist() == ["position", None, None]


def test_the_shape_of_speed_tuning_follows_the_verdict(made_up):
    rows = [
        made_up.unit_row("a", 1, "speed", shape="falling", p={"speed": 0.001}),
        made_up.unit_row("a", 2, "speed", shape="rising", p={"speed": 0.4}),
    ]
    found = gather_units(
        [pd.DataFrame(rows)], [made_up.inventory("a", [1, 2])], made_up.sessions_table(), SETTINGS
    )
    assert found["speed_shape"].tolist() == ["falling", "not_tuned"]
    np.testing.assert_array_equal(found["speed_shape_probability"], [0.99, np.nan])


def test_a_variable_of_ones_own_is_judged_like_the_others(made_up):
    extra = {"encodes_wall_distance": True, "wall_distance_p": 0.5, "encodes_bait": True, "bait_p": 0.001}
    row = made_up.unit_row("a", 1, "position+wall_distance+bait", **extra)
    found = gather_units(
        [pd.DataFrame([row])], [made_up.inventory("a", [1])], made_up.sessions_table(), SETTINGS
    )
    assert variables_of(found) == ["position", "head_direction", "speed", "bait", "wall_distance"]
    assert found["encoded"].tolist() == ["position+bait"]


def test_the_order_of_inputs_does_not_matter(made_up):
    rng = np.random.default_rng(8)
    tables, inventories, sessions = made_up.drawn_study(rng)
    once = gather_units(tables, inventories, sessions, SETTINGS)
    shuffled = [table.sample(frac=1, random_state=1) for table in tables[::-1]]
    again = gather_units(shuffled, inventories[::-1], sessions[::-1], SETTINGS)
    pd.testing.assert_frame_equal(once, again)


def test_an_empty_shard_changes_nothing_not_even_a_type(made_up):
    tables, inventories, sessions = made_up.drawn_study(np.random.default_rng(8))
    once = gather_units(tables, inventories, sessions, SETTINGS)
    empty = pd.DataFrame({"session": pd.Series([], dtype=object), "unit": pd.Series([], dtype=object)})
    again = gather_units([empty, *tables, tables[0].iloc[:0]], inventories, sessions, SETTINGS)
    pd.testing.assert_frame_equal(once, again)


def test_a_column_that_is_empty_in_one_shard_keeps_its_type(made_up):
    one = pd.DataFrame([made_up.unit_row("a", 1, status_reason=None, selected_bits_per_spike=None)])
    two = pd.DataFrame([made_up.unit_row("a", 2)])
    for tables in ([one, two], [two, one]):
        units = gather_units(tables, [made_up.inventory("a", [1, 2])], made_up.sessions_table(), SETTINGS)
        assert units["selected_bits_per_spike"].dtype == float
        assert units["status_reason"].tolist() == [None, ""]


def test_no_unit_at_all_still_makes_a_table(made_up):
    units = gather_units([], [made_up.inventory("a", [])], made_up.sessions_table(("a", "x", "g")), SETTINGS)
    assert len(units) == 0
    assert variables_of(units) == ["position", "head_direction", "speed"]
    assert {"session", "animal", "group", "region", "unit", "status", "encoded"} <= set(units.columns)
    assert len(gather_scores([])) == 0
    assert "bits_per_spike" in gather_scores([])


def test_a_unit_that_is_there_twice_is_refused(made_up):
    table = pd.DataFrame([made_up.unit_row("a", 4)])
    with pytest.raises(InputError, match="session a, unit 4: the same row is there twice"):
        gather_units([table, table], [made_up.inventory("a", [4])], made_up.sessions_table(), SETTINGS)


def test_a_unit_that_the_recording_does_not_hold_is_refused(made_up):
    table = pd.DataFrame([made_up.unit_row("a", 4)])
    with pytest.raises(InputError, match="unit 4 was fitted but the session's inventory does not hold it"):
        gather_units([table], [made_up.inventory("a", [5])], made_up.sessions_table(), SETTINGS)
    with pytest.raises(InputError, match="session a"):
        gather_units([table], [], made_up.sessions_table(), SETTINGS)


def test_scores_are_sorted_by_unit_and_size_of_model():
    rows = [
        ("b", 1, "constant", 0),
        ("a", 2, "position+speed", 2),
        ("a", 2, "speed", 1),
        ("a", 2, "constant", 0),
    ]
    table = pd.DataFrame(rows, columns=["session", "unit", "model", "n_terms"]).assign(converged=True)
    scores = gather_scores([table.iloc[[0, 1]], table.iloc[[2, 3]]])
    assert scores["model"].tolist() == ["constant", "speed", "position+speed", "constant"]
    assert scores["converged"].dtype == bool
    with pytest.raises(InputError):
        gather_scores([table, table])
