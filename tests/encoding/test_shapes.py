"""Shapes of curves: made by hand, and probabilities in closed form."""

import numpy as np
import pytest
from scipy.stats import norm

from odograph.encoding.shapes import DRAWS, SHAPES, classify, curve_shape


def test_a_straight_line_rises_with_the_probability_of_its_slope():
    """Exact: slope ~ N(0.3, 0.2^2) is above 0 with probability Phi(1.5); its sign never changes."""
    x = np.linspace(-1, 1, 15)
    found = curve_shape(0.3 * x, 0.2**2 * np.outer(x, x), seed=1)
    expected = norm.cdf(1.5)
    assert found.name == "rising"
    assert found.probability == pytest.approx(expected, abs=4 * np.sqrt(expected * (1 - expected) / DRAWS))
    assert found.one_sign == 1


def test_the_slope_of_a_curve_that_turns_changes_sign():
    x = np.linspace(0, 1, 21)
    found = curve_shape(-4 * (x - 0.5) ** 2, 1e-6 * np.eye(21), seed=1)
    assert (found.name, found.probability, found.one_sign) == ("non_monotonic", 1.0, 0.0)


def test_levelling_off_is_rising_though_the_slope_is_uncertain():
    x = np.linspace(0, 1, 21)
    found = curve_shape(1 - np.exp(-8 * x), 0.02**2 * np.exp(-(np.subtract.outer(x, x) ** 2) / 0.02), seed=1)
    assert found.name == "rising" and found.probability > 0.99
    assert found.one_sign < 0.9


@pytest.mark.parametrize(
    "curve, name",
    [([0, 1, 2, 1.8], "rising"), ([2, 1, 0, 0.2], "falling"), ([0, 1, 0], "non_monotonic")],
)
def test_a_small_reversal_is_forgiven(curve, name):
    assert SHAPES[classify(np.array([curve], dtype=float))[0]] == name
