"""The whole analysis of a unit: selection, tests, curves, shapes, slow against fast."""

import numpy as np
import pytest

from odograph.encoding.analyse import analyse_unit, prepare_session
from odograph.encoding.evaluate import fit_whole
from odograph.encoding.shapes import classify, curve_shape, largest_climb
from odograph.encoding.shared import workspace
from odograph.encoding.shifts import (
    null_model,
    plan_shifts,
    score_variance,
    shift_test,
    shifted_cell_sums,
    step_cells,
    transform_covariate,
)
from odograph.encoding.slow_fast import compare_halves, running_halves
from odograph.encoding.spikes import bin_spikes


@pytest.fixture(scope="module")
def mixed(design, simulate, settings):
    return analyse_unit(design, simulate("position+head_direction", 2), None, settings)


@pytest.mark.parametrize("kind", ["position", "head_direction", "speed"])
def test_a_unit_tuned_to_one_variable_is_said_to_encode_that_one(design, simulate, settings, kind):
    row = analyse_unit(design, simulate(kind, 1), None, settings).row
    assert row["status"] == "fitted"
    assert row["selected_model"] == kind
    assert row[f"{kind}_p"] == pytest.approx(1 / (1 + row[f"{kind}_shifts"]))


def test_a_mixture_is_found_and_its_curves_have_the_true_shape(table, mixed):
    assert mixed.row["selected_model"] == "position+head_direction"
    assert mixed.row["encodes_position"] and mixed.row["encodes_head_direction"]
    assert not mixed.row["encodes_speed"] and mixed.row["speed_shape"] == "not_tuned"
    curve, angle = mixed.curves["head_direction_rate_hz"], mixed.curves["head_direction_rad"]
    assert abs(np.angle(np.exp(1j * (angle[np.argmax(curve)] - 1)))) < 0.4
    truth = np.cos(angle - 1)
    assert np.corrcoef(np.log(curve), truth)[0, 1] > 0.97
    rate = mixed.curves["position_rate_hz"]
    row, column = np.unravel_index(np.nanargmax(rate), rate.shape)
    assert abs(mixed.curves["position_x_m"][column] - 0.4) < 0.08
    assert abs(mixed.curves["position_y_m"][row] - 0.6) < 0.08


def test_gains_are_told_for_the_terms_a_unit_encodes_and_no_others(mixed, design, simulate, settings):
    assert mixed.row["speed_gain_status"] == "fitted"
    for term in ("position", "head_direction"):
        assert abs(mixed.row[f"{term}_speed_gain"]) < 4 * mixed.row[f"{term}_speed_gain_se"]
    row = analyse_unit(design, simulate("head_direction", 1), None, settings).row
    assert np.isfinite(row["head_direction_speed_gain"]) and np.isnan(row["position_speed_gain"])
    flat = analyse_unit(design, simulate("flat", 3), None, settings).row
    assert flat["speed_gain_status"] == "not_fitted"


def test_bands_enclose_their_curves(mixed):
    for name in ("position", "head_direction", "speed"):
        low, rate, high = (mixed.curves[f"{name}_{part}_hz"] for part in ("rate_low", "rate", "rate_high"))
        seen = np.isfinite(rate)
        assert np.all(low[seen] <= rate[seen]) and np.all(rate[seen] <= high[seen])


def test_curves_average_to_the_mean_rate_over_occupancy(design, mixed):
    for term in design.terms:
        seconds = np.bincount(term.cell, minlength=term.n_cells) * design.bin_s
        rate = np.nan_to_num(mixed.curves[f"{term.name}_rate_hz"].ravel())
        assert seconds @ rate / seconds.sum() == pytest.approx(mixed.row["mean_rate_hz"], rel=1e-9)


def test_an_untuned_unit_encodes_nothing(design, simulate, settings):
    row = analyse_unit(design, simulate("flat", 3), None, settings).row
    assert row["selected_model"] == "constant"
    assert not any(row[f"encodes_{name}"] for name in ("position", "head_direction", "speed"))


def test_too_few_spikes_is_said_and_not_fitted(design, simulate, settings):
    result = analyse_unit(design, simulate("flat")[:40], None, settings)
    assert result.row["status"] == "too_few_spikes" and "40 spikes" in result.row["status_reason"]
    assert result.scores == [] and set(result.curves) == {"spike_bins"}
    assert not result.row["encodes_position"]


def test_spikes_outside_valid_time_do_not_count(table, settings, simulate):
    valid = table["valid"].copy()
    valid[:5000] = False
    design = prepare_session(table | {"valid": valid}, settings)
    spikes = simulate("flat")
    row = analyse_unit(design, np.append(spikes, [-5.0, 1e6]), None, settings).row
    assert row["n_spikes"] == np.sum(spikes > 100.0)


