"""The macroscopic equilibrium: hand cases in 50-digit decimals, scipy's minimiser, and the conditions themselves."""

from __future__ import annotations

from decimal import Decimal, getcontext

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.optimize import LinearConstraint, minimize

from driblet.energetics.cycles import conservation_laws
from driblet.energetics.equilibrium import NoEquilibriumError, equilibrium_composition, reachable

getcontext().prec = 50
TRANSFER = np.array([[-1], [-1], [1], [1]])  # A + B <=> C + D
BINDING = np.array([[-1], [-1], [1]])  # A + B <=> AB


def exact_transfer(K: float, a: float, b: float, c: float, d: float) -> list[float]:
    """A + B <=> C + D solved for its extent by the quadratic formula, in 50 digits."""
    K_, A, B, C, D = (Decimal(v) for v in (K, a, b, c, d))
    p, q, r = K_ - 1, -(K_ * (A + B) + C + D), K_ * A * B - C * D
    x = -r / q if p == 0 else 2 * r / (-q + (q * q - 4 * p * r).sqrt())
    return [float(v) for v in (A - x, B - x, C + x, D + x)]


@pytest.mark.parametrize("K", [1.0, 10.0, 0.007, 843.0, 3.2e5, 1e12, 1e20, 1e-20])
@pytest.mark.parametrize("start", [(4e-3, 2e-3, 0, 0), (1e-3, 1e-3, 0, 0), (0, 0, 5e-3, 1e-6), (1e-9, 1e-2, 1e-4, 0)])
def test_transfer_against_the_quadratic_formula(K: float, start: tuple[float, ...]) -> None:
    found = equilibrium_composition(TRANSFER, np.array([np.log(K)]), np.array(start))
    exact = exact_transfer(K, *start)
    # a rare species is the difference of totals that a double holds to 2e-16 of themselves
    np.testing.assert_allclose(found, exact, rtol=1e-9 + 20 * 2.2e-16 * max(exact) / min(exact))


@pytest.mark.parametrize("K", [1e3, 1e9, 1e20])
@pytest.mark.parametrize(("a", "b"), [(1e-6, 1e-6), (1e-9, 1e-3), (1e-3, 1e-9), (5e-3, 2e-3)])
def test_binding_against_the_quadratic_formula(K: float, a: float, b: float) -> None:
    k, A, B = Decimal(K), Decimal(a), Decimal(b)
    s = A + B + 1 / k
    bound = 2 * A * B / (s + (s * s - 4 * A * B).sqrt())
    found = equilibrium_composition(BINDING, np.array([np.log(K)]), np.array([a, b, 0.0]))
    np.testing.assert_allclose(found, [float(A - bound), float(B - bound), float(bound)], rtol=1e-5)


def test_dimerisation_and_trimerisation() -> None:
    K, total = 2e4, 1e-3
    monomer, dimer = equilibrium_composition(np.array([[-2], [1]]), np.array([np.log(K)]), np.array([total, 0.0]))
    assert monomer == pytest.approx((-1 + np.sqrt(1 + 8 * K * total)) / (4 * K), rel=1e-10)
    assert dimer == pytest.approx((total - monomer) / 2, rel=1e-10)
    three, one = equilibrium_composition(np.array([[-3], [1]]), np.array([np.log(1e12)]), np.array([0.0, 1e-4]))
    assert one / three**3 == pytest.approx(1e12, rel=1e-9)
    assert three + 3 * one == pytest.approx(3e-4, rel=1e-12)


def test_an_open_system_forgets_where_it_started() -> None:
    """nothing <=> A with K' = 2e-4 (a supply from held species) fixes A whatever its amount."""
    for start in (0.0, 1e-9, 1.0):
        assert equilibrium_composition(np.array([[1]]), np.array([np.log(2e-4)]), np.array([start])) == pytest.approx(
            2e-4
        )


def test_a_chain_fed_by_held_species_follows_its_constants() -> None:
    """supply <=> A, A <=> B, 2 B <=> C: no conserved sum, every concentration by multiplication."""
    stoichiometry = np.array([[1, -1, 0], [0, 1, -2], [0, 0, 1]])
    found = equilibrium_composition(stoichiometry, np.log([1e-3, 5.0, 1e4]), np.zeros(3))
    np.testing.assert_allclose(found, [1e-3, 5e-3, 0.25], rtol=1e-12)


