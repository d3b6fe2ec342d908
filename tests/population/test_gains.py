"""Speed gains of all units: verdicts by scipy's adjustment, rows by hand."""

import numpy as np
import pandas as pd
import pytest
from scipy.stats import false_discovery_control

from odograph.population.adaptivity import speed_table
from odograph.population.composition import composition
from odograph.population.gains import gain_variables, gained_units
from odograph.population.gather import gather_units
from odograph.population.sessions import session_table
from odograph.population.summarise import summary, summary_lines
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
    inventories = [made_up.inventory("a", range(5), "one"), made_up.inventory("b", range(3), "two")]
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
    assert rows.loc["median gain", ["k", "n", "animals", "value"]].tolist() == [4, 5, 1, 0.1]
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


def test_the_summary_says_how_many_sharpen(study, made_up):
    units, inventories = study
    documents = {"intake": inventories, "sync": [], "behaviour": []}
    sessions = session_table(documents, made_up.sessions_table(), units)
    found = summary(units, composition(units, SETTINGS), speed_table(units, SETTINGS), sessions)
    assert found["speed_gains"]["position"]["median"] == pytest.approx(0.1)
    assert found["speed_gains_failed"] == 1
    lines = summary_lines(found)
    assert len(lines) == 10
    expected = "Tuning at higher speed: position 2 sharpen, 1 blunt of 5 (median gain +0.10); 1 fit failed."
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
