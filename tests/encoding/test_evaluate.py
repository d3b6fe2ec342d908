"""Held-out evaluation and selection."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.special import xlogy

from odograph.encoding import evaluate as module
from odograph.encoding.design import prepare_session
from odograph.encoding.evaluate import Score, evaluate, fold_spikes
from odograph.encoding.select import best_score, paired_shortfall, select_model
from odograph.encoding.shared import workspace
from odograph.encoding.spikes import bin_spikes
from odograph.settings.encoding import EncodingSettings


def score(model, gains, spikes=1000):
    gains = np.asarray(gains, dtype=float)
    bits = gains.sum() / (spikes * np.log(2))
    return Score(tuple(model), gains, spikes, bits, 0.0, 0.0, True, None, None)


def test_bits_per_spike_of_a_unit_that_fires_in_part_of_the_arena(table):
    # Exact: log2(1 / f) for a rate confined to a fraction f of the time (Skaggs et al. 1993).
    state = (table["x_m"] > 0.6).astype(float)
    settings = EncodingSettings(
        terms=[{"name": "state", "kind": "category", "columns": ["state"]}], drift=False
    )
    design = prepare_session(table | {"state": state}, settings)
    inside = np.flatnonzero(state == 1)
    bins = np.random.default_rng(1).choice(inside, 3000, replace=True)
    unit = bin_spikes(design, table["time_s"][np.sort(bins)])
    found = evaluate(workspace(design, ("state",)), ("state",), design, unit, fold_spikes(design, unit))
    share = inside.size / design.n_bins
    assert found.bits_per_spike == pytest.approx(np.log2(1 / share), abs=0.02)


def test_deviance_explained_is_one_minus_the_deviance_ratio(design, simulate):
    unit = bin_spikes(design, simulate("head_direction"))
    tables = fold_spikes(design, unit)
    found = evaluate(workspace(design, ("head_direction",)), ("head_direction",), design, unit, tables)
    fold_of_bin = design.folds.group % design.folds.n_folds
    constant = 0.0
    for fold in range(design.folds.n_folds):
        mu = tables.n_training[fold] / tables.training_s[fold] * design.bin_s
        y = unit.counts[fold_of_bin == fold]
        constant += 2 * np.sum(xlogy(y, y / mu) - (y - mu))
    assert found.deviance_explained == pytest.approx(2 * found.fold_gain.sum() / constant, rel=1e-9)


def test_scores_are_the_likelihood_of_held_out_bins(design, simulate, monkeypatch):
    """One fold's gain, recomputed bin by bin from that fold's own coefficients."""
    unit, model = bin_spikes(design, simulate("head_direction+speed")), ("head_direction", "speed")
    space, fits = workspace(design, model), []
    original = module.fit_model

    def keep(*args, **kwargs):
        fits.append(original(*args, **kwargs))
        return fits[-1]

    monkeypatch.setattr(module, "fit_model", keep)
    tables = fold_spikes(design, unit)
    found = evaluate(space, model, design, unit, tables)
    fold, coefficients = 3, fits[1 + 3].coefficients
    eta = np.full(design.n_bins, coefficients[0])
    for term, block in zip(space.terms, space.layout.slices, strict=True):
        eta += ((term.basis.dense() @ term.coordinates.matrix()) @ coefficients[block])[term.cell]
    out = design.folds.group % design.folds.n_folds == fold
    rate = tables.n_training[fold] / tables.training_s[fold]
    y, mu, mu0 = unit.counts[out], np.exp(eta[out]) * design.bin_s, rate * design.bin_s
    gain = np.sum(y * np.log(mu) - mu) - np.sum(y * np.log(mu0) - mu0)
    assert found.fold_gain[fold] == pytest.approx(gain, rel=1e-8)


def test_held_out_spikes_do_not_reach_the_fit_that_is_scored_on_them(design, simulate, monkeypatch):
    """A fold's fit stays where it was when its held-out spikes are all thrown into one bin."""
    model, fold = ("head_direction",), 4
    unit = bin_spikes(design, simulate("head_direction"))
    out = design.folds.group[unit.bins] % design.folds.n_folds == fold
    guard = design.folds.group[unit.bins] // design.folds.n_folds == fold + 1
    moved = unit.bins.copy()
    moved[out] = np.flatnonzero(design.folds.group % design.folds.n_folds == fold)[0]
    keep = ~guard
    other = replace(
        unit, bins=moved[keep], counts=np.bincount(moved[keep], minlength=design.n_bins).astype(float)
    )
    original, seen = module.fit_model, []

    def spy(space, spikes, use, *start, **kwargs):
        fit = original(space, spikes, use, *start, tolerance=1e-9)
        seen.append(space.expected(fit.coefficients, np.ones(design.folds.n_groups)) and space.mu.copy())
        return fit

    monkeypatch.setattr(module, "fit_model", spy)
    for u in (unit, other):
        evaluate(workspace(design, model), model, design, u, fold_spikes(design, u))
    half = len(seen) // 2
    np.testing.assert_allclose(seen[half + 1 + fold], seen[1 + fold], rtol=1e-4)
    assert not np.allclose(seen[half + 2 + fold], seen[2 + fold], rtol=1e-3)


def test_untuned_units_gain_nothing_held_out(design, simulate):
    gains = []
    for seed in range(6):
        unit = bin_spikes(design, simulate("flat", seed))
        found = evaluate(
            workspace(design, ("position",)), ("position",), design, unit, fold_spikes(design, unit)
        )
        gains.append(found.bits_per_spike)
    assert np.mean(gains) < 0.003


def test_the_simplest_model_within_one_standard_error_is_selected():
    # Breiman et al. 1984, section 3.4.3, worked by hand: differences 1, 1, 3, -1 have mean 1, sd 1.633 and a
    # standard error of the sum of 3.27, under the sum 4: not within. Halved spread puts it within.
    best = score("ab", [5, 5, 5, 5])
    outside = score("a", [4, 4, 2, 6])
    shortfall, error = paired_shortfall(best, outside)
    assert shortfall * 1000 * np.log(2) == pytest.approx(4)
    assert error * 1000 * np.log(2) == pytest.approx(2 * np.sqrt(8 / 3))
    assert select_model([best, outside]) is best
    within = score("a", [5, 2, 8, 4])
    assert select_model([best, within]) is within


def test_selection_does_not_depend_on_the_order_of_the_models():
    scores = [
        score("ab", [3, 4, 5, 4]),
        score("a", [3, 4, 4, 4]),
        score("b", [3, 4, 4, 4.5]),
        score("", [0, 0, 0, 0]),
    ]
    assert {select_model(list(order)).model for order in (scores, scores[::-1])} == {("b",)}
    assert best_score(scores).model == ("a", "b")


def test_paired_differences_ignore_what_is_common_to_the_folds():
    hard = np.array([-50.0, 40, 10, -30])
    one = paired_shortfall(score("ab", [3, 4, 5, 4]), score("a", [2, 4, 4, 4]))
    other = paired_shortfall(
        score("ab", hard + np.array([3, 4, 5, 4])), score("a", hard + np.array([2, 4, 4, 4]))
    )
    assert one == pytest.approx(other)
