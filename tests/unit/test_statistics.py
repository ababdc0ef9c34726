"""Pure statistics against published worked examples and scipy."""

import numpy as np
import pytest
from scipy import stats

from driblet.statistics import holm, hotelling, jackknife, normal_p, randomised_pit, student_t, uniformity

# Johnson & Wichern, Applied Multivariate Statistical Analysis, table 5.1 (perspiration of 20 women), from memory; the
# means the book prints (4.640, 45.400, 9.965) confirm the numbers below
SWEAT = np.array(
    [
        [3.7, 48.5, 9.3], [5.7, 65.1, 8.0], [3.8, 47.2, 10.9], [3.2, 53.2, 12.0], [3.1, 55.5, 9.7],
        [4.6, 36.1, 7.9], [2.4, 24.8, 14.0], [7.2, 33.1, 7.6], [6.7, 47.4, 8.5], [5.4, 54.1, 11.3],
        [3.9, 36.9, 12.7], [4.5, 58.8, 12.3], [3.5, 27.8, 9.8], [4.5, 40.2, 8.4], [1.5, 13.5, 10.1],
        [8.5, 56.4, 7.1], [4.5, 71.6, 8.2], [6.5, 52.8, 10.9], [4.1, 44.1, 11.2], [5.5, 40.9, 9.4],
    ]
)  # fmt: skip


def test_hotelling_worked_example() -> None:
    """Example 5.2 of the same book: T² = 9.74 against mean (4, 50, 10); its critical value at 10 % is 8.18."""
    assert SWEAT.mean(axis=0) == pytest.approx([4.640, 45.400, 9.965], abs=5e-4)
    result = hotelling(SWEAT - [4.0, 50.0, 10.0])
    assert result.statistic == pytest.approx(9.74, abs=0.005)
    assert result.dimensions == 3
    assert result.p == pytest.approx(stats.f.sf(17 / (3 * 19) * 9.74, 3, 17), rel=2e-3)


def test_hotelling_of_one_dimension_is_student() -> None:
    x = SWEAT[:, :1] - 4.0
    t = stats.ttest_1samp(SWEAT[:, 0], 4.0)
    result = hotelling(x)
    assert result.statistic == pytest.approx(t.statistic**2)
    assert result.p == pytest.approx(t.pvalue)


def test_hotelling_leaves_out_dependent_directions() -> None:
    doubled = np.column_stack([SWEAT - [4.0, 50.0, 10.0], SWEAT[:, 0] + SWEAT[:, 1] - 54.0, np.zeros(20)])
    assert hotelling(doubled).statistic == pytest.approx(hotelling(SWEAT - [4.0, 50.0, 10.0]).statistic)
    with pytest.raises(ValueError, match="cannot test"):
        hotelling(SWEAT[:3])  # two degrees of freedom for three dimensions


def test_holm_worked_example() -> None:
    """p = .01, .04, .03, .005 become .03, .06, .06, .02 (a common textbook example, no source)."""
    assert holm(np.array([0.01, 0.04, 0.03, 0.005])) == pytest.approx([0.03, 0.06, 0.06, 0.02])
    assert holm(np.array([0.6, 0.9])) == pytest.approx([1.0, 1.0])


def test_student_and_normal_against_scipy() -> None:
    x = np.random.default_rng(3).normal(0.2, 1.0, 37)
    assert student_t(x) == pytest.approx(tuple(stats.ttest_1samp(x, 0.0)))
    assert normal_p(np.array([1.959963984540054])) == pytest.approx([0.05])


@pytest.mark.parametrize("n", [20, 60, 400])
def test_uniformity_against_scipy(n: int) -> None:
    """The limiting law with Stephens' modification against the exact one: within 2 % of p or 0.01."""
    for power in (1.0, 1.15, 0.9):
        x = np.random.default_rng(n).random(n) ** power
        distance, p = uniformity(x)
        exact = stats.kstest(x, "uniform")
        assert distance == pytest.approx(exact.statistic)
        assert p == pytest.approx(exact.pvalue, rel=0.02, abs=0.015)


def test_randomised_transform_of_a_binomial_is_uniform() -> None:
    generator = np.random.default_rng(5)
    n = generator.binomial(6, 0.3, 4000)
    law = stats.binom(6, 0.3)
    u = randomised_pit(law.cdf(n - 1), law.pmf(n), generator.random(4000))
    assert stats.kstest(u, "uniform").pvalue > 1e-3  # false-alarm rate 0.1 %, fixed seed
    off = stats.binom(6, 0.34)  # the broken twin
    assert stats.kstest(randomised_pit(off.cdf(n - 1), off.pmf(n), generator.random(4000)), "uniform").pvalue < 1e-6


def test_jackknife_of_a_mean_is_its_standard_error() -> None:
    x = SWEAT[:, :1]
    value, error = jackknife(lambda mean: float(mean[0]), x)
    assert value == pytest.approx(x.mean())
    assert error == pytest.approx(stats.sem(x[:, 0]))
