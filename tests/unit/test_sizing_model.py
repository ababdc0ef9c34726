"""Bounds and curves behind a sizing against scipy's own, and roots of curves that are known exactly."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats
from scipy.optimize import minimize

from driblet_analysis.sizing_model import (
    LAWS,
    Trials,
    clopper_pearson,
    fewest_to_show,
    fit_root,
    isotonic_bracket,
    mcnemar,
)


@pytest.mark.parametrize(("met", "trials"), [(0, 7), (3, 7), (7, 7), (94, 100), (1, 2000)])
@pytest.mark.parametrize("level", [0.95, 0.99])
def test_exact_limits_are_those_of_scipy(met: int, trials: int, level: float) -> None:
    """Against scipy.stats.binomtest(...).proportion_ci(method="exact"), Clopper & Pearson's limits."""
    ours = clopper_pearson(met, trials, level)
    theirs = stats.binomtest(met, trials).proportion_ci(level, method="exact")
    assert (ours.low, ours.high) == pytest.approx((theirs.low, theirs.high), rel=1e-9, abs=1e-12)


def test_fewest_that_show_a_share_are_the_fewest() -> None:
    for target in (0.5, 0.9, 0.95, 0.99):
        n = fewest_to_show(target)
        assert clopper_pearson(n, n).low > target
        assert clopper_pearson(n - 1, n - 1).low <= target


def test_paired_test_is_the_exact_binomial_one() -> None:
    """Against scipy.stats.binomtest of the pairs that differ (McNemar's exact test)."""
    first = np.array([1] * 30 + [0] * 5 + [1] * 9 + [0] * 6, dtype=np.int8)
    second = np.array([1] * 30 + [1] * 5 + [0] * 9 + [0] * 6, dtype=np.int8)
    assert mcnemar(first, second) == pytest.approx(stats.binomtest(9, 14, alternative="greater").pvalue)
    assert mcnemar(first, first) == 1.0


def test_probit_root_is_that_of_a_general_optimiser() -> None:
    """The likelihood of a probit, maximised by scipy.optimize over intercept and slope, has its root at the same place."""
    u = np.array([-1.0, -0.3, 0.2, 0.9, 1.5])
    trials = np.full(5, 200.0)
    met = np.array([35.0, 85.0, 118.0, 163.0, 187.0])

    def minus_likelihood(x: np.ndarray) -> float:
        p = np.clip(stats.norm.cdf(x[0] + x[1] * u), 1e-12, 1 - 1e-12)
        return -float(np.sum(met * np.log(p) + (trials - met) * np.log1p(-p)))

    best = minimize(minus_likelihood, [0.0, 1.0], method="Nelder-Mead", options={"xatol": 1e-8, "fatol": 1e-10})
    for target in (0.5, 0.9):
        laws = {name: fit for name, fit in LAWS.items() if name == "probit"}
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr("driblet_analysis.sizing_model.LAWS", laws)
            root = fit_root(Trials(u, trials, met), target, 1, (-2.0, 2.0))
        assert root.theta.value == pytest.approx((stats.norm.ppf(target) - best.x[0]) / best.x[1], abs=2e-3)
        assert root.slope == pytest.approx(best.x[1], rel=0.02)
        # the ends of the profile interval: twice the log likelihood has fallen by chi-squared's 95 % point there
        for end in (root.theta.low, root.theta.high):
            held = min(
                minus_likelihood(np.array([stats.norm.ppf(target) - b * end, b])) for b in np.linspace(0.5, 2.0, 3001)
            )
            assert 2 * (held - best.fun) == pytest.approx(stats.chi2.ppf(0.95, 1), abs=0.05)


def poisson_trials(seed: int, size: int) -> Trials:
    mean = np.array([2.4, 2.6, 3.3, 3.6])
    met = np.random.default_rng(seed).binomial(size, 1 - np.exp(-mean))
    return Trials(np.log(mean), np.full(4, float(size)), met.astype(float))


def test_interval_of_a_poisson_root_covers_it() -> None:
    """P(at least one) = 0.95 at a mean of -ln 0.05. 95 % intervals, 200 data sets: fewer than 180 has a chance of 2e-3."""
    limits = (math.log(0.5), math.log(20.0))
    exact = math.log(-math.log(0.05))
    roots = [fit_root(poisson_trials(seed, 300), 0.95, 1, limits) for seed in range(200)]
    assert sum(r.theta.low <= exact <= r.theta.high for r in roots) >= 180
    share = [1 - math.exp(-math.exp(r.theta.value)) for r in roots]
    assert sum(r.share.low <= s <= r.share.high for r, s in zip(roots, share, strict=True)) >= 180


def test_interval_of_another_root_does_not() -> None:
    """The twin: a root that is 40 % off is covered by hardly any interval."""
    wrong = math.log(-1.4 * math.log(0.05))
    roots = [fit_root(poisson_trials(seed, 300), 0.95, 1, (math.log(0.5), math.log(20.0))) for seed in range(50)]
    assert sum(r.theta.low <= wrong <= r.theta.high for r in roots) < 25


def test_falling_shares_mirror_rising_ones() -> None:
    data = poisson_trials(1, 300)
    rising = fit_root(data, 0.95, 1, (-1.0, 3.0))
    falling = fit_root(Trials(-data.u[::-1], data.trials[::-1], data.met[::-1]), 0.95, -1, (-3.0, 1.0))
    assert falling.theta.value == pytest.approx(-rising.theta.value, abs=1e-3)
    assert falling.theta.low == pytest.approx(-rising.theta.high, abs=1e-3)
    assert falling.slope < 0


def test_far_values_that_no_law_fits_are_left_out() -> None:
    """Shares that level off at 0.6 for small values would bend any smooth law; the root is told by what is near."""
    u = np.array([-3.0, -2.0, -0.2, 0.0, 0.2])
    n = np.full(5, 1000.0)
    met = np.round(n * np.array([0.6, 0.6, 0.92, 0.95, 0.97]))
    root = fit_root(Trials(u, n, met), 0.95, 1, (-4.0, 2.0))
    assert -3.0 not in root.used
    assert root.theta.value == pytest.approx(0.0, abs=0.06)


def test_brackets_need_no_law() -> None:
    u = np.array([0.0, 1.0, 2.0, 3.0])
    n = np.full(4, 400.0)
    found = isotonic_bracket(Trials(u, n, np.array([40.0, 200.0, 390.0, 399.0])), 0.9, 1)
    assert (found.low, found.high) == (1.0, 2.0)
    assert 1.0 < found.value < 2.0
    mirrored = isotonic_bracket(Trials(u, n, np.array([399.0, 390.0, 200.0, 40.0])), 0.9, -1)
    assert (mirrored.low, mirrored.high) == (1.0, 2.0)
    open_ended = isotonic_bracket(Trials(u, n, np.array([40.0, 40.0, 40.0, 40.0])), 0.9, 1)
    assert open_ended.high == math.inf
