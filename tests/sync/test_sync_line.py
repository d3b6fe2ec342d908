"""Straight lines against certified values and closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from odograph.sync.line import agreeing_line, least_squares_line, robust_line

# NIST Statistical Reference Datasets, linear regression, data set "Norris" (y, x).
NORRIS = """
0.1 0.2  338.8 337.4  118.1 118.2  888.0 884.6  9.2 10.1  228.1 226.5  668.5 666.3  998.5 996.3  449.1 448.6
778.9 777.0  559.2 558.2  0.3 0.4  0.1 0.6  778.1 775.5  668.8 666.9  339.3 338.0  448.9 447.5  10.8 11.6
557.7 556.0  228.3 228.1  998.0 995.8  888.8 887.6  119.6 120.2  0.3 0.3  0.6 0.3  557.6 556.8  339.3 339.1
888.0 887.2  998.5 999.0  778.9 779.0  10.2 11.1  117.6 118.3  228.9 229.2  668.4 669.1  449.2 448.9  0.2 0.5
"""


def test_least_squares_gives_the_certified_values_of_norris():
    y, x = np.array(NORRIS.split(), float).reshape(-1, 2).T
    line = least_squares_line(x, y)
    assert line.intercept == pytest.approx(-0.262323073774029, abs=1e-10)
    assert line.intercept_se == pytest.approx(0.232818234301152, abs=1e-10)
    assert line.slope == pytest.approx(1.00211681802045, abs=1e-12)
    assert line.slope_se == pytest.approx(0.429796848199937e-3, abs=1e-12)
    assert line.residual_sd == pytest.approx(0.884796396144373, abs=1e-10)


def test_standard_error_of_drift_is_the_closed_form_of_even_spacing():
    # sigma / (spacing sqrt(N (N^2 - 1) / 12)): 3600 pulses 1 s apart with 1 ms of noise.
    n = 3600
    rng = np.random.default_rng(3)
    x = np.arange(n, dtype=float)
    line = least_squares_line(x, x + 1e-3 * rng.standard_normal(n))
    assert 1e6 * line.slope_se * (1e-3 / line.residual_sd) == pytest.approx(0.0160374, rel=1e-4)


def test_late_pulses_pull_least_squares_but_not_the_robust_line():
    # t_B = 12.5 + (1 + 20e-6) t_A, every tenth pulse 0.5 s late: least squares is off by 50 ms (closed form).
    x = np.arange(3600, dtype=float)
    y = 12.5 + (1 + 20e-6) * x
    y[::10] += 0.5
    plain, robust = least_squares_line(x, y), robust_line(x, y)
    assert plain.intercept == pytest.approx(12.550, abs=1e-3)
    assert 1e6 * (plain.slope - 1) == pytest.approx(19.792, abs=1e-3)
    assert 1e6 * (robust.slope - 1) == pytest.approx(20.0, abs=1e-3)
    assert robust.intercept == pytest.approx(12.5, abs=1e-6)


def test_robust_line_equals_least_squares_on_normal_residuals():
    rng = np.random.default_rng(4)
    x = np.sort(rng.uniform(0, 1000, 400))
    y = 3.0 + 1.0001 * x + 1e-3 * np.clip(rng.standard_normal(400), -3, 3)
    assert robust_line(x, y).slope == pytest.approx(least_squares_line(x, y).slope, abs=1e-12)


def test_digits_survive_clocks_that_count_from_1970():
    x = 1.7e9 + np.arange(1000) * 0.02
    line = least_squares_line(x, (x - 1.7e9) * (1 + 50e-6) + 10.0)
    assert 1e6 * (line.slope - 1) == pytest.approx(50.0, abs=0.05)
    assert line.at(x[0]) == pytest.approx(10.0, abs=1e-5)


def test_agreeing_line_finds_the_few_among_many_wild_points():
    rng = np.random.default_rng(5)
    x = np.linspace(0, 1000, 12)
    y = rng.uniform(0, 5000, 12)
    right = [1, 4, 7, 10]
    y[right] = 700.0 + (1 + 80e-6) * x[right]
    slope, intercept, agrees = agreeing_line(x, y, 0.005, 1e-3)
    assert np.flatnonzero(agrees).tolist() == right
    assert 1e6 * (slope - 1) == pytest.approx(80.0, abs=1e-3)
    assert intercept == pytest.approx(700.0, abs=1e-6)


def test_agreeing_line_says_when_no_slope_is_permitted():
    slope, _, agrees = agreeing_line(np.array([0.0, 1.0]), np.array([0.0, 2.0]), 0.01, 1e-3)
    assert np.isnan(slope)
    assert not agrees.any()
