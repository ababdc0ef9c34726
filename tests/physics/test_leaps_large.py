"""Leaps in networks of many pairs, where the implicit equation is solved in other ways: chains of isomers, in closed form.

Molecules are independent of each other: of N_j that start as isomer j each is isomer i at time t with the probability
P_ij = exp(t Q)_ij, so that means are sums of N_j P_ij and variances of N_j P_ij (1 - P_ij) (binomial; common practice). Rates lie
a factor of a hundred apart. Holm's correction over means and variances of all isomers; false-alarm rate 1e-3 each.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats
from scipy.linalg import expm

import driblet
from driblet.engines.leap_arrays import IMPLICIT, LEAPS, REJECTED, STIFFEST
from driblet.engines.leap_steps import EXPLICIT_BELOW, FEW, MOST_SOLVED
from driblet.statistics import holm
from tests.physics.support import FALSE_ALARM
from tests.unit.leap_cases import HEAD, Leaped, leap

COPIES = 20_000  # of every other isomer
TIMES = np.array([0.0, 0.3, 2.0])
REPLICATES = 400


def rate(i: int) -> float:
    """Of isomer i to the next and back."""
    return 10.0 if i % 3 == 0 else 0.1


def chain(isomers: int) -> driblet.System:
    names = [f"S{i}" for i in range(isomers)]
    lines = [f'{s} = "{COPIES * (i % 2)} copies"' for i, s in enumerate(names)]
    rows = [
        f'r{i} = {{ equation = "{names[i]} <=> {names[i + 1]}", K = 1, forward = "{rate(i)} /s" }}'
        for i in range(isomers - 1)
    ]
    return driblet.loads(HEAD + "\n".join([*lines, "[reactions]", *rows]))


def smallest_p(made: Leaped, isomers: int, slower: float = 1.0) -> float:
    Q = np.zeros((isomers, isomers))
    for i in range(isomers - 1):
        k = rate(i) * slower
        Q[i, i] -= k
        Q[i + 1, i] += k
        Q[i + 1, i + 1] -= k
        Q[i, i + 1] += k
    start = COPIES * (np.arange(isomers) % 2)
    p = []
    for k, t in enumerate(TIMES[1:], start=1):
        P = expm(t * Q)
        mean, variance = P @ start, (P * (1 - P)) @ start
        n = made.samples.counts[:, k].astype(float)
        assert (n.sum(axis=1) == start.sum()).all()
        p.append(2 * stats.norm.sf(np.abs(n.mean(axis=0) - mean) / np.sqrt(variance / len(n))))
        ratio = n.var(axis=0, ddof=1) / variance
        p.append(2 * stats.norm.sf(np.abs(ratio - 1) / np.sqrt(2 / (len(n) - 1))))
    return float(holm(np.concatenate(p)).min())


@pytest.mark.parametrize(
    ("isomers", "stiffness"), [(6, 5.0), (20, 0.15), (20, 5.0), (60, 5.0), (MOST_SOLVED + 10, 5.0)]
)
def test_means_and_variances_of_isomers(isomers: int, stiffness: float) -> None:
    """At the usual tolerance. A fast pair that starts far from its equilibrium rings for some leaps: six isomers are .16 standard
    deviations off at 0.3 s by a tolerance of .03, .47 (.2 % of a count) by .1, and .03 by .01."""
    made = leap(chain(isomers), TIMES, REPLICATES, tolerance=0.01, stiffness=stiffness)
    iterated = isomers - 1 > MOST_SOLVED or stiffness < EXPLICIT_BELOW  # not solved by Newton's method
    assert (made.work[:, IMPLICIT] == 0).all() if iterated else (made.work[:, IMPLICIT] > 0).all()
    assert made.work[:, STIFFEST].max() <= (EXPLICIT_BELOW if isomers - 1 > MOST_SOLVED else stiffness) * (1 + 1e-9)
    assert (made.work[:, LEAPS] > 20).all()
    assert made.work[:, REJECTED].sum() < 0.01 * made.work[:, LEAPS].sum()
    assert smallest_p(made, isomers) > FALSE_ALARM
    assert smallest_p(made, isomers, slower=0.98) < FALSE_ALARM  # the twin


def test_which_ways_there_are() -> None:
    assert 5 <= FEW < 19
    assert 60 <= MOST_SOLVED < 200
