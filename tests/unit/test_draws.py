"""Poisson, binomial and less than Poisson numbers against scipy.stats, at small and large means and where the method changes.

False-alarm rate: 1e-3 over all the chi-squares of one test (Bonferroni), seeds fixed. Each test has a twin whose numbers come
from a law a few per cent off, which fails.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from driblet.engines import draws
from driblet.engines.random_stream import next_word

ALPHA = 1e-3
DRAWN = 200_000
POISSON, BINOMIAL, REGULAR, NORMAL = range(4)


def stream(seed: int) -> np.ndarray:
    return np.random.SeedSequence(seed).generate_state(4, np.uint64).reshape(1, 4)


def drawn(kind: int, first: float, second: float = 0.0, size: int = DRAWN, seed: int = 1) -> np.ndarray:
    out = np.empty(size)
    draws.fill(kind, first, second, stream(seed), out)
    return out


def p_value(values: np.ndarray, law: stats.rv_discrete) -> float:
    """Chi-square over some 60 groups of about equal expectation, by the law's distribution function."""
    assert np.array_equal(values, np.floor(values))
    at = law.ppf(np.linspace(0.0, 1.0, 61)[1:-1])
    edges = np.unique(np.concatenate([at, at - 1.0]))  # groups hold what is above one edge and not above the next
    below = np.concatenate([[0.0], law.cdf(edges), [1.0]])
    groups: list[list[float]] = [[0.0, 0.0]]
    counted = np.bincount(np.searchsorted(edges, values), minlength=len(edges) + 1)
    for e, n in zip(np.diff(below) * len(values), counted, strict=True):
        groups[-1] = [groups[-1][0] + e, groups[-1][1] + n]
        if groups[-1][0] >= 8:
            groups.append([0.0, 0.0])
    last = groups.pop()
    groups[-1] = [groups[-1][0] + last[0], groups[-1][1] + last[1]]
    expected, seen = np.array(groups).T
    assert len(seen) > 1
    assert seen.sum() == len(values)
    return float(stats.chisquare(seen, expected).pvalue)


def z_scores(values: np.ndarray, mean: float, variance: float, kurtosis: float = 3.0) -> tuple[float, float]:
    """Of mean and of variance, in standard errors."""
    n = len(values)
    of_mean = (values.mean() - mean) / math.sqrt(variance / n)
    return of_mean, (((values - mean) ** 2).mean() - variance) / (variance * math.sqrt((kurtosis - 1.0) / n))


MEANS = [1e-3, 0.3, 2.5, 9.999, 10.0, 10.001, 11.5, 40.0, 3e3, 1e6, 1e9]
BINOMIALS = [
    *((n, p) for n in (1.0, 7.0, 25.0) for p in (1e-3, 0.3, 0.5, 0.7, 0.999)),
    (20.0, 0.4999),  # either side of the switch at n p = 10
    (20.0, 0.5),
    (40.0, 0.26),
    (100.0, 0.9),
    (3e4, 0.2),
    (1e6, 1.1e-5),
    (1e6, 0.97),
    (1e9, 0.5),
    (1e9, 2e-9),
]


@pytest.mark.parametrize("mean", MEANS)
def test_poisson(mean: float) -> None:
    assert p_value(drawn(POISSON, mean), stats.poisson(mean)) > ALPHA / len(MEANS)


def test_twin_poisson_of_another_mean() -> None:
    assert p_value(drawn(POISSON, 10.2), stats.poisson(10.0)) < ALPHA / len(MEANS)
    assert p_value(drawn(POISSON, 9.8), stats.poisson(10.0)) < ALPHA / len(MEANS)
    assert p_value(np.round(drawn(NORMAL, 0) * np.sqrt(40.0) + 40.0), stats.poisson(40.0)) < ALPHA / len(MEANS)


@pytest.mark.parametrize(("n", "p"), BINOMIALS)
def test_binomial(n: float, p: float) -> None:
    values = drawn(BINOMIAL, n, p)
    assert values.min() >= 0
    assert values.max() <= n
    assert p_value(values, stats.binom(n, p)) > ALPHA / len(BINOMIALS)


def test_twin_binomial_taken_for_poisson() -> None:
    for n, p in ((25.0, 0.3), (3e4, 0.2)):
        assert p_value(drawn(POISSON, n * p), stats.binom(n, p)) < ALPHA / len(BINOMIALS)


