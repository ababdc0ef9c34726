"""The decaying-dimerising reaction set, simulated and by master equation.

Gillespie, J. Chem. Phys. 115:1716, 2001: S1 -> nothing (c1 = 1), 2 S1 -> S2 (c2 = 0.002) and back (c3 = 0.5), S2 -> S3
(c4 = 0.04), all 1/s; from memory. There c2 x1 (x1 - 1)/2 is the propensity, so half of c2 is the constant per falling
factorial. Started from 40 copies of S1, so that its master equation can be solved by scipy's expm_multiply.
"""

import numpy as np
import pytest
from scipy import stats

import driblet
from driblet.network import Network
from driblet_analysis.references.master_equation import MasterEquation, Transient
from tests.physics.support import FALSE_ALARM, chi_square, counts_at, squares_for_falling_factorials, system, z_of_mean

TIMES = np.array([0.0, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0])
START = [40, 0, 0]


def reaction_set(c2: float = 0.002) -> driblet.System:
    return system(
        {"S1": '"40 copies"', "S2": '"0 copies"', "S3": '"0 copies"'},
        {
            "decay": 'equation = "S1 -> nothing", one_way = "as published", forward = "1 /s"',
            "pair": f'equation = "2 S1 <=> S2", forward = "{c2 / 2} /M/s", backward = "0.5 /s"',
            "convert": 'equation = "S2 -> S3", one_way = "as published", forward = "0.04 /s"',
        },
    )


@pytest.fixture(scope="module")
def exact() -> Transient:
    return MasterEquation.of(Network.of(reaction_set()), START, 1.0).transient(TIMES)


@pytest.fixture(scope="module")
def exact_pairing() -> Transient:
    """c2 a hundred times larger, so that S2 matters as much as it did with the paper's 100,000 copies."""
    return MasterEquation.of(Network.of(reaction_set(0.2)), START, 1.0).transient(TIMES)


def test_states(exact: Transient) -> None:
    """All of S1 + 2 (S2 + S3) <= 40, and no probability is lost."""
    s1, s2, s3 = exact.states.T
    assert len(exact.states) == sum(1 for a in range(41) for b in range(21) for c in range(21) if a + 2 * (b + c) <= 40)
    assert (s1 + 2 * (s2 + s3)).max() == 40
    np.testing.assert_allclose(exact.probability.sum(axis=1), 1, atol=1e-12)


def p_values(counts: np.ndarray, exact: Transient) -> list[float]:
    """Chi-square of S1, S2 and S3 at each time, and the z of each mean as a p value."""
    found = []
    for k in range(1, len(TIMES)):
        law = exact.law(k)
        mean, variance = law.mean(), np.diag(law.covariance())
        for i in range(3):
            found.append(chi_square(counts[:, k, i], *law.marginal(i)))
            found.append(2 * float(stats.norm.sf(abs(z_of_mean(counts[:, k, i], mean[i], variance[i])))))
    return found


def test_simulated_laws(exact: Transient) -> None:
    """36 p values, Bonferroni, false-alarm rate 1e-3."""
    assert min(p_values(counts_at(reaction_set(), TIMES, 10_000, seed=6), exact)) > FALSE_ALARM / 36


def test_simulated_laws_where_pairing_matters(exact_pairing: Transient) -> None:
    assert min(p_values(counts_at(reaction_set(0.2), TIMES, 10_000, seed=7), exact_pairing)) > FALSE_ALARM / 36


def test_twin_squares_for_falling_factorials(exact_pairing: Transient, monkeypatch: pytest.MonkeyPatch) -> None:
    squares_for_falling_factorials(monkeypatch)
    counts = counts_at(reaction_set(0.2), TIMES, 10_000, seed=7)
    # a lone monomer pairs with itself in the twin, which leaves -1: no law has that, so look where it cannot have happened
    assert (counts < 0).any() or min(p_values(counts, exact_pairing)) < FALSE_ALARM / 36
    early = MasterEquation.of(Network.of(reaction_set(0.2)), START, 1.0).transient(TIMES).law(1)
    z = z_of_mean(counts[:, 1, 1], early.mean()[1], early.covariance()[1, 1])
    assert abs(z) > 5


def test_twin_half_of_c2_forgotten(exact: Transient) -> None:
    assert min(p_values(counts_at(reaction_set(0.004), TIMES, 10_000, seed=6), exact)) < FALSE_ALARM / 36
