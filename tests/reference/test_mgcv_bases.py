"""The engine against mgcv 1.8-41 (R 4.2.2), each with its own bases: strengths, edf, score, fitted values.

The numbers in data/mgcv_values.json were written by mgcv_values.R from the data in data/, see its README.
`bam(method="fREML")` has the fixed point of the generalized Fellner-Schall update, which the engine chooses
its strengths by; `gam(method="REML")` gives the score at fixed strengths and at its own optimum.
"""

import json
from pathlib import Path

import numpy as np
import pytest
from scipy.interpolate import BSpline, CubicSpline

from odograph.encoding.bases import Coordinates, SparseBasis, _diagonalise
from odograph.encoding.terms import Term, make_term
from odograph.settings.encoding import TermSettings

DATA = Path(__file__).parent / "data"
VALUES = json.loads((DATA / "mgcv_values.json").read_text(encoding="utf-8"))
ARENA = np.genfromtxt(DATA / "arena_counts.csv", delimiter=",", names=True)
NEURONE = np.genfromtxt(DATA / "motoneurone_counts.csv", delimiter=",", names=True)
FIXED = ("reml", "stiff", "loose")


def of(case):
    return {name: np.array(value) for name, value in VALUES[case].items()}


def log_strengths(case, unit):
    """mgcv's strengths as the engine's, whose penalty is `unit` times mgcv's before mgcv divides it."""
    return np.log(of(case)["strengths"] / of(case)["scales"] / unit)


def compare(found, case, tolerance):
    expected, step = of(case), 10 if len(found.expected) > 100 else 1
    assert found.fit.converged
    assert found.fit.edf == pytest.approx(expected["edf"][0], abs=tolerance)
    assert found.deviance == pytest.approx(expected["deviance"][0], abs=10 * tolerance)
    np.testing.assert_allclose(found.expected[::step], expected["fitted"], rtol=tolerance)
    np.testing.assert_allclose(found.link_error[::step], expected["link_error"], rtol=tolerance)


def compare_model(solve, terms, seconds, counts, model, unit):
    """Everything at fixed strengths; the chosen ones; differences of the score, which no basis changes."""
    scores = []
    for name in FIXED:
        found = solve(terms, seconds, counts, log_strengths(f"{model}_{name}", unit))
        compare(found, f"{model}_{name}", 1e-6)
        scores.append(found.score)
    expected = [of(f"{model}_{name}")["score"][0] for name in FIXED]
    np.testing.assert_allclose(np.diff(scores), np.diff(expected), atol=1e-6)
    chosen = solve(terms, seconds, counts)
    np.testing.assert_allclose(chosen.fit.log_strengths, log_strengths(f"{model}_fast", unit), atol=1e-4)
    compare(chosen, f"{model}_fast", 2e-5)


@pytest.mark.parametrize("order", [1, 2])
def test_a_line_is_mgcvs_b_spline_with_derivative_penalty(solve, order):
    # mgcv: s(bs="bs", m=c(3, order)); its penalty is in milliseconds, the engine's in knot spacings.
    settings = TermSettings(
        name="time", kind="line", columns=["time_ms"], basis_size=20, cells=50, low=-250, high=250,
        penalty_order=order,
    )  # fmt: skip
    term = make_term(settings, [NEURONE["time_ms"]])
    np.testing.assert_allclose(term.axes[0][term.cell], NEURONE["time_ms"])
    spacing = 500 / 17
    compare_model(
        solve, [term], np.full(50, 4.69), NEURONE["count"], f"line_{order}", spacing ** (2 * order - 1)
    )


def test_a_circle_is_mgcvs_cyclic_spline(solve):
    # mgcv: s(bs="cc") on evenly spaced knots, a basis of other functions that span the same curves.
    settings = TermSettings(name="sector", kind="circle", columns=["hd"], basis_size=9, cells=36)
    term = make_term(settings, [ARENA["hd"]])
    compare_model(solve, [term], ARENA["occ"], ARENA["count"], "circle", (2 * np.pi / 9) ** 3)


def given_term(name, values, coordinates):
    """A term whose basis is a matrix, each row a cell."""
    n, size = values.shape
    basis = SparseBasis(np.tile(np.arange(size, dtype=np.int32), (n, 1)), values, size)
    cell = np.arange(n, dtype=np.int32)
    return Term(name, "line", (name,), basis, coordinates, cell, (cell.astype(float),), ((0.0, float(n)),))


def p_splines(x, size=6):
    """Six cubic B-splines as mgcv's bs="ps" lays them; values at six even points; greatest eigenvalue.

    te() makes the values at those points the coefficients and scales the penalty by its eigenvalue there.
    """
    low, high = x.min() - 1e-3 * np.ptp(x), x.max() + 1e-3 * np.ptp(x)
    knots = low + (high - low) / (size - 3) * np.arange(-3, size + 1)
    at_points = BSpline.design_matrix(np.linspace(x.min(), x.max(), size), knots, 3).toarray()
    differences = np.diff(np.eye(size), 2, axis=0)
    factor, values = _diagonalise(differences.T @ differences, at_points.T @ at_points, True)
    return BSpline.design_matrix(x, knots, 3).toarray(), factor, values


def surface():
    bases, factors, values = zip(*(p_splines(ARENA[axis]) for axis in "xy"), strict=True)
    products = np.einsum("ni,nj->nij", *bases).reshape(len(ARENA), -1)
    spectra = np.stack([np.repeat(values[0], 6), np.tile(values[1], 6)])[:, 1:]
    return given_term("arena", products, Coordinates(factors, spectra)), [v.max() for v in values]


def cyclic_direction():
    """Cyclic cubic splines with mgcv's ten knots at quantiles of the data, by values at the knots."""
    angles = np.unique(np.r_[0.0, 2 * np.pi, ARENA["hd"]])
    places = np.linspace(0, len(angles) - 1, 10)
    knots = np.interp(places, np.arange(len(angles)), angles)
    closed = np.vstack([np.eye(9), np.eye(9)[:1]])
    spline = CubicSpline(knots, closed, bc_type="periodic")
    bend, width = spline(knots, 2), np.diff(knots)[:, None, None]
    left, right = bend[:-1], bend[1:]  # the second derivative is linear between knots
    mixed = np.einsum("ki,kj->kij", left, right)
    stiffness = np.sum(
        width / 6
        * (2 * np.einsum("ki,kj->kij", left, left) + 2 * np.einsum("ki,kj->kij", right, right)
           + mixed + mixed.transpose(0, 2, 1)),
        axis=0,
    )  # fmt: skip
    factor, values = _diagonalise(stiffness, np.eye(9), False)
    return given_term("direction", spline(ARENA["hd"]), Coordinates((factor,), values[None, 1:]))


def test_a_surface_and_a_direction_are_mgcvs(solve):
    # mgcv: te(x, y, bs="ps") + s(hd, bs="cc") + offset, three strengths, two on the same coefficients.
    plane, eigenvalues = surface()
    terms = [cyclic_direction(), plane]
    compare_model(solve, terms, ARENA["occ"], ARENA["count"], "surface", np.array([*eigenvalues, 1.0]))
