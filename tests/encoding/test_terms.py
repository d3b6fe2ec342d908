"""Terms on their grids: cells, bases, layouts and refusals, each against what can be said by hand."""

import numpy as np
import pytest

from odograph.encoding.terms import make_drift, make_term
from odograph.errors import InputError
from odograph.settings.encoding import EncodingSettings, TermSettings

RNG = np.random.default_rng(6)
X, Y, ANGLE = RNG.random(3000), 2 * RNG.random(3000) - 5, RNG.uniform(-9, 9, 3000)
STATE = RNG.choice([7.0, -1.0, 2.5], 3000)
KINDS = {
    "plane": (["x", "y"], [X, Y]),
    "line": (["x"], [X]),
    "circle": (["angle"], [ANGLE]),
    "category": (["state"], [STATE]),
}


def term_of(kind, values=None, **options):
    columns, known = KINDS[kind]
    settings = TermSettings(name="tested", kind=kind, columns=columns, **({"cells": 20} | options))
    return make_term(settings, known if values is None else values)


@pytest.mark.parametrize("kind", KINDS)
def test_bases_are_partitions_of_unity(kind):
    basis = term_of(kind).basis
    np.testing.assert_allclose(basis.dense().sum(axis=1), 1, atol=1e-13)
    assert np.all(basis.weights >= 0)
    assert np.all((basis.columns >= 0) & (basis.columns < basis.size))


@pytest.mark.parametrize("kind", KINDS)
def test_every_bin_lies_in_the_cell_of_its_value(kind):
    term = term_of(kind)
    columns, values = KINDS[kind]
    assert term.columns == tuple(columns) and term.cell.shape == (3000,) and term.cell.dtype == np.int32
    place = np.unravel_index(term.cell, [len(axis) for axis in term.axes[::-1]])[::-1]
    for axis, value, index, (low, high) in zip(term.axes, values, place, term.spans, strict=True):
        if kind == "category":
            np.testing.assert_array_equal(axis[index], value)
            continue
        value = np.mod(value, 2 * np.pi) if kind == "circle" else value
        half = (high - low) / len(axis) / 2
        within = (value >= low) & (value <= high)
        assert np.abs(axis[index] - value)[within].max() <= half + 1e-12
        np.testing.assert_array_equal(index[value < low], 0)
        np.testing.assert_array_equal(index[value > high], len(axis) - 1)


def test_a_planes_cells_run_over_y_first_and_its_splines_over_x_first():
    """Cell iy * n + ix, spline jx * size + jy: the basis is the product of the margins laid out so."""
    term = term_of("plane", basis_size=6)
    x, y = term.margins
    np.testing.assert_allclose(x.dense(), term_of("line", [term.axes[0]], basis_size=6, low=term.spans[0][0],
                                                  high=term.spans[0][1]).basis.dense())  # fmt: skip
    dense = term.basis.dense().reshape(20, 20, 6, 6)
    np.testing.assert_allclose(dense, np.einsum("xj,yk->yxjk", x.dense(), y.dense()), atol=1e-15)
    assert term.spans[0] == pytest.approx(np.quantile(X, [0.001, 0.999]))
    assert term.spans[1] == pytest.approx(np.quantile(Y, [0.001, 0.999]))


def test_a_planes_functions_hold_its_coordinates():
    """Exact: uniform cubic splines reproduce straight lines: x, y and xy are among the unpenalised."""
    term = term_of("plane", basis_size=6)
    gx, gy = (g.ravel() for g in np.meshgrid(*term.axes))
    free = term.functions[:, ~term.coordinates.spectra.any(axis=0)]
    assert free.shape[1] == 3
    for surface in (gx, gy, gx * gy):
        B = np.column_stack([np.ones(400), free])
        np.testing.assert_allclose(B @ np.linalg.lstsq(B, surface, rcond=None)[0], surface, atol=1e-9)


@pytest.mark.parametrize("order, free", [(1, 0), (2, 1)])
def test_what_a_line_leaves_free(order, free):
    term = term_of("line", basis_size=9, penalty_order=order)
    loose = term.functions[:, term.coordinates.spectra[0] == 0]
    assert loose.shape == (20, free)
    if free:
        assert np.corrcoef(loose[:, 0], term.axes[0])[0, 1] == pytest.approx(1, abs=1e-12)


def test_a_line_takes_its_range_from_the_data_or_from_the_settings():
    assert term_of("line").spans[0] == pytest.approx(np.quantile(X, [0.0025, 0.995]))
    term = term_of("line", low=-1.0, high=3.0, cells=8)
    assert term.spans == ((-1.0, 3.0),)
    np.testing.assert_allclose(term.axes[0], -0.75 + 0.5 * np.arange(8))


def test_a_circle_does_not_mind_full_turns():
    term = term_of("circle", [np.array([0.1, 0.1 + 2 * np.pi, 0.1 - 6 * np.pi, -1e-18, 6.28])])
    np.testing.assert_array_equal(term.cell[:3], term.cell[0])
    assert np.all((term.cell >= 0) & (term.cell < 20))
    assert term.spans == ((0.0, 2 * np.pi),)


def test_a_category_has_one_column_a_level_in_ascending_order():
    term = term_of("category")
    np.testing.assert_array_equal(term.axes[0], [-1, 2.5, 7])
    np.testing.assert_array_equal(term.functions, np.eye(3))
    np.testing.assert_array_equal(term.coordinates.spectra, np.ones((1, 3)))
    assert term.spans == ((-1.0, 7.0),)


@pytest.mark.parametrize("kind", KINDS)
def test_centred_functions_have_no_mean_over_occupancy(kind):
    term = term_of(kind)
    np.testing.assert_allclose(term.centred_functions[term.cell].mean(axis=0), 0, atol=1e-12)
    np.testing.assert_allclose(term.functions[term.cell].mean(axis=0), term.mean_functions, atol=1e-12)


@pytest.mark.parametrize("kind", ["line", "plane", "circle"])
def test_a_constant_covariate_is_one_clear_error(kind):
    values = [np.arange(50.0), np.full(50, 3.25)] if kind == "plane" else [np.full(50, 3.25)]
    with pytest.raises(InputError) as error:
        term_of(kind, values)
    message = str(error.value)
    assert "'tested'" in message and "constant (3.25)" in message
    assert ", ".join(KINDS[kind][0]) in message and "leave the term out" in message


def test_a_single_level_is_one_clear_error():
    with pytest.raises(InputError, match="'tested' has a single level") as error:
        term_of("category", [np.zeros(50)])
    assert "at least two levels" in str(error.value)


def test_drift_has_a_knot_every_so_often_and_cells_that_blocks_share():
    """By hand: 3000 s, knots 300 s apart: 10 intervals, 13 splines; cells of at most a quarter of that."""
    settings = EncodingSettings(drift_knot_s=300.0, folds=5, blocks_per_fold=2)
    term = make_drift(np.linspace(0, 3000, 30_001), settings)
    assert term.basis.size == 13 and term.spans == ((0.0, 3000.0),)
    assert term.n_cells % 10 == 0 and 3000 / term.n_cells <= 75
    np.testing.assert_array_equal(np.unique(term.cell), np.arange(term.n_cells))
    assert np.all(np.diff(term.cell) >= 0)
    short = make_drift(np.linspace(0, 60, 601), settings)
    assert short.basis.size == 4  # the fewest there are