def test_a_unit_observed_for_part_of_the_session_uses_that_part(design, simulate, settings):
    spikes = simulate("position", 4)
    result = analyse_unit(design, spikes, np.array([[0.0, 300.0], [400.0, 720.0]]), settings)
    assert result.row["valid_s"] == pytest.approx(620.0)
    assert result.row["n_spikes"] == np.sum((spikes < 300) | (spikes > 400))
    whole = analyse_unit(design, spikes, np.array([[-10.0, 2000.0]]), settings)
    assert whole.row["n_spikes"] == len(spikes)


def test_a_unit_observed_too_briefly_is_shown_as_failed(design, simulate, settings):
    row = analyse_unit(design, simulate("position", 4), np.array([[100.0, 110.0]]), settings).row
    assert row["status"] == "failed"
    assert row["status_reason"].startswith("where the unit was observed, 500 valid bins; expected at least")


def test_results_do_not_depend_on_other_units_or_their_order(table, simulate, settings):
    units = [simulate(kind, 7) for kind in ("flat", "position", "speed")]
    one, other = prepare_session(table, settings), prepare_session(table, settings)
    forward = [analyse_unit(one, spikes, None, settings) for spikes in units]
    backward = [analyse_unit(other, spikes, None, settings) for spikes in units[::-1]][::-1]
    for a, b in zip(forward, backward, strict=True):
        assert repr(a.row) == repr(b.row) and repr(a.scores) == repr(b.scores)
        for name in a.curves:
            np.testing.assert_array_equal(a.curves[name], b.curves[name])


def test_unsorted_spike_times_change_nothing(design, simulate, settings):
    spikes = simulate("speed", 2)
    shuffled = np.random.default_rng(0).permutation(spikes)
    assert repr(analyse_unit(design, spikes, None, settings).row) == repr(
        analyse_unit(design, shuffled, None, settings).row
    )


def plan_of(design, **options):
    options = {"step_s": 0.1, "minimum_s": 20.0, "draws": 99, "seed": 2} | options
    return plan_shifts(design.n_bins, design.bin_s, **options)


def test_shifts_are_distinct_admissible_and_seeded(design):
    plan = plan_of(design)
    assert plan.bins_per_step == 5 and plan.n_steps == design.n_bins // 5
    np.testing.assert_array_equal(plan.shifts, np.arange(200, plan.n_steps - 199))
    assert len(np.unique(plan.drawn)) == 99 and set(plan.drawn) <= set(plan.shifts)
    np.testing.assert_array_equal(plan.drawn, plan_of(design).drawn)
    assert not np.array_equal(plan.drawn, plan_of(design, seed=3).drawn)
    assert len(plan_of(design, minimum_s=400.0).shifts) == 0


def test_shifted_sums_are_sums_over_the_rolled_covariate():
    rng = np.random.default_rng(3)
    cell, residual, out = rng.integers(0, 7, 200).astype(np.int32), rng.normal(size=200), np.empty(7)
    for shift in (0, 1, 63, 199):
        shifted_cell_sums(cell, residual, shift, out)
        np.testing.assert_allclose(out, np.bincount(np.roll(cell, -shift), weights=residual, minlength=7))


def p_of(design, counts, term, plan, *, by_fft=True):
    """(p, shifts) of a term for counts per bin, given drift alone."""
    unit = bin_spikes(design, np.repeat((design.edges_s[:-1] + design.edges_s[1:]) / 2, counts.astype(int)))
    space = workspace(design, ())
    null = null_model(space, fit_whole(space, design, unit), design, unit, plan)
    spectrum = transform_covariate(term, plan) if by_fft else None
    return shift_test(term, null, plan, spectrum, step_cells(space, plan))


def test_all_shifts_by_fft_and_one_by_one_agree(design):
    """The same shifts tested by cross-correlation and by rolling the covariate."""
    term, plan = design.terms[1], plan_of(design, draws=10**6)
    for seed in range(3):
        rate = 0.06 * (1 + 0.1 * np.cos(term.cell / 60 * 2 * np.pi))
        counts = np.random.default_rng(seed).poisson(rate)
        by_fft = p_of(design, counts, term, plan)
        assert by_fft == pytest.approx(p_of(design, counts, term, plan, by_fft=False))
        assert by_fft[1] == len(plan.shifts)


def test_p_of_exchangeable_counts_is_uniform(design):
    """Davison & Hinkley 1997: the rank of an exchangeable statistic; 200 draws, binomial bounds at 99.9 %."""
    rng, plan = np.random.default_rng(8), plan_of(design)
    p = np.array(
        [p_of(design, rng.poisson(0.06, design.n_bins), design.terms[1], plan)[0] for _ in range(200)]
    )
    assert 2 <= np.sum(p <= 0.05) <= 23
    assert 75 <= np.sum(p <= 0.5) <= 125


