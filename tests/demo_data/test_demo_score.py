"""The scores against the truth: what counts as found, as false, and when the limits hold."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from score_against_truth import gain_errors, join_truth, main, mistakes, score, score_clocks, true_gain
from simulate_tuning import sharpening
from simulate_units import unit_truths
from study_plan import STUDY

INFORMATION = [
    f"{name}_information_{pace}_bits_per_spike"
    for name in ("position", "head_direction")
    for pace in ("slow", "fast")
]


@pytest.fixture
def truth() -> pd.DataFrame:
    return pd.DataFrame([truth.row() for plan in STUDY for truth in unit_truths(plan)])


@pytest.fixture
def perfect(truth) -> pd.DataFrame:
    """The table of units of a run that found everything and nothing else."""
    units = truth[["session", "unit"]].copy()
    units["n_spikes"] = 1000
    for name in ("position", "head_direction", "speed"):
        units[f"encodes_{name}"] = truth[name].astype(bool)
    units["speed_shape"] = truth["speed_shape"].where(truth["speed_shape"] != "", "not_tuned")
    sharper = truth["sharpens"].astype(float)
    for column in INFORMATION:
        units[column] = 1.0 + (sharper if "fast" in column else 0.5 * (1 - sharper))
    for name in ("position", "head_direction"):
        units[f"{name}_speed_gain"] = (0.4 * sharper).where(units[f"encodes_{name}"])
        units[f"{name}_sharpens"] = truth["sharpens"].astype(bool) & units[f"encodes_{name}"]
        units[f"{name}_blunts"] = False
    return units


@pytest.fixture
def run(tmp_path, truth):
    """Write a table of units beside the truth, score it by the command; its exit status."""

    def score_table(units: pd.DataFrame, *options: str) -> int:
        folder = tmp_path / "results" / "population"
        folder.mkdir(parents=True, exist_ok=True)
        units.to_parquet(folder / "units.parquet")
        truth.to_csv(tmp_path / "truth.tsv", sep="\t", index=False)
        return main([str(tmp_path / "results"), "--truth", str(tmp_path / "truth.tsv"), *options])

    return score_table


def test_a_perfect_run_holds(run, perfect, capsys):
    assert run(perfect, "--mistakes") == 0
    printed = capsys.readouterr().out
    assert "DOES NOT HOLD" not in printed
    assert "no mistakes" in printed


def test_counts_are_variables_of_units(perfect, truth):
    scores = {share.what.strip(): share for share in score(join_truth(perfect, truth, 300))}
    tuned = truth[["position", "head_direction", "speed"]].sum().sum()
    assert scores["encoded variables found"].k == scores["encoded variables found"].n == tuned
    assert scores["variables found that are not encoded"].k == 0
    assert scores["variables found that are not encoded"].n == 3 * len(truth) - tuned
    assert scores["speed shape named right"].share == 1
    sharpening = scores["more position information when fast, sharpening"]
    assert sharpening.k == sharpening.n == (truth["position"] & truth["sharpens"]).sum() > 0
    assert scores["more position information when fast, others"].k == 0
    gains = scores["position gain says sharpening, where it is"]
    assert gains.k == gains.n == sharpening.n
    others = scores["position gain says change, where there is none"]
    assert others.k == 0 and others.n == (truth["position"] & ~truth["sharpens"].astype(bool)).sum()


def test_gains_that_are_missed_or_false_are_told(perfect, truth):
    sharpens = np.flatnonzero(truth["head_direction"] & truth["sharpens"])
    steady = np.flatnonzero(truth["head_direction"] & ~truth["sharpens"].astype(bool))
    perfect.loc[sharpens[0], "head_direction_sharpens"] = False  # not called
    perfect.loc[sharpens[1], "head_direction_speed_gain"] = np.nan  # its fit failed
    perfect.loc[sharpens[1], "head_direction_sharpens"] = False
    perfect.loc[steady[0], "head_direction_sharpens"] = True
    perfect.loc[steady[1], "head_direction_blunts"] = True
    perfect.loc[steady[2], "head_direction_speed_gain"] = np.nan  # nothing to judge
    joined = join_truth(perfect, truth, 300)
    scores = {share.what.strip(): share for share in score(joined)}
    right = scores["head direction gain says sharpening, where it is"]
    assert (right.k, right.n) == (len(sharpens) - 2, len(sharpens))
    wrong = scores["head direction gain says change, where there is none"]
    assert (wrong.k, wrong.n) == (2, len(steady) - 1)
    told = [line.split()[:3] for line in mistakes(joined)]
    assert (
        sorted(told) == [["false", "head_direction", "gain"]] * 2 + [["missed", "head_direction", "gain"]] * 2
    )


@pytest.mark.parametrize("speed_cm_s", [np.linspace(0, 60, 5001), np.random.default_rng(3).gamma(2, 6, 5000)])
def test_true_gain_is_the_closest_line_over_z(speed_cm_s):
    """numpy's least squares: the power as a (1 + g z), z standardised log(1 + v / 5 cm/s)."""
    z = np.log1p(speed_cm_s / 5)
    z = (z - z.mean()) / z.std()
    slope, level = np.polyfit(z, sharpening(speed_cm_s), 1)
    assert true_gain(speed_cm_s) == pytest.approx(slope / level)
    assert 0.2 < true_gain(speed_cm_s) < 0.6


