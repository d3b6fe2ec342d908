"""Intervals and adjusted p-values against handbook tables, general-purpose libraries and exact variances."""

import numpy as np
import pytest
from scipy.stats import binom, quantile_test
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.proportion import proportion_confint

from odograph.population.intervals import (
    benjamini_hochberg,
    bootstrap_interval,
    median_interval,
    resampled_units,
    wilson_interval,
)
from odograph.settings.population import PopulationSettings

# Davies & Goldsmith, Statistical Methods in Research and Production, 1972: 6 batches, 5 samples each.
YIELDS = np.array(
    [
        [1545, 1440, 1440, 1520, 1580],
        [1540, 1555, 1490, 1560, 1495],
        [1595, 1550, 1605, 1510, 1560],
        [1445, 1440, 1595, 1465, 1545],
        [1595, 1630, 1515, 1635, 1625],
        [1520, 1455, 1450, 1480, 1445],
    ],
    float,
)


@pytest.mark.parametrize(
    "k, n, low, high",
    [(81, 263, 0.2553, 0.3662), (15, 148, 0.0624, 0.1605), (0, 20, 0.0, 0.1611), (1, 29, 0.0061, 0.1718)],
)
def test_wilson_as_tabled(k, n, low, high):
    """Newcombe 1998, Statistics in Medicine 17:857, table I, score method (printed values from memory)."""
    interval = wilson_interval(k, n, 0.95)
    assert (interval.low, interval.high) == pytest.approx((low, high), abs=5.1e-5)


@pytest.mark.parametrize("k, n", [(0, 1), (1, 1), (3, 10), (50, 170), (170, 170)])
@pytest.mark.parametrize("confidence", [0.8, 0.95, 0.99])
def test_wilson_equals_statsmodels(k, n, confidence):
    interval = wilson_interval(k, n, confidence)
    expected = proportion_confint(k, n, 1 - confidence, method="wilson")
    assert (interval.low, interval.high) == pytest.approx(expected, abs=1e-12)


def test_wilson_without_units_or_sense():
    interval = wilson_interval(0, 0, 0.95)
    assert np.isnan(interval.low) and "no units" in interval.method
    with pytest.raises(ValueError):
        wilson_interval(3, 2, 0.95)


def test_benjamini_hochberg_example():
    """Benjamini & Hochberg 1995, JRSS B 57:289: 4 of 15 rejected at 0.05 (p-values from memory)."""
    p = [
        0.0001,
        0.0004,
        0.0019,
        0.0095,
        0.0201,
        0.0278,
        0.0298,
        0.0344,
        0.0459,
        0.324,
        0.4262,
        0.5719,
        0.6528,
    ]
    p = np.array([*p, 0.759, 1.0])
    adjusted = benjamini_hochberg(p)
    assert np.sum(adjusted <= 0.05) == 4
    expected = [0.0015, 0.003, 0.0095, 0.035625, 0.0603, 0.0638571429, 0.0638571429, 0.0645, 0.0765]
    np.testing.assert_allclose(adjusted[:9], expected, rtol=1e-9)


def test_benjamini_hochberg_leaves_out_what_was_not_tested():
    p = np.random.default_rng(3).random(40) ** 3
    gaps = np.insert(p, [0, 7, 40], np.nan)
    expected = multipletests(p, method="fdr_bh")[1]
    np.testing.assert_allclose(benjamini_hochberg(gaps)[np.isfinite(gaps)], expected, rtol=1e-12)
    assert np.isnan(benjamini_hochberg(gaps)[np.isnan(gaps)]).all()
    assert np.isnan(benjamini_hochberg(np.array([np.nan]))).all()
    with pytest.raises(ValueError):
        benjamini_hochberg(np.array([0.1, 1.2]))


def test_two_level_resampling_has_its_exact_variance():
    """Variance of a balanced mean: v_b / a + v_w / (a b) (Davison & Hinkley 1997, section 3.8)."""
    a, b = YIELDS.shape
    between = np.mean((YIELDS.mean(1) - YIELDS.mean()) ** 2)
    within = np.mean(YIELDS.var(1))
    expected = between / a + within / (a * b)
    assert expected == pytest.approx(378.4638889, abs=1e-6)
    draws = 20_000
    animals = np.repeat(np.arange(a), b)
    means = [
        YIELDS.ravel()[index].mean() for index in resampled_units(animals, draws, np.random.default_rng(3))
    ]
    assert np.var(means) == pytest.approx(expected, rel=3 * np.sqrt(2 / draws))
    assert np.mean(means) == pytest.approx(YIELDS.mean(), abs=4 * np.sqrt(expected / draws))


