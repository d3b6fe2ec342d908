"""Spline bases and penalties against SciPy's B-splines and its quadrature."""

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.interpolate import BSpline

from odograph.encoding.bases import (
    curve_coordinates,
    cyclic_basis,
    gram,
    level_coordinates,
    open_basis,
    surface_coordinates,
    tensor_basis,
)


def scipy_spline(i, size):
    """The i-th of `size` cubic B-splines over knots 0, 1, ..., size - 3."""
    return BSpline.basis_element(np.arange(i - 3, i + 2), extrapolate=False)


@pytest.mark.parametrize("derivative", [0, 1, 2])
def test_open_basis_is_scipys(derivative):
    # Source: scipy.interpolate.BSpline.
    size, low, high = 9, -2.0, 4.0
    x = np.linspace(low, high, 57)[1:-1]
    knots = low + (high - low) / (size - 3) * np.arange(-3, size + 1)
    expected = np.column_stack(
        [np.asarray(BSpline(knots, np.eye(size)[i], 3).derivative(derivative)(x)) for i in range(size)]
        if derivative
        else [np.asarray(BSpline(knots, np.eye(size)[i], 3)(x)) for i in range(size)]
    )
    np.testing.assert_allclose(open_basis(x, low, high, size, derivative).dense(), expected, atol=1e-12)


def test_points_outside_the_range_are_taken_to_its_ends():
    inside = open_basis(np.array([0.0, 1.0]), 0, 1, 6).dense()
    outside = open_basis(np.array([-5.0, 7.0]), 0, 1, 6).dense()
    np.testing.assert_array_equal(inside, outside)


def test_cyclic_basis_closes_and_sums_to_one():
    angles = np.linspace(0, 2 * np.pi, 25)
    dense = cyclic_basis(angles, 8).dense()
    np.testing.assert_allclose(dense.sum(axis=1), 1, atol=1e-14)
    np.testing.assert_allclose(dense[0], dense[-1], atol=1e-12)
    np.testing.assert_allclose(cyclic_basis(angles + 4 * np.pi, 8).dense(), dense, atol=1e-12)


def test_tensor_basis_is_the_product_of_its_margins():
    rng = np.random.default_rng(0)
    a, b = open_basis(rng.random(30), 0, 1, 6), open_basis(rng.random(30), 0, 1, 7)
    expected = np.einsum("ni,nj->nij", a.dense(), b.dense()).reshape(30, -1)
    np.testing.assert_allclose(tensor_basis(a, b).dense(), expected, atol=1e-15)


@pytest.mark.parametrize("derivative", [0, 2])
def test_gram_matrix_is_the_integral(derivative):
    # Source: scipy.integrate.quad over SciPy's own splines.
    size = 7
    found = gram(size, derivative)
    for i, j in [(0, 0), (2, 3), (3, 3), (1, 4), (6, 6), (0, 5)]:
        first, second = scipy_spline(i, size), scipy_spline(j, size)
        if derivative:
            first, second = first.derivative(derivative), second.derivative(derivative)

        def product(x, first=first, second=second):
            return np.nan_to_num(first(x)) * np.nan_to_num(second(x))

        expected = sum(quad(product, k, k + 1)[0] for k in range(size - 3))
        assert found[i, j] == pytest.approx(expected, abs=1e-10)


def test_cyclic_gram_rows_are_rotations_of_each_other():
    g = gram(9, 2, cyclic=True)
    np.testing.assert_allclose(np.roll(np.roll(g, 1, 0), 1, 1), g, atol=1e-14)
    np.testing.assert_allclose(g @ np.ones(9), 0, atol=1e-13)


def test_curve_coordinates_diagonalise_the_penalty_and_leave_out_the_constant():
    c = curve_coordinates(9)
    transform = c.matrix()
    np.testing.assert_allclose(transform.T @ gram(9, 2) @ transform, np.diag(c.spectra[0]), atol=1e-9)
    assert np.linalg.matrix_rank(np.column_stack([np.ones(9), transform])) == 9
    assert np.sum(c.spectra[0] == 0) == 1  # straight lines


def test_surface_coordinates_diagonalise_both_penalties():
    size, c = 6, surface_coordinates(6)
    transform, k, m = c.matrix(), gram(6, 2), gram(6, 0)
    for matrix, spectrum in zip((np.kron(k, m), np.kron(m, k)), c.spectra, strict=True):
        np.testing.assert_allclose(transform.T @ matrix @ transform, np.diag(spectrum), atol=1e-9)
    assert transform.shape == (size**2, size**2 - 1)
    assert np.sum(~c.spectra.any(axis=0)) == 3  # x, y and xy


def test_bending_energy_of_a_known_curve():
    # Exact: the integral of (x^2)'' squared over unit knots 0..6 is 4 * 6.
    size = 9
    grid = np.linspace(0, size - 3, 200)
    coefficients, *_ = np.linalg.lstsq(open_basis(grid, 0, size - 3, size).dense(), grid**2, rcond=None)
    assert coefficients @ gram(size, 2) @ coefficients == pytest.approx(24.0, rel=1e-9)


def test_what_each_penalty_leaves_free():
    # Exact: straight lines (cyclic: constants, left out) are free; ridge frees nothing; a plane 1, x, y, xy.
    for c, rank in [
        (curve_coordinates(9), 7),
        (curve_coordinates(9, cyclic=True), 8),
        (level_coordinates(4), 4),
        (surface_coordinates(6), 36 - 4),
    ]:
        assert np.count_nonzero(c.spectra.sum(axis=0) > 1e-9) == rank
        assert np.all(c.spectra >= 0)


def test_slope_energy_of_known_curves():
    # Exact, over unit knots 0..6: the integral of the squared slope of x is 6, of x^2 it is 4 * 6^3 / 3.
    size = 9
    grid = np.linspace(0, size - 3, 200)
    for power, expected in ((0, 0.0), (1, 6.0), (2, 288.0)):
        values = grid**power
        coefficients, *_ = np.linalg.lstsq(open_basis(grid, 0, size - 3, size).dense(), values, rcond=None)
        assert coefficients @ gram(size, 1) @ coefficients == pytest.approx(expected, abs=1e-9)


def test_coordinates_carry_the_slope_penalty():
    c, b = curve_coordinates(9, order=1), np.random.default_rng(1).normal(size=8)
    spline = c.matrix() @ b
    assert c.spectra[0] @ b**2 == pytest.approx(spline @ gram(9, 1) @ spline)
    assert np.all(c.spectra > 1e-3)  # nothing but the constant, which is left out, goes free