def test_bias_of_gains_by_hand(tmp_path, perfect, truth):
    """Gains of units that sharpen 0.05 too high, of the others 0.02 too low, in the sessions with results."""
    speed_cm_s = np.random.default_rng(1).gamma(2, 6, 3000)
    table = pd.DataFrame({"speed_cm_s": speed_cm_s, "valid": True})
    # What is not valid does not count.
    table = pd.concat([table, table.assign(speed_cm_s=500.0, valid=False)], ignore_index=True)
    sessions = sorted(truth["session"].unique())
    for session in sessions[1:]:
        folder = tmp_path / "sessions" / session / "behaviour"
        folder.mkdir(parents=True)
        table.to_parquet(folder / "behaviour.parquet")
    sharpens = truth["sharpens"].astype(bool)
    off = np.where(sharpens, true_gain(speed_cm_s) + 0.05, -0.02)
    perfect["position_speed_gain"] = pd.Series(off).where(truth["position"] == 1)
    errors = {error.what: error for error in gain_errors(join_truth(perfect, truth, 300), tmp_path)}
    biased = errors["position gain less the true one, sharpening"]
    there = truth["session"] != sessions[0]
    assert biased.n == (truth["position"] & sharpens & there).sum() > 1
    assert biased.mean == pytest.approx(0.05) and biased.spread == pytest.approx(0, abs=1e-12)
    others = errors["position gain less the true one, others"]
    assert others.mean == pytest.approx(-0.02) and others.n == (truth["position"] & ~sharpens).sum()
    assert "+0.050 +/- 0.000" in biased.line()
    nothing = gain_errors(join_truth(perfect, truth, 300), tmp_path / "nowhere")
    assert nothing[0].n == 0 and nothing[0].line().endswith("none to judge")


def test_interval_is_wilsons(perfect, truth):
    """81 of 263: 0.2553 to 0.3662 (Newcombe 1998, Statistics in Medicine 17:857, Table I)."""
    joined = join_truth(perfect, truth, 300)
    tuned = int(truth["position"].sum())
    share = next(
        share for share in score(joined) if share.what.strip() == "position found where it is encoded"
    )
    assert (share.k, share.n) == (tuned, tuned)
    low, high = type(share)("", 81, 263).interval
    assert (low, high) == (pytest.approx(0.2553, abs=5.1e-5), pytest.approx(0.3662, abs=5.1e-5))


def test_limits_break_on_either_side(run, perfect, truth, capsys):
    missed = perfect.copy()
    missed.loc[truth["position"] == 1, "encodes_position"] = False
    assert run(missed) == 1
    assert "DOES NOT HOLD" in capsys.readouterr().out
    false = perfect.copy()
    false["encodes_speed"] = True
    assert run(false) == 1