def test_variance_of_the_score_is_that_of_the_dense_regression(design):
    """V is the residual sum of squares of B regressed on X with weights W (and a ridge): dense arithmetic."""
    term, plan = design.terms[2], plan_of(design)
    unit = bin_spikes(design, design.edges_s[100:30000:12] + 0.003)
    space = workspace(design, ("head_direction",))
    fit = fit_whole(space, design, unit)
    null = null_model(space, fit, design, unit, plan)
    cells = step_cells(space, plan)
    X = np.hstack(
        [np.ones((plan.n_steps, 1))]
        + [(t.basis.dense() @ t.coordinates.matrix())[c] for t, c in zip(space.terms, cells, strict=True)]
    )
    for shift in (0, 517):
        B = (term.basis.dense() @ term.coordinates.matrix())[np.roll(plan.cells(term), -shift)]
        W = null.expected[:, None]
        expected = B.T @ (W * B) - (B.T @ (W * X)) @ null.inverse @ (X.T @ (W * B))
        found = score_variance(term, null, plan, cells, shift)
        np.testing.assert_allclose(found, expected, atol=1e-8 * np.abs(expected).max())


def test_no_admissible_shift_gives_no_p(design):
    p, n = p_of(design, np.ones(design.n_bins), design.terms[2], plan_of(design, minimum_s=400.0))
    assert np.isnan(p) and n == 0


def test_shapes_of_known_curves():
    x = np.linspace(0, 1, 30)
    curves = np.array(
        [x, -x, np.sin(np.pi * x), -np.sin(np.pi * x), np.minimum(x, 0.5), x + 0.05 * np.sin(20 * x)]
    )
    np.testing.assert_array_equal(classify(curves), [0, 1, 2, 2, 0, 0])
    np.testing.assert_allclose(largest_climb(curves[:3]), [1, 0, np.sin(np.pi * x).max()], atol=1e-12)


def test_a_certain_curve_has_a_certain_shape_and_a_vague_one_has_none():
    x = np.linspace(0, 1, 20)
    certain = curve_shape(2 * x, 1e-6 * np.eye(20), seed=1)
    assert certain.name == "rising" and certain.probability == 1.0
    assert curve_shape(0.01 * x, np.exp(-((x[:, None] - x) ** 2) / 0.5), seed=1).name == "undecided"


def test_slow_and_fast_halves_part_running_time_at_its_median():
    speed = np.array([0.0, 1, 3, 4, 5, 6, 7, 8])
    slow, fast, cut = running_halves(speed, 2.0)
    assert cut == 5.5
    np.testing.assert_array_equal(np.flatnonzero(slow), [2, 3, 4])
    np.testing.assert_array_equal(np.flatnonzero(fast), [5, 6, 7])


def tuned_counts(cell, fast, gain_slow, gain_fast, seed):
    tuning = np.cos(2 * np.pi * cell / 20)
    rate = 5 * np.exp(np.where(fast, gain_fast, gain_slow) * tuning)
    return np.random.default_rng(seed).poisson(rate * 0.02).astype(float)


def test_sharper_tuning_at_speed_gives_more_information_at_speed():
    rng = np.random.default_rng(5)
    cell, fast = rng.integers(0, 20, 60_000), rng.random(60_000) > 0.5
    counts = tuned_counts(cell, fast, 0.6, 1.5, 6)
    found = compare_halves(cell, counts, ~fast, fast, 0.02, repeats=10, seed=1)
    assert found.fast_bits_per_spike > 2 * found.slow_bits_per_spike
    # Exact: information of exp(k cos) is (k A(k) - ln I0(k)) / ln 2, here for k 1.5: 0.581 bits.
    assert found.fast_bits_per_spike == pytest.approx(0.5806, abs=0.05)


def test_equal_tuning_gives_equal_information_though_occupancy_and_rate_differ():
    rng = np.random.default_rng(7)
    cell = rng.integers(0, 20, 80_000)
    fast = rng.random(80_000) < np.where(cell < 10, 0.8, 0.3)
    counts = tuned_counts(cell, fast, 1.0, 1.0, 8)
    found = compare_halves(cell, counts, ~fast, fast, 0.02, repeats=20, seed=1)
    assert found.fast_bits_per_spike == pytest.approx(found.slow_bits_per_spike, abs=0.06)


def test_too_few_spikes_make_no_comparison():
    cell = np.arange(1000) % 5
    found = compare_halves(cell, np.zeros(1000), cell < 3, cell >= 2, 0.02, repeats=3, seed=0)
    assert np.isnan(found.slow_bits_per_spike)
