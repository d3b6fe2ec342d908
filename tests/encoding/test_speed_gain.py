"""The speed-gain model: derivatives by finite differences, gains of simulated units, closed forms."""

import numpy as np
import pytest

from odograph.encoding.evaluate import fit_whole
from odograph.encoding.gain_meaning import describe_gains
from odograph.encoding.gain_test import gain_test
from odograph.encoding.shared import shift_plan, workspace
from odograph.encoding.speed_gain import GainModel, fit_gains, modulation
from odograph.encoding.spikes import bin_spikes

FULL = ("position", "head_direction", "speed")


def unit_with_gain(table, design, gain, seed):
    """A unit tuned to direction whose tuning is multiplied by 1 + gain z."""
    z = modulation(table["speed_cm_s"])
    rate = 5 * np.exp((1 + gain * z) * 1.2 * np.cos(table["head_direction_rad"] - 1) + 0.2 * z)
    counts = np.random.default_rng(seed).poisson(rate * design.bin_s)
    return bin_spikes(design, np.repeat(table["time_s"], counts))


@pytest.fixture(scope="module")
def z(design):
    return modulation(design.speed_cm_s)


def test_modulation_is_monotone_and_standardised():
    speed = np.random.default_rng(0).gamma(2, 8, 5000)
    z = modulation(speed)
    assert np.all(np.diff(z[np.argsort(speed)]) >= 0)
    assert z.mean() == pytest.approx(0, abs=1e-12) and z.std() == pytest.approx(1)


def test_score_and_hessian_are_derivatives_of_the_likelihood(table, design, z):
    space, unit = workspace(design, FULL), unit_with_gain(table, design, 0.3, 1)
    fit = fit_whole(space, design, unit)
    model = GainModel(space, unit, fit, ("position", "head_direction"), "speed", z)
    n = len(fit.coefficients)
    point = np.append(fit.coefficients, [0.1, 0.25])

    def score_at(p):
        return model.derivatives(model.at(p[:n], p[n:]))

    def value_at(p):
        return model.at(p[:n], p[n:]).value

    score, hessian = score_at(point)
    for direction in np.random.default_rng(2).normal(size=(4, n + 2)):
        step = 1e-5 * direction / np.linalg.norm(direction)
        slope = value_at(point + step) - value_at(point - step)
        assert slope == pytest.approx(2 * score @ step, rel=1e-4, abs=1e-7)
        bend = score_at(point + step)[0] - score_at(point - step)[0]
        expected = -2 * hessian @ step
        np.testing.assert_allclose(bend, expected, atol=1e-4 * np.abs(expected).max())


@pytest.mark.parametrize("gain", [-0.3, 0.0, 0.4])
def test_gains_are_recovered(table, design, z, gain):
    space, errors = workspace(design, FULL), []
    for seed in range(3):
        unit = unit_with_gain(table, design, gain, seed)
        fit = fit_whole(space, design, unit)
        found = fit_gains(space, unit, fit, ("head_direction",), "speed", z)
        assert found.converged and found.terms == ("head_direction",)
        errors.append((found.gains[0] - gain) / np.sqrt(found.covariance[0, 0]))
    assert np.all(np.abs(errors) < 4) and abs(np.mean(errors)) < 2


def test_a_gain_is_tested_and_told_in_bits(table, design, z):
    space, plan = workspace(design, FULL), shift_plan(design)
    unit = unit_with_gain(table, design, 0.4, 5)
    fit = fit_whole(space, design, unit)
    p = gain_test(space, design, unit, fit, z, plan, "head_direction")
    assert p == pytest.approx(1 / (1 + len(plan.drawn)))
    found = fit_gains(space, unit, fit, ("head_direction",), "speed", z)
    told = describe_gains(space, design, found, "speed", z, 2.0, {"head_direction": p})["head_direction"]
    assert told.fast_bits_per_spike > 1.5 * told.slow_bits_per_spike
    assert told.fast_bits_per_s > told.slow_bits_per_s > 0


def test_units_without_gain_are_seldom_called_so(table, design, z):
    """24 units; P(more than 5 of 24 at 5 %) is 0.1 % (binomial)."""
    space, plan, small = workspace(design, FULL), shift_plan(design), 0
    for seed in range(24):
        unit = unit_with_gain(table, design, 0.0, 100 + seed)
        fit = fit_whole(space, design, unit)
        small += gain_test(space, design, unit, fit, z, plan, "head_direction") <= 0.05
    assert small <= 5