def test_limits_are_ninety_and_five_percent(truth, perfect):
    joined = join_truth(perfect, truth, 300)
    tuned = [
        (i, v) for v in ("position", "head_direction", "speed") for i in np.flatnonzero(joined[f"true_{v}"])
    ]
    allowed = int(0.10 * len(tuned))
    for count, holds in ((allowed, True), (allowed + 1, False)):
        worse = joined.copy()
        for index, name in tuned[:count]:
            worse.loc[index, f"encodes_{name}"] = False
        assert score(worse)[0].holds is holds
        assert len(mistakes(worse)) == count


def test_units_with_few_spikes_are_not_judged(truth, perfect):
    perfect.loc[:9, "n_spikes"] = 299
    perfect.loc[10, "n_spikes"] = 300
    assert len(join_truth(perfect, truth, 300)) == len(truth) - 10


def test_failed_units_count_as_missed_and_unknown_ones_are_left_aside(truth, perfect):
    perfect["encodes_position"] = perfect["encodes_position"].astype(object)
    perfect.loc[0, "encodes_position"] = None
    unknown = perfect.iloc[[0]].assign(unit=9999)
    joined = join_truth(pd.concat([perfect, unknown]), truth, 300)
    assert len(joined) == len(truth)
    assert truth.loc[0, "position"] == 1
    assert len(mistakes(joined)) == 1 and mistakes(joined)[0].startswith("missed")


def test_order_of_rows_does_not_matter(truth, perfect):
    shuffled = perfect.sample(frac=1, random_state=1)
    assert join_truth(shuffled, truth, 300).equals(join_truth(perfect, truth, 300))


def test_json_says_the_same(run, perfect, capsys):
    assert run(perfect, "--json") == 0
    document = json.loads(capsys.readouterr().out)
    assert document["scores"][0]["holds"] is True
    assert document["mistakes"] == []
    assert [entry["n"] for entry in document["gain_errors"][0::2]] == [0, 0]
    assert document["gain_errors"][1]["mean"] == 0 and document["gain_errors"][1]["n"] > 0


def test_what_is_missing_is_said(run, perfect, tmp_path, capsys):
    assert main([str(tmp_path / "nowhere")]) == 66
    assert "run the workflow first" in capsys.readouterr().err
    assert run(perfect.drop(columns="encodes_speed")) == 66
    assert "lacks the columns encodes_speed" in capsys.readouterr().err
    assert run(perfect.assign(session="other_" + perfect["session"])) == 66
    assert "were the demo recordings run" in capsys.readouterr().err
    assert run(pd.concat([perfect, perfect.iloc[[3]]])) == 66
    assert "more than once" in capsys.readouterr().err
    broken = tmp_path / "results" / "population" / "units.parquet"
    broken.write_bytes(b"not a table")
    assert main([str(tmp_path / "results"), "--truth", str(tmp_path / "truth.tsv")]) == 66
    assert "cannot be read" in capsys.readouterr().err


def test_clocks_are_scored_by_verdict_and_drift(tmp_path):
    write_clocks = "session\tcamera_ahead_s\tdrift_ppm\tclock_jump_s\n"
    found = {
        "sound": (20.05, "warn"),
        "off": (21.0, "pass"),
        "leaps": (None, "fail"),
        "passed": (5.0, "pass"),
    }
    for session, (drift_ppm, verdict) in found.items():
        jump = 1.5 if session in ("leaps", "passed") else 0.0
        write_clocks += f"{session}\t10.0\t20.0\t{jump}\n"
        folder = tmp_path / "results" / "sessions" / session / "sync"
        folder.mkdir(parents=True)
        (folder / "clock.json").write_text(json.dumps({"drift_ppm": drift_ppm, "verdict": verdict}))
    write_clocks += "never_run\t10.0\t20.0\t0.0\n"
    clocks = tmp_path / "clocks.tsv"
    clocks.write_text(write_clocks)
    verdicts, drifts = score_clocks(tmp_path / "results", clocks)
    assert (verdicts.k, verdicts.n) == (3, 4)
    assert (drifts.k, drifts.n) == (1, 2)
