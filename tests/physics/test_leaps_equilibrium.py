"""Leaps at equilibrium, where the law is known, and in a space small enough for its master equation.

A leap far longer than the relaxation keeps the variance of a linear system by the trapezoidal rule, has 2 / (2 - x) times it by
explicit steps and 2 / (2 + x) times by implicit ones, x = tau * lambda (Cao, Petzold, Rathinam & Gillespie, J. Chem. Phys.
121:12169, 2004; from memory, and one line to derive). Here A + B <=> C, 3,000 copies each, which is not linear. Between leaps
fluctuations last by (1 - x/2) / (1 + x/2), explicit 1 - x, where exp(-x) is right: short leaps where time courses matter.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

import driblet
from driblet.engine_choice import LONGEST_LEAP, LONGEST_LEAP_IN_TIME, stiffness_for
from driblet.engines.leap_arrays import EVENTS, IMPLICIT, LEAPS, STIFFEST
from driblet.network import Network
from driblet_analysis.references.count_equilibrium import count_law
from driblet_analysis.references.master_equation import MasterEquation, Transient
from tests.physics.support import FALSE_ALARM, chi_square
from tests.unit.leap_cases import HEAD, leap

N = 3000
MEET = HEAD + (
    f'A = "{N} copies"\nB = "{N} copies"\nC = "{N} copies"\n[reactions]\n'
    f'meet = {{ equation = "A + B <=> C", K = "{1 / N!r} /M", backward = "1 /s" }}\n'
)
LAMBDA = 3.0  # b (1/A + 1/B + 1/C) = 3 /s at b = 3,000 firings a second both ways
BOUND = 0.03
Array = np.ndarray


def by_engine(longest: float, spacing: float, replicates: int, samples: int = 21) -> Array:
    """Copies of C at times spaced by `spacing` relaxation times, by leaps of `longest` of them; a leap ends at each sample."""
    times = np.arange(samples) * spacing / LAMBDA
    made = leap(driblet.loads(MEET), times, replicates, tolerance=0.3, stiffness=longest)
    assert made.work[:, STIFFEST] == pytest.approx(min(longest, spacing), rel=0.05)
    assert made.work[:, LEAPS].mean() > 0.9 * (samples - 1) * max(1.0, spacing / longest)
    assert made.work[:, IMPLICIT].sum() > 0.9 * made.work[:, LEAPS].sum() or min(longest, spacing) < 0.2
    return made.samples.counts[:, 1:, 2].astype(float)


def by_numpy(x: float, kind: str, replicates: int, steps: int) -> Array:
    """Broken twins: the same pair by steps of x relaxation times that are explicit, or implicit on the drift alone."""
    rng = np.random.default_rng(1)
    tau = x / LAMBDA
    c = np.full(replicates, float(N))

    def net(c: Array) -> Array:
        return (2 * N - c) ** 2 / N - c

    kept = []
    for k in range(steps):
        there, back = (2 * N - c) ** 2 / N * tau, c * tau
        drawn = rng.poisson(there) - rng.poisson(back)
        if kind == "explicit":
            c = np.clip(c + drawn, 0.0, 2.0 * N)
        else:
            middle = c + drawn - tau * net(c)
            end = c.copy()
            for _ in range(20):  # Newton's method for end = middle + tau net(end)
                slope = -2 * (2 * N - end) / N - 1
                end -= (end - middle - tau * net(end)) / (1 - tau * slope)
            c = np.rint(end)
        if k >= steps // 3:
            kept.append(c)
    return np.array(kept)


@pytest.fixture(scope="module")
def variance() -> float:
    law = count_law(driblet.loads(MEET), [N, N, N], 1.0)
    assert law is not None
    return float(law.covariance()[2, 2])


@pytest.mark.parametrize("x", [0.5, 1.0, 2.0, 5.0])
def test_variance_is_that_of_the_product_form(x: float, variance: float) -> None:
    """Within 3 %, its standard error .63 %: on an engine without any bias the bound fails by chance in 2e-6 of runs."""
    c = by_engine(x, 10.1 * max(x, 1.0), 2500)
    assert c.size == 50_000
    assert abs(c.var() / variance - 1) < BOUND
    assert abs(c.mean() - N) < 0.01 * np.sqrt(variance) + stats.norm.isf(1e-4) * np.sqrt(variance / c.size)


@pytest.mark.parametrize(("kind", "sign"), [("explicit", -1.0), ("implicit", 1.0)])
def test_twins_have_the_variances_they_are_known_for(kind: str, sign: float, variance: float) -> None:
    for x in (0.5, 1.0):
        ratio = by_numpy(x, kind, 4000, 60).var() / variance
        assert ratio == pytest.approx(2.0 / (2.0 + sign * x), rel=0.05)
        assert abs(ratio - 1) > 5 * BOUND


def test_twin_explicit_steps_beyond_their_bound(variance: float) -> None:
    assert by_numpy(2.5, "explicit", 500, 60).var() / variance > 10


@pytest.mark.parametrize("x", [1.0, 5.0])
def test_error_of_the_autocorrelation(x: float) -> None:
    """After one leap of x relaxation times, 50,000 pairs: that of the trapezoid, to 1e-3 by chance. It misses exp(-x) by -.035 at
    x = 1 and by -.435 at x = 5, so that leaps are at most one relaxation time long where requirements ask for a course."""
    c = by_engine(1.2 * x, x, 1000, 61)[:, 9:]
    away = c - c.mean()
    found = float((away[:, 1:] * away[:, :-1]).mean() / away.var())
    rule = (1 - x / 2) / (1 + x / 2)
    assert abs(found - rule) < stats.norm.isf(FALSE_ALARM / 4) / np.sqrt(away[:, 1:].size) + 2e-3  # quadratic terms
    error = found - np.exp(-x)
    assert error == pytest.approx({1.0: -0.0345, 5.0: -0.4353}[x], abs=0.02)
    system = driblet.loads(MEET)
    assert stiffness_for(system) == LONGEST_LEAP == 5.0
    asks = driblet.loads(MEET + '[requirements.some]\nmust = "C > 100"\nwhen = "throughout"\n[run]\nduration = "5 s"\n')
    assert stiffness_for(asks) == LONGEST_LEAP_IN_TIME == 1.0


def test_autocorrelation_within_a_few_relaxation_times_of_short_leaps() -> None:
    """Sampled ten times more often than it relaxes, leaps at most .1: exp(-lag), false-alarm rate 1e-3."""
    c = by_engine(1.0, 0.1, 2000, 61)[:, 30:]
    away = c - c.mean()
    for lag in (1, 10, 20):
        found = float((away[:, lag] * away[:, 0]).mean() / away.var())
        assert abs(found - np.exp(-0.1 * lag)) < stats.norm.isf(FALSE_ALARM / 6) / np.sqrt(len(c)) + 2e-3


SMALL = HEAD + (
    'A = "100 copies"\nB = "80 copies"\nC = "0 copies"\nD = "20 copies"\n[reactions]\n'
    'meet = { equation = "A + B <=> C", K = "0.05 /M", backward = "1 /s" }\n'
    'pair = { equation = "2 C <=> D", K = "0.05 /M", backward = "0.3 /s" }\n'
)
TIMES = np.array([0.0, 0.05, 0.4, 2.0, 4.0])


@pytest.fixture(scope="module")
def exact() -> Transient:
    return MasterEquation.of(Network.of(driblet.loads(SMALL)), [100, 80, 0, 20], 1.0).transient(TIMES)


def smallest_p(counts: Array, exact: Transient) -> float:
    laws = [exact.law(k) for k in range(len(TIMES))]
    return min(chi_square(counts[:, k, i], *laws[k].marginal(i)) for k in range(1, len(TIMES)) for i in range(4))


def test_two_hundred_molecules_by_master_equation(exact: Transient) -> None:
    """16 chi-squares of 10,000 compartments, Bonferroni, false-alarm rate 1e-3. Leaps and exact events take turns."""
    made = leap(driblet.loads(SMALL), TIMES, 10_000, tolerance=0.1)
    assert made.work[:, LEAPS].sum() > 20_000
    assert made.work[:, EVENTS].sum() > 100_000
    assert smallest_p(made.samples.counts, exact) > FALSE_ALARM / 16


def test_twin_too_wide_a_tolerance_shows(exact: Transient) -> None:
    """Leaps in which propensities change by a third: variances 6 to 9 % off, and found out."""
    made = leap(driblet.loads(SMALL), TIMES, 10_000, tolerance=0.3)
    assert smallest_p(made.samples.counts, exact) < FALSE_ALARM / 16
