"""Discretisation, collapsing and folds."""

import numpy as np
import pytest

from odograph.encoding.design import model_name, prepare_session, restrict
from odograph.encoding.folds import make_folds
from odograph.errors import InputError
from odograph.settings.encoding import EncodingSettings, TermSettings


def test_every_bin_is_held_out_once(design):
    held_out = np.array([design.folds.held_out(k)[design.folds.group] for k in range(design.folds.n_folds)])
    np.testing.assert_array_equal(held_out.sum(axis=0), 1)


def test_training_never_touches_what_is_held_out_nor_its_guard(design, settings):
    time_s = (design.edges_s[:-1] + design.edges_s[1:])[design.valid] / 2
    for fold in range(design.folds.n_folds):
        trains = time_s[design.folds.training(fold)[design.folds.group]]
        tests = time_s[design.folds.held_out(fold)[design.folds.group]]
        place = np.searchsorted(trains, tests)
        before = tests - trains[np.maximum(place - 1, 0)]
        after = trains[np.minimum(place, len(trains) - 1)] - tests
        nearest = np.minimum(
            np.where(place > 0, before, np.inf), np.where(place < len(trains), after, np.inf)
        )
        assert nearest.min() >= settings.guard_s


def test_folds_hold_equal_time_and_are_spread_over_the_session(design):
    group, n = design.folds.group % design.folds.n_folds, design.folds.n_folds
    sizes = np.bincount(group)
    assert sizes.max() - sizes.min() <= 10
    middle = [np.flatnonzero(group == k).mean() / len(group) for k in range(n)]
    assert min(middle) > 0.35 and max(middle) < 0.65


def test_folds_of_masked_time_are_all_filled():
    time_s = np.concatenate([np.arange(0, 100, 0.02), np.arange(700, 800, 0.02)])
    folds = make_folds(time_s, EncodingSettings())
    assert np.bincount(folds.group % folds.n_folds).min() > 0.09 * len(time_s)


@pytest.mark.parametrize(
    "model", [(), ("speed",), ("position", "speed"), ("position", "head_direction", "speed")]
)
def test_rows_keep_all_the_time_in_its_cells(design, model):
    table = design.table(model)
    assert table.seconds.sum() == pytest.approx(design.n_bins * design.bin_s)
    for t, term in enumerate(table.terms):
        collapsed = np.bincount(table.cells[t], weights=table.seconds, minlength=term.n_cells)
        np.testing.assert_allclose(collapsed, np.bincount(term.cell, minlength=term.n_cells) * design.bin_s)
    np.testing.assert_allclose(
        np.bincount(table.group, weights=table.seconds, minlength=design.folds.n_groups),
        np.bincount(design.folds.group, minlength=design.folds.n_groups) * design.bin_s,
    )


def test_models_are_all_subsets_in_order(design):
    assert [model_name(m) for m in design.models()] == [
        "constant",
        "position",
        "head_direction",
        "speed",
        "position+head_direction",
        "position+speed",
        "head_direction+speed",
        "position+head_direction+speed",
    ]


def test_a_missing_column_is_named_with_those_there_are(table):
    settings = EncodingSettings(terms=[TermSettings(name="phase", kind="circle", columns=["theta_rad"])])
    with pytest.raises(InputError, match=r"(?s)theta_rad.*expected: one of head_direction_rad, speed_cm_s"):
        prepare_session(table, settings)


def test_a_covariate_without_a_value_is_named(table):
    nothing = np.full(len(table["x_m"]), np.nan)
    with pytest.raises(InputError, match=r"(?s)head_direction_rad.*no value in this session"):
        prepare_session(table | {"head_direction_rad": nothing}, EncodingSettings())


def test_a_constant_covariate_is_refused(table):
    with pytest.raises(InputError, match=r"speed.*constant"):
        prepare_session(table | {"speed_cm_s": np.full(len(table["x_m"]), 3.0)}, EncodingSettings())


def test_too_little_valid_time_is_refused(table):
    valid = np.arange(len(table["x_m"])) < 300
    with pytest.raises(InputError, match="300 valid bins"):
        prepare_session(table | {"valid": valid}, EncodingSettings())


def test_samples_without_a_covariate_are_not_valid(table):
    speed = table["speed_cm_s"].copy()
    speed[100:200] = np.nan
    assert prepare_session(table | {"speed_cm_s": speed}, EncodingSettings()).n_bins == len(speed) - 100


def test_restricting_keeps_only_the_bins_asked_for(design):
    keep = np.arange(len(design.valid)) % 2 == 0
    smaller = restrict(design, keep)
    np.testing.assert_array_equal(smaller.valid, design.valid & keep)
    assert smaller.folds.n_folds == design.folds.n_folds


def test_category_terms_have_a_cell_per_level(table):
    state = (table["x_m"] > 0.5).astype(float) + 2 * (table["y_m"] > 0.7)
    settings = EncodingSettings(terms=[TermSettings(name="state", kind="category", columns=["state"])])
    (term,) = prepare_session(table | {"state": state}, settings).terms
    np.testing.assert_array_equal(term.axes[0], [0, 1, 2, 3])
    np.testing.assert_array_equal(np.bincount(term.cell), np.bincount(state.astype(int)))