def test_a_resample_keeps_each_animal_whole():
    """Unequal animals: every draw has as many animals as there are, each with its own number of units."""
    animals = np.array(["c", "a", "b", "a", "c", "c", "a", "c"])
    sizes = {"a": 3, "b": 1, "c": 4}
    for index in resampled_units(animals, 200, np.random.default_rng(0)):
        names, counts = np.unique(animals[index], return_counts=True)
        times = [count / sizes[name] for name, count in zip(names, counts, strict=True)]
        assert all(time == int(time) for time in times)
        assert sum(times) == 3


@pytest.mark.parametrize("confidence", [0.8, 0.95])
def test_bootstrap_of_single_units_is_binomial(confidence):
    """Exact: with one unit an animal the resampled count is binomial, and so are the limits."""
    values = (np.arange(38) < 17).astype(float)
    settings = PopulationSettings(confidence=confidence, bootstrap_draws=10_000)
    interval = bootstrap_interval(values, np.arange(38).astype(str), np.mean, "x", settings)[0]
    tail = (1 - confidence) / 2
    expected = binom.ppf([tail, 1 - tail], 38, 17 / 38)
    # Far from a step of the distribution the draws cannot miss the count.
    for count, level in zip(expected, [tail, 1 - tail], strict=True):
        assert min(abs(binom.cdf([count - 1, count], 38, 17 / 38) - level)) > 4 * np.sqrt(tail / 10_000)
    assert (interval.low * 38, interval.high * 38) == pytest.approx(tuple(expected))


def test_bootstrap_interval_covers():
    """Exact share 0.4, varying over 15 animals: about 95 % of the intervals hold it."""
    settings = PopulationSettings(bootstrap_draws=200)
    rng = np.random.default_rng(11)
    animals = np.repeat([f"animal{i}" for i in range(15)], 12)
    held = 0
    for study in range(200):
        shares = np.repeat(rng.uniform(0.2, 0.6, 15), 12)
        values = (rng.random(180) < shares).astype(float)
        interval = bootstrap_interval(values, animals, np.mean, f"study {study}", settings)[0]
        held += interval.low <= 0.4 <= interval.high
    assert 0.90 <= held / 200 <= 0.995


def test_bootstrap_interval_follows_its_purpose_and_seed_only():
    values, animals = np.arange(20.0), np.repeat(["a", "b", "c", "d"], 5)

    def limits(purpose, settings):
        interval = bootstrap_interval(values, animals, np.mean, purpose, settings)[0]
        return interval.low, interval.high

    settings = PopulationSettings()
    assert limits("x", settings) == limits("x", settings)
    assert limits("x", settings) != limits("y", settings)
    assert limits("x", settings) != limits("x", PopulationSettings(bootstrap_seed=2))


def test_too_few_animals_have_no_interval():
    interval = bootstrap_interval(np.arange(3.0), np.array(["a"] * 3), np.mean, "x", PopulationSettings())[0]
    assert np.isnan(interval.low) and np.isnan(interval.high)
    assert interval.method == "not available: 1 animal"
    nothing = bootstrap_interval(np.empty(0), np.empty(0, str), np.median, "x", PopulationSettings())
    assert [one.method for one in nothing] == ["not available: 0 animals"]
    strict = PopulationSettings(minimum_animals=5)
    four = bootstrap_interval(np.arange(4.0), np.array(list("abcd")), np.mean, "x", strict)[0]
    assert four.method == "not available: 4 animals"


def test_few_animals_are_said_to_give_narrow_intervals():
    def method(n_animals):
        return bootstrap_interval(
            np.arange(float(n_animals)), np.arange(n_animals).astype(str), np.mean, "x", PopulationSettings()
        )[0].method

    assert "few animals" in method(9)
    assert "few animals" not in method(10)


@pytest.mark.parametrize("n", [6, 7, 17, 30, 101])
@pytest.mark.parametrize("confidence", [0.8, 0.95])
def test_median_interval_equals_scipy(n, confidence):
    """The order-statistic interval of Conover 1971, as in scipy's quantile test."""
    values = np.random.default_rng(n).normal(size=n)
    interval = median_interval(values, confidence)
    expected = quantile_test(values).confidence_interval(confidence)
    assert (interval.low, interval.high) == (expected.low, expected.high)


def test_median_interval_of_too_few_values():
    """Of five values even the whole range holds the median with only 1 - 2 / 2^5 = 0.9375."""
    assert median_interval(np.arange(5.0), 0.95).method == "not available: 5 units"
    assert np.isfinite(median_interval(np.arange(5.0), 0.93).low)
    assert np.isnan(median_interval(np.empty(0), 0.95).low)