@pytest.mark.parametrize(
    ("start", "expected"), [((0, 0), (1e-3, 1e-3)), ((1e-3, 0), (1.6180339887e-3, 0.6180339887e-3))]
)
def test_a_pair_from_nothing_conserves_its_difference(
    start: tuple[float, float], expected: tuple[float, float]
) -> None:
    """nothing <=> A + B at K' = 1e-6; a difference of zero is a total like any other."""
    found = equilibrium_composition(np.array([[1], [1]]), np.array([np.log(1e-6)]), np.array(start, dtype=float))
    np.testing.assert_allclose(found, expected, rtol=1e-9)


def test_no_free_species_is_no_composition() -> None:
    assert equilibrium_composition(np.zeros((0, 2), dtype=np.int64), np.zeros(2), np.zeros(0)).shape == (0,)


def test_a_driven_ring_has_no_equilibrium() -> None:
    ring = np.array([[-1, 0, 1], [1, -1, 0], [0, 1, -1]])
    with pytest.raises(NoEquilibriumError, match="contradict"):
        equilibrium_composition(ring, np.array([1.0, 0.0, 0.0]), np.array([1e-3, 0.0, 0.0]))
    assert equilibrium_composition(ring, np.array([1.0, 1.0, -2.0]), np.array([1e-3, 0, 0])).sum() == pytest.approx(
        1e-3
    )


def test_sums_that_are_all_zero_are_said_to_have_no_composition() -> None:
    with pytest.raises(NoEquilibriumError):
        equilibrium_composition(np.array([[-1], [1]]), np.array([1.0]), np.zeros(2))


networks = st.tuples(st.integers(2, 6), st.integers(1, 5)).flatmap(
    lambda s: arrays(np.int64, s, elements=st.integers(-2, 2))
)


@given(networks, st.data())
def test_the_conditions_hold_on_random_networks(stoichiometry: np.ndarray, data: st.DataObject) -> None:
    """ln Q = ln K' and the conserved sums; both together have one solution only, by convexity of the Gibbs energy."""
    n = stoichiometry.shape[0]
    ln_K = stoichiometry.T @ data.draw(arrays(float, n, elements=st.floats(-15, 15)))
    initial = data.draw(arrays(float, n, elements=st.floats(1e-6, 1e-2)))
    assume(np.abs(stoichiometry).sum(axis=1).all())
    found = equilibrium_composition(stoichiometry, ln_K, initial)
    assert (found > 0).all()
    np.testing.assert_allclose(stoichiometry.T @ np.log(found), ln_K, atol=1e-6)
    laws = conservation_laws(stoichiometry)
    np.testing.assert_allclose(
        laws @ found, laws @ initial, atol=1e-8 * float((np.abs(laws) @ (found + initial)).max(initial=1e-30))
    )


@pytest.mark.parametrize("seed", range(6))
def test_the_gibbs_energy_is_least_there_by_scipys_minimiser(seed: int) -> None:
    """An independent route: minimise sum c (ln c - 1 - g) over extents of reaction, positivity as linear constraints."""
    rng = np.random.default_rng(seed)
    n, m = 5, 3
    stoichiometry = np.zeros((n, m), dtype=np.int64)
    for j in range(m):
        a, b, c = rng.choice(n, 3, replace=False)
        stoichiometry[[a, b, c], j] = [-1, -1, 1]
    g = rng.uniform(-2, 2, n)
    initial = rng.uniform(0.5, 2, n)
    found = equilibrium_composition(stoichiometry, stoichiometry.T @ g, initial)

    def energy(extent: np.ndarray) -> float:
        c = np.maximum(initial + stoichiometry @ extent, 1e-12)
        return float(np.sum(c * (np.log(c) - 1 - g)))

    def curvature(extent: np.ndarray) -> np.ndarray:
        return (stoichiometry.T / np.maximum(initial + stoichiometry @ extent, 1e-12)) @ stoichiometry

    positive = LinearConstraint(stoichiometry, 1e-9 - initial, np.inf, keep_feasible=True)
    options = {"gtol": 1e-9, "xtol": 1e-12}
    best = minimize(energy, np.zeros(m), method="trust-constr", hess=curvature, constraints=positive, options=options)
    np.testing.assert_allclose(found, initial + stoichiometry @ best.x, rtol=2e-4, atol=2e-5)


def test_reachable_grows_from_what_is_present() -> None:
    left, right = [{0}, {1, 2}, {3}, set()], [{1}, {3}, {4}, {5}]
    assert reachable(left[:3], right[:3], {0}) == ({0, 1}, [True, False, False])
    assert reachable(left[:3], right[:3], {0, 2}) == ({0, 1, 2, 3, 4}, [True, True, True])
    assert reachable(left[:3], right[:3], {4}) == ({0, 1, 2, 3, 4}, [True, True, True])  # backwards
    assert reachable(left[3:], right[3:], set()) == ({5}, [True])
    assert reachable([], [], {1}) == ({1}, [])
