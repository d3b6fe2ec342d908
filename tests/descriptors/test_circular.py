"""Direction statistics against handbook examples."""

import numpy as np
import pytest
from scipy import special

from odograph.descriptors.circular import (
    circular_sd_rad,
    concentration,
    mean_vector,
    rayleigh_p,
    resultant_length,
)

# Zar, Biostatistical Analysis, 5th ed. 2010, example 26.4.
ZAR_26_4_DEG = [45, 55, 81, 96, 110, 117, 132, 154]
# Fisher, Statistical Analysis of Circular Data, 1993, data B.11 (sea stars).
FISHER_B11_DEG = [0, 1, 3, 3, 8, 13, 16, 18, 30, 31, 43, 45, 147, 298, 329, 332, 335, 340, 350, 354, 356, 357]


@pytest.mark.parametrize(
    "angles_deg, mean_deg, length",
    [
        (ZAR_26_4_DEG, 98.98775195, 0.8252177448),
        # Jammalamadaka & SenGupta, Topics in Circular Statistics, 2001, p. 23: 1 - R = 0.1635635.
        ([51, 67, 40, 109, 31, 358], 48.62718, 1 - 0.1635635),
        (FISHER_B11_DEG, 3.100372, 0.8297671),
    ],
)
def test_handbook_means(angles_deg, mean_deg, length):
    direction, found = mean_vector(np.deg2rad(angles_deg))
    assert np.rad2deg(direction) == pytest.approx(mean_deg, abs=1e-5)
    assert found == pytest.approx(length, abs=1e-7)


def test_roulette():
    """Mardia & Jupp, Directional Statistics, 2000, example 2.1: 51 degrees, 0.711 (recalled from memory)."""
    direction, length = mean_vector(np.deg2rad([43, 45, 52, 61, 75, 88, 88, 279, 357]))
    assert round(np.rad2deg(direction)) == 51
    assert round(length, 3) == 0.711


def test_weights_are_repeats():
    angles, counts = np.deg2rad([10.0, 80.0, 300.0]), np.array([3, 1, 4])
    repeated = mean_vector(np.repeat(angles, counts))
    np.testing.assert_allclose(mean_vector(angles, counts), repeated, rtol=1e-12)


@pytest.mark.parametrize("kappa", [0.5, 1.0, 2.0, 5.0])
def test_resultant_length_of_a_von_mises_tuning_curve(kappa):
    """Exact: I1(kappa) / I0(kappa), and the preferred direction is the curve's peak."""
    angle = np.arange(720) * np.pi / 360
    direction, length = mean_vector(angle, 4.0 * np.exp(kappa * np.cos(angle - 5.1)))
    assert length == pytest.approx(special.i1(kappa) / special.i0(kappa), abs=1e-12)
    assert direction == pytest.approx(5.1, abs=1e-12)


def test_circular_sd_of_zar_example():
    """Zar 2010, example 26.4 and equation 26.21: 36 degrees; printed digits 35.5148799 by the formula."""
    assert np.rad2deg(circular_sd_rad(0.8252177448)) == pytest.approx(35.514880, abs=1e-5)
    assert circular_sd_rad(0.0) == np.inf


def test_rayleigh_p_of_zar_example():
    """Zar 2010, example 27.1: 0.001 < p < 0.002; equation 27.4 gives 0.0018516375."""
    length = resultant_length(np.deg2rad(ZAR_26_4_DEG))
    assert rayleigh_p(length, 8) == pytest.approx(0.0018516375, abs=1e-9)
    assert rayleigh_p(0.0, 8) == 1.0


@pytest.mark.parametrize(
    "length, kappa", [(0.1, 0.2010084), (0.5, 1.1593199), (0.9, 5.3046891), (0.95, 10.2716888)]
)
def test_concentration_table(length, kappa):
    """Roots of I1 / I0; tabled by Mardia 1972, app. 2, and Fisher 1993, app. A (from memory)."""
    assert concentration(length) == pytest.approx(kappa, abs=1e-6)


def test_concentration_over_its_whole_range():
    for kappa in (1e-9, 1e-3, 1.0, 300.0, 3e5, 1e7):
        assert concentration(special.ive(1, kappa) / special.ive(0, kappa)) == pytest.approx(kappa, rel=1e-4)
    assert concentration(0.0) == 0.0
    assert concentration(1.0) == np.inf


def test_no_direction():
    assert np.isnan(mean_vector(np.array([]))).all()
    assert np.isnan(mean_vector(np.array([1.0]), np.array([0.0]))).all()
    direction, length = mean_vector(np.array([0.0, np.pi]))
    assert np.isnan(direction) and length == pytest.approx(0.0, abs=1e-12)
    assert mean_vector(np.array([1.0, np.nan]), np.array([1.0, 1.0])) == pytest.approx((1.0, 1.0))


def test_contradictory_input_is_refused():
    with pytest.raises(ValueError):
        mean_vector(np.ones(2), np.ones(3))
    with pytest.raises(ValueError):
        mean_vector(np.ones(2), np.array([1.0, -1.0]))
    with pytest.raises(ValueError):
        concentration(1.2)
