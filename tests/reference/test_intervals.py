"""Intervals against exact values, an independent library and their own coverage."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.stats import binom
from statsmodels.stats.proportion import proportion_confint

from nearhand.service.measure.intervals import bootstrap, mean_interval, permutation_p, proportion_interval, tails


@pytest.mark.parametrize(
    ("successes", "n", "low", "high"),
    [
        (0, 59, 0.0, 0.06060890095034),
        (0, 299, 0.0, 0.012261595907535),
        (1, 93, 0.00027219744200714, 0.05845816451438),
        (5, 100, 0.016431879182052, 0.11283491110546),
        (8, 20, 0.19119006072531, 0.63945741269251),
        (20, 20, 0.831566522, 1.0),
    ],
)
def test_exact_binomial(successes: int, n: int, low: float, high: float) -> None:
    """Clopper & Pearson 1934, computed with ``scipy.stats.beta``; statsmodels agrees."""
    found = proportion_interval(successes, n)
    assert (found.low, found.high) == pytest.approx((low, high), abs=1e-8)
    assert (found.low, found.high) == pytest.approx(proportion_confint(successes, n, method="beta"), abs=1e-10)


@pytest.mark.parametrize("truth", [0.05, 0.5, 0.9])
def test_exact_binomial_covers_at_least_as_often_as_it_says(truth: float) -> None:
    """Summed over all outcomes, not simulated: the interval's coverage is at least 95 % for every n and p."""
    for n in (5, 20, 50):
        covered = sum(
            binom.pmf(k, n, truth)
            for k in range(n + 1)
            if proportion_interval(k, n).low <= truth <= proportion_interval(k, n).high
        )
        assert covered >= 0.95


def test_the_bootstrap_of_a_mean_is_the_enumerated_one() -> None:
    """All 6⁶ resamples of 1, 2, 4, 8, 16, 32, enumerated: the exact bootstrap distribution."""
    values = np.array([1.0, 2.0, 4.0, 8.0, 16.0, 32.0])
    means = [float(np.mean(draw)) for draw in itertools.product(values, repeat=6)]
    found = mean_interval(values)
    assert found.value == pytest.approx(10.5)
    # The statistic lies on a lattice of sixths; 2,000 draws find quantiles far in the tail to a few steps of it.
    assert (found.low, found.high) == pytest.approx(tuple(np.quantile(means, tails(6))), abs=1.2)
    general = bootstrap(lambda rows: float(values[rows].mean()), 6)
    assert (general.value, general.low, general.high) == pytest.approx((found.value, found.low, found.high))


@pytest.mark.parametrize("n", [6, 10, 30])
def test_the_bootstrap_covers_a_normal_mean_as_often_as_it_says(n: int) -> None:
    """Nominal 95 %: 1,000 repetitions must lie in the exact 99.9 % binomial band, 926 to 971 (SciPy)."""
    generator = np.random.default_rng(3)
    found = [mean_interval(values) for values in generator.normal(size=(1000, n))]
    covered = sum(one.low <= 0.0 <= one.high for one in found)
    assert binom.interval(0.999, 1000, 0.95) == (926, 971)
    assert 926 <= covered <= 971


@pytest.mark.parametrize(("n", "plain"), [(10, 0.857), (30, 0.908)])
def test_the_bootstrap_of_a_skewed_mean_falls_short_but_less_than_the_plain_one(n: int, plain: float) -> None:
    """Exponential data: the plain percentile interval covered 85.7 % and 90.8 % of these very samples."""
    generator = np.random.default_rng(3)
    found = [mean_interval(generator.exponential(size=n)) for _ in range(600)]
    covered = sum(one.low <= 1.0 <= one.high for one in found)
    assert plain + 0.01 < covered / 600 <= 0.97


@pytest.mark.parametrize("values", [[], [1.0], [1.0, 2.0, 3.0, 4.0, 5.0], [1.0, math.nan, 2.0], [math.inf, 1.0]])
def test_what_has_no_interval_has_none(values: list[float]) -> None:
    found = mean_interval(np.array(values))
    assert math.isnan(found.low)
    assert math.isnan(found.high)


def test_constant_data_have_an_interval_of_no_width() -> None:
    found = mean_interval(np.ones(10))
    assert (found.value, found.low, found.high) == (1.0, 1.0, 1.0)


def test_the_permutation_test_keeps_its_level_and_sees_a_shift() -> None:
    """Under the null p ≤ 0.05 in at most the 99.9 % binomial band of 5 %; a shift of three standard errors is seen."""
    generator = np.random.default_rng(4)
    false = sum(
        permutation_p(generator.normal(size=(8, 3)), generator.normal(size=(8, 3)), permutations=99) <= 0.05
        for _ in range(200)
    )
    assert false <= binom.ppf(0.999, 200, 0.05)
    assert permutation_p(generator.normal(size=(20, 3)) + 1.5, generator.normal(size=(20, 3))) < 0.01
