"""Verdicts of the sessions and the ten lines."""

import json

import numpy as np
import pandas as pd
import pytest

from odograph.population.adaptivity import speed_table
from odograph.population.composition import composition
from odograph.population.gather import gather_units
from odograph.population.sessions import session_table
from odograph.population.summarise import summary, summary_lines
from odograph.settings.population import PopulationSettings

SETTINGS = PopulationSettings(bootstrap_draws=200)


def document(session, verdict="pass", *findings):
    return {
        "session": session,
        "verdict": verdict,
        "findings": [{"level": level, "place": None, "found": found} for level, found in findings],
    }


def summarised(tables, inventories, sessions, **stages):
    units = gather_units(tables, inventories, sessions, SETTINGS)
    verdicts = session_table({"intake": inventories, **stages}, sessions, units)
    return summary(units, composition(units, SETTINGS), speed_table(units, SETTINGS), verdicts)


def test_the_first_stage_that_failed_gives_the_reason(made_up):
    units = gather_units([], [], made_up.sessions_table(), SETTINGS)
    stages = {
        "behaviour": [document("a", "fail", ("fail", "left out because sync failed")), document("b", "warn")],
        "sync": [
            document("a", "fail", ("warn", "3 dropped frames"), ("fail", "the clock jumps at 431 s")),
            document("b", "warn", ("note", "no pulses"), ("warn", "residuals of 4 ms")),
        ],
        "intake": [document("a", "warn", ("warn", "no region")), document("b"), document("c")],
    }
    table = session_table(stages, made_up.sessions_table(("d", None, None)), units)
    assert table["session"].tolist() == ["a", "b", "c", "d"]
    assert table["verdict"].tolist() == ["fail", "warn", "pass", "fail"]
    assert table["stage"].tolist()[:2] == ["sync", "sync"]
    assert table["reason"].tolist()[:2] == ["the clock jumps at 431 s", "residuals of 4 ms"]
    assert table["stage"].isna().tolist()[2:] == [True, True]
    assert table["reason"][3] == "nothing was computed for this session"


def test_units_are_counted_at_every_stage(made_up):
    rows = [made_up.unit_row("a", 1, "position"), made_up.unit_row("a", 2, "", status="failed")]
    document = made_up.inventory("a", [1, 2, 3], "x")
    document["units"][2]["kept"] = False
    units = gather_units([pd.DataFrame(rows)], [document], made_up.sessions_table(), SETTINGS)
    row = session_table({"intake": [document]}, made_up.sessions_table(), units).iloc[0]
    assert row[["units_recorded", "units_kept", "units_fitted"]].tolist() == [3, 2, 1]


@pytest.fixture
def lines_of_a_small_study(made_up):
    rows = [
        made_up.unit_row(session, unit, model, **values)
        for session in "ab"
        for unit, (model, values) in enumerate(
            [
                ("position", {"selected_bits_per_spike": 0.5}),
                ("position+speed", {"selected_bits_per_spike": 1.0}),
                ("constant", {}),
                ("", {"status": "too_few_spikes"}),
            ]
        )
    ]
    inventories = [made_up.inventory(session, range(5), session) for session in "abc"]
    inventories[0]["units"][4]["kept"] = False
    sync = [document("a"), document("b", "warn", ("warn", "x")), document("c", "fail", ("fail", "no pulses"))]
    found = summarised([pd.DataFrame(rows)], inventories, made_up.sessions_table(), sync=sync)
    return summary_lines(found)


def test_the_lines_say_what_was_counted(lines_of_a_small_study):
    lines = lines_of_a_small_study
    assert lines[0] == "Sessions: 2 of 3 used, from 2 animals; 1 with a warning."
    assert lines[1] == "Left out: c (sync: no pulses)."
    assert lines[2] == ("Units: 6 of 8 fitted; 2 with too few spikes, 1 more kept out by the unit filter.")
    assert lines[3].startswith("Position: 4 of 6 units (67 %), 95 % interval ")
    assert lines[4].startswith("Head direction: 0 of 6 units (0 %), 95 % interval 0 to ")
    assert lines[5].startswith("Speed: 2 of 6 units (33 %), 95 % interval ")
    assert lines[6].startswith("Two or more of these: 2 of 6 units (33 %)") and lines[6].endswith(
        "none of them: 2."
    )
    assert lines[7] == (
        "Speed tuning: of 2 units that encode speed 2 rising, 0 falling, 0 non-monotonic, 0 undecided."
    )
    assert "position not compared" in lines[8]
    assert lines[9] == (
        "Held-out gain of the selected models: median 0.75 bits per spike (n 4). "
        "Intervals are over 2 animals, likely too narrow with so few."
    )


def test_change_of_information_is_told_with_n_and_interval(made_up):
    change = {
        "position_information_slow_bits_per_spike": 1.0,
        "position_information_fast_bits_per_spike": 1.25,
    }
    tables = [pd.DataFrame([made_up.unit_row(s, u, "position", **change) for u in range(3)]) for s in "ab"]
    inventories = [made_up.inventory(s, range(3), s) for s in "ab"]
    lines = summary_lines(summarised(tables, inventories, made_up.sessions_table()))
    assert lines[8] == (
        "Fast minus slow running, bits per spike (median): position +0.25 (n 6, +0.25 to +0.25); "
        "head direction not compared."
    )


def test_always_ten_short_lines_and_plain_json(made_up):
    tables, inventories, sessions = made_up.drawn_study(np.random.default_rng(1))
    long_reason = "the camera's clock and the recording's clock disagree " * 5
    many = [document(f"bad{i}", "fail", ("fail", long_reason)) for i in range(12)]
    one_term = pd.DataFrame(
        [{k: v for k, v in made_up.unit_row("day0", 1).items() if "speed" not in k and "head" not in k}]
    )
    five_terms = [table.assign(encodes_bait=False, encodes_phase=True) for table in tables]
    studies = [
        summarised(tables, inventories, sessions),
        summarised(tables, inventories, sessions, sync=many),
        summarised([], inventories, sessions, sync=many[:1]),
        summarised([], [], made_up.sessions_table()),
        summarised([one_term], inventories, sessions),
        summarised(five_terms, inventories, sessions),
    ]
    for found in studies:
        lines = summary_lines(found)
        assert len(lines) == 10
        assert all(0 < len(line) <= 160 and "\n" not in line and "nan" not in line.lower() for line in lines)
        # Written with sorted keys and read back, the document gives the same lines.
        assert summary_lines(json.loads(json.dumps(found, allow_nan=False, sort_keys=True))) == lines
    assert "bad0 (sync: the camera's clock" in summary_lines(studies[1])[1]
    assert summary_lines(studies[1])[1].endswith("and 9 more.")


def test_one_animal_has_no_interval(made_up):
    table = pd.DataFrame([made_up.unit_row("a", u, m) for u, m in enumerate(["position", "constant"])])
    lines = summary_lines(summarised([table], [made_up.inventory("a", [0, 1])], made_up.sessions_table()))
    assert lines[0] == (
        "Sessions: 1 of 1 used, from 1 animal (sessions without an animal's name count as one animal)."
    )
    assert lines[3] == "Position: 1 of 2 units (50 %)."
    assert lines[9].endswith("No interval over animals: 1 animal with fitted units.")


def test_the_order_of_inputs_does_not_matter(made_up):
    tables, inventories, sessions = made_up.drawn_study(np.random.default_rng(1))
    sync = [document(entry["session"]) for entry in inventories]
    once = summarised(tables, inventories, sessions, sync=sync)
    assert summarised(tables[::-1], inventories[::-1], sessions[::-1], sync=sync[::-1]) == once
