"""The two penalties of lines: exact integrals, what each leaves free, and what that does to fits."""

import numpy as np
import pytest
from pydantic import ValidationError
from scipy.integrate import quad
from scipy.interpolate import BSpline

from odograph.encoding.analyse import prepare_session
from odograph.encoding.bases import curve_coordinates, gram, open_basis
from odograph.encoding.evaluate import evaluate, fold_spikes
from odograph.encoding.fit import fit_model
from odograph.encoding.shared import workspace
from odograph.encoding.spikes import bin_spikes
from odograph.settings.encoding import EncodingSettings, TermSettings

SIZE, LOW, HIGH = 9, 2.0, 14.0
SPACING = (HIGH - LOW) / (SIZE - 3)


def settings_of(order):
    speed = TermSettings(
        name="speed", kind="line", columns=["speed_cm_s"], basis_size=8, penalty_order=order, cells=40
    )
    return EncodingSettings(terms=[speed])


@pytest.fixture(scope="module")
def designs(table):
    return {order: prepare_session(table, settings_of(order)) for order in (1, 2)}


def fitted_coefficients(function):
    """Splines that are the function, for polynomials of degree 3 or less."""
    x = np.linspace(LOW, HIGH, 300)
    return np.linalg.lstsq(open_basis(x, LOW, HIGH, SIZE).dense(), function(x), rcond=None)[0]


def penalty(coefficients, order):
    """In the covariate's own unit: over [LOW, HIGH], of derivatives with respect to it."""
    return SPACING ** (1 - 2 * order) * coefficients @ gram(SIZE, order) @ coefficients


@pytest.mark.parametrize(
    ("function", "slope", "curvature"),
    [
        (np.ones_like, 0.0, 0.0),
        (lambda x: x, HIGH - LOW, 0.0),  # the integral of 1
        (lambda x: x**2, 4 * (HIGH**3 - LOW**3) / 3, 4 * (HIGH - LOW)),
        (lambda x: x**3, 9 * (HIGH**5 - LOW**5) / 5, 12 * (HIGH**3 - LOW**3)),
    ],
)
def test_penalties_of_polynomials_are_their_integrals(function, slope, curvature):
    # Exact: integrals of squared first and second derivatives.
    coefficients = fitted_coefficients(function)
    assert penalty(coefficients, 1) == pytest.approx(slope, abs=1e-6)
    assert penalty(coefficients, 2) == pytest.approx(curvature, abs=1e-6)


@pytest.mark.parametrize("order", [1, 2])
def test_penalty_of_any_curve_is_the_integral(order):
    # Source: scipy.integrate.quad over SciPy's own spline of the same coefficients.
    c, b = curve_coordinates(SIZE, order=order), np.random.default_rng(order).normal(size=SIZE - 1)
    knots = np.arange(-3, SIZE + 1, dtype=float)
    derivative = BSpline(knots, c.matrix() @ b, 3).derivative(order)
    pieces = [quad(lambda x: float(derivative(x)) ** 2, k, k + 1)[0] for k in range(SIZE - 3)]
    assert c.spectra[0] @ b**2 == pytest.approx(sum(pieces), rel=1e-8)


@pytest.mark.parametrize(("order", "free"), [(1, 0), (2, 1)])
def test_a_strong_penalty_leaves_a_constant_or_a_straight_line(designs, simulate, order, free):
    design = designs[order]
    unit, space = bin_spikes(design, simulate("speed", 3)), workspace(design, ("speed",))
    sums = space.project(np.concatenate([unit.per_cell(t) for t in space.terms]), unit.n_spikes)
    fit = fit_model(space, sums, np.ones(design.folds.n_groups), fixed_log_strengths=[18.0, 18.0])
    t = space.layout.index_of("speed")
    curve = space.terms[t].functions @ fit.coefficients[space.layout.slices[t]]
    assert np.abs(np.diff(curve, n=free + 1)).max() < 1e-4
    assert (np.ptp(curve) > 0.3) == (free == 1)  # the unit's rate does rise with speed


def own_freedom(space, fit):
    """Effective degrees of freedom of the term: the trace of its block of I - A^-1 S."""
    block = space.layout.slices[space.layout.index_of("speed")]
    ridge = np.exp(fit.log_strengths) @ space.layout.spectra
    return float(np.sum(1 - np.diag(fit.covariance)[block] * ridge[block]))


def test_an_untuned_unit_spends_less_on_a_slope_penalty(designs, simulate):
    freedom, gain = {1: [], 2: []}, {1: [], 2: []}
    for seed in range(20):
        for order, design in designs.items():
            unit = bin_spikes(design, simulate("flat", seed))
            tables = fold_spikes(design, unit)
            bare, full = (evaluate(workspace(design, m), m, design, unit, tables) for m in ((), ("speed",)))
            freedom[order].append(own_freedom(workspace(design, ("speed",)), full.fit))
            gain[order].append(full.bits_per_spike - bare.bits_per_spike)
    assert np.median(freedom[1]) < 0.5 and np.mean(freedom[1]) < np.mean(freedom[2]) - 0.5
    assert min(freedom[2]) > 0.99  # a straight line is never penalised
    assert np.mean(gain[1]) > np.mean(gain[2])


@pytest.mark.parametrize(
    ("kind", "columns"), [("plane", ["x_m", "y_m"]), ("circle", ["a"]), ("category", ["b"])]
)
def test_other_kinds_have_no_choice(kind, columns):
    with pytest.raises(ValidationError, match=f"setting of lines; a {kind} has its own penalty"):
        TermSettings(name="one", kind=kind, columns=columns, penalty_order=1)
