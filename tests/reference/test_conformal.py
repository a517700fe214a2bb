"""The confidence gate against the theory of split conformal prediction and against scikit-learn's covariance.

Coverage laws: Vovk 2012; Angelopoulos & Bates 2021, 3.2 (values computed with SciPy).
"""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from scipy import stats
from sklearn.covariance import ShrunkCovariance

from nearhand.service.envelope.novelty import SHRINKAGE, Float32, NoveltyScore, calibrate


def scored(maxima: Float32) -> NoveltyScore:
    """Return a score of one channel whose distance is the value itself."""
    return NoveltyScore({"centre": np.zeros(1, np.float32), "whitening": np.ones((1, 1), np.float32), "maxima": maxima})


def accepted_up_to(score: NoveltyScore, maxima: Float32, level: float) -> float:
    """Return the largest calibration maximum that is not yet called strange at ``level``; infinity if none ever is."""
    if score.p_of(math.inf) > level:
        return math.inf
    return max(float(value) for value in maxima if score.p_of(float(value)) > level)


@pytest.mark.parametrize(
    ("n", "level", "k"),
    [(99, 0.1, 90), (29, 0.1, 27), (69, 0.1, 63), (129, 0.1, 117), (19, 0.05, 19), (199, 0.05, 190)],
)
def test_strange_begins_above_the_kth_smallest(n: int, level: float, k: int) -> None:
    # k = ⌈(n+1)(1−a)⌉, in exact arithmetic.
    assert math.ceil((n + 1) * (1 - Fraction(str(level)))) == k
    maxima = np.arange(1, n + 1, dtype=np.float32)
    assert accepted_up_to(scored(maxima), maxima, level) == k
    assert scored(maxima).p_of(k + 0.001) <= level


def test_every_size_and_level_agrees_with_exact_arithmetic() -> None:
    # The index ⌈(n+1)(1−a)⌉ is easily one off in floating point; the p-value's rule must not be.
    for n in range(1, 400):
        maxima = np.arange(1, n + 1, dtype=np.float32)
        score = scored(maxima)
        for level in ("0.3", "0.2", "0.15", "0.1", "0.05", "0.02", "0.01"):
            k = math.ceil((n + 1) * (1 - Fraction(level)))
            expected = math.inf if k > n else float(k)
            assert accepted_up_to(score, maxima, float(level)) == expected, (n, level)


def test_too_few_episodes_abstain_instead_of_using_the_maximum() -> None:
    maxima = np.arange(1, 19, dtype=np.float32)
    assert scored(maxima).p_of(1e9) > 0.05
    assert scored(maxima).smallest_epsilon == pytest.approx(1 / 19)


@pytest.mark.parametrize(
    ("n", "level", "mean", "sd"),
    [
        (19, 0.05, 0.95, 0.047559486560567),
        (9, 0.1, 0.9, 0.090453403373329),
        (99, 0.1, 0.9, 0.0298511157063),
        (100, 0.1, 0.9009900990099, 0.029573262383449),
        (199, 0.05, 0.95, 0.015372651298985),
    ],
)
def test_realised_coverage_follows_its_beta_law(
    generator: np.random.Generator, n: int, level: float, mean: float, sd: float
) -> None:
    draws = 1500
    coverage = np.empty(draws)
    for index in range(draws):
        maxima = generator.random(n).astype(np.float32)
        # For uniform scores, the chance that a fresh one is accepted is the threshold itself.
        coverage[index] = accepted_up_to(scored(maxima), maxima, level)
    k = math.ceil((n + 1) * (1 - Fraction(str(level))))
    law = stats.beta(k, n + 1 - k)
    assert (law.mean(), law.std()) == pytest.approx((mean, sd), abs=1e-9)
    assert coverage.mean() == pytest.approx(mean, abs=4.5 * sd / math.sqrt(draws))
    assert stats.kstest(coverage, law.cdf).pvalue > 1e-3


def test_fresh_episodes_like_the_demonstrations_trip_as_often_as_promised(generator: np.random.Generator) -> None:
    # Steps of an AR(1) course are dependent; the promise is per episode. With 19 episodes, ε = 1/20 exactly.
    def episode() -> Float32:
        noise = generator.standard_normal((25, 3))
        rows = np.empty((25, 3))
        rows[0] = noise[0]
        for t in range(1, 25):
            rows[t] = 0.9 * rows[t - 1] + math.sqrt(1 - 0.81) * noise[t]
        return rows.astype(np.float32)

    rates = []
    for _ in range(60):
        reference = np.concatenate([episode() for _ in range(10)])
        score = NoveltyScore(calibrate(reference, [episode() for _ in range(19)]))
        fresh = [min(score.p_value(row) for row in episode()) <= 0.05 for _ in range(15)]
        rates.append(np.mean(fresh))
    # Hits per calibration follow BetaBinomial(15, 1, 19): mean 0.05, sd 0.07 of the fraction.
    sd = stats.betabinom(15, 1, 19).std() / 15
    assert np.mean(rates) == pytest.approx(0.05, abs=4 * sd / math.sqrt(len(rates)))


def test_the_distance_is_mahalanobis_with_a_shrunk_covariance(generator: np.random.Generator) -> None:
    mixing = generator.standard_normal((5, 5))
    rows = (generator.standard_normal((800, 5)) @ mixing + 3.0).astype(np.float32)
    tensors = {name: values for name, values in calibrate(rows, []).items() if name not in ("neighbours", "usual")}
    score = NoveltyScore(tensors)
    standardised = (rows - rows.mean(axis=0, dtype=np.float64)) / rows.std(axis=0, dtype=np.float64)
    fitted = ShrunkCovariance(shrinkage=SHRINKAGE, assume_centered=True).fit(standardised)
    expected = np.sqrt(fitted.mahalanobis(standardised[:50]))
    assert [score.score(row) for row in rows[:50]] == pytest.approx(list(expected), rel=1e-3)