# mean, variance: at small and large means, little and much less than Poisson
REGULARS = [(0.4, 0.3), (3.0, 1.0), (9.0, 8.5), (12.0, 11.0), (12.0, 4.0), (2500.0, 625.0), (1e6, 3e5), (1e9, 2.5e8)]


@pytest.mark.parametrize(("mean", "variance"), REGULARS)
def test_regular_numbers_have_their_mean_and_variance(mean: float, variance: float) -> None:
    """Two z scores each; a binomial's kurtosis is at most that of the Poisson law of its mean."""
    values = drawn(REGULAR, mean, variance)
    assert values.min() >= 0
    kurtosis = max(float(np.mean((values - mean) ** 4) / variance**2), 1.5)
    bound = stats.norm.isf(ALPHA / 4 / len(REGULARS))
    assert max(abs(z) for z in z_scores(values, mean, variance, kurtosis)) < bound
    twin = drawn(POISSON, mean)  # its variance is the mean
    assert abs(z_scores(twin, mean, variance, 3.0 + 1.0 / mean)[1]) > bound


def test_regular_numbers_at_the_edges() -> None:
    for variance in (5.0, 7.0, 4.9999):  # not below the mean, or hardly: Poisson
        assert p_value(drawn(REGULAR, 5.0, variance), stats.poisson(5.0)) > ALPHA / 3
    np.testing.assert_array_equal(drawn(REGULAR, 6.0, 0.0, 100), 6.0)
    np.testing.assert_array_equal(drawn(REGULAR, 6.0, -3.0, 100), 6.0)  # less than nothing is nothing
    np.testing.assert_array_equal(drawn(REGULAR, 0.0, 0.0, 100), 0.0)
    values = drawn(REGULAR, 2.3, 0.0)  # whole numbers allow no less than .21, three trials of 2.3 / 3 have .54
    assert values.max() <= 3
    assert abs(z_scores(values, 2.3, 2.3 * (1 - 2.3 / 3))[0]) < stats.norm.isf(ALPHA / 2)


def test_normal() -> None:
    values = drawn(NORMAL, 0.0)
    assert stats.kstest(values, "norm").pvalue > ALPHA
    assert abs(np.corrcoef(values[:-1], values[1:])[0, 1]) < stats.norm.isf(ALPHA / 2) / math.sqrt(len(values))
    assert stats.kstest(values * 1.02, "norm").pvalue < ALPHA


def test_rounding_keeps_the_mean() -> None:
    own = stream(3)
    for value in (0.2, -0.2, 7.75, -3.01):
        values = np.array([draws.rounded(value, own, 0) for _ in range(20_000)])
        assert set(values) == {math.floor(value), math.floor(value) + 1.0}
        part = value - math.floor(value)
        z = (values.mean() - value) / math.sqrt(part * (1 - part) / len(values))
        assert abs(z) < stats.norm.isf(ALPHA / 8)
        nearest = np.round(values * 0 + value)
        assert abs((nearest.mean() - value) / math.sqrt(part * (1 - part) / len(values))) > stats.norm.isf(ALPHA / 8)
    before = own.copy()
    assert draws.rounded(-4.0, own, 0) == -4.0
    np.testing.assert_array_equal(own, before)  # a whole value draws nothing


def test_what_cannot_vary_draws_nothing() -> None:
    own = stream(4)
    before = own.copy()
    assert draws.poisson(0.0, own, 0) == 0.0
    assert draws.poisson(-1.0, own, 0) == 0.0
    for n, p, expected in ((0.0, 0.5, 0.0), (9.0, 0.0, 0.0), (9.0, 1.0, 9.0), (1e9, 1.0, 1e9)):
        assert draws.binomial(n, p, own, 0) == expected
    assert draws.regular(0.0, 0.0, own, 0) == 0.0
    np.testing.assert_array_equal(own, before)
    assert next_word(own, 0) != next_word(own, 0)


def test_logarithm_of_a_factorial() -> None:
    for k in (0.0, 1.0, 2.0, 9.0, 10.0, 11.0, 57.0, 1e4, 1e9, 1e15):
        assert draws.log_factorial(k) == pytest.approx(math.lgamma(k + 1.0), rel=1e-14, abs=1e-12)
