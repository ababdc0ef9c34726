"""Null spaces, conservation laws and closure in whole numbers, against numpy's rank and least squares."""

from __future__ import annotations

from math import gcd

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from numpy.linalg import matrix_rank

from driblet.energetics.cycles import (
    conservation_laws,
    cycles,
    dependencies,
    emergent_cycles,
    reconciled,
    unclosed_cycles,
)


def matrices(rows: int = 8, columns: int = 8, largest: int = 3) -> st.SearchStrategy[np.ndarray]:
    shapes = st.tuples(st.integers(0, rows), st.integers(0, columns))
    return shapes.flatmap(lambda s: arrays(np.int64, s, elements=st.integers(-largest, largest)))


def rank(matrix: np.ndarray) -> int:
    return int(matrix_rank(matrix.astype(float))) if matrix.size else 0


@given(matrices())
def test_dependencies_are_a_basis_of_the_left_null_space(rows: np.ndarray) -> None:
    basis = dependencies(rows)
    assert not (basis @ rows).any()
    assert len(basis) == rows.shape[0] - rank(rows)
    assert rank(basis) == len(basis)
    for vector in basis:
        assert gcd(*(int(v) for v in vector)) == 1


@given(matrices(6, 6, 1000))
def test_dependencies_stay_exact_with_large_numbers(rows: np.ndarray) -> None:
    """Checked in Python's unbounded integers, where a float rank could be fooled."""
    basis = dependencies(rows)
    product = basis.astype(object) @ rows.astype(object) if rows.shape[1] else np.zeros(0)
    assert not product.any()


def test_a_tangled_network_keeps_whole_numbers_beyond_64_bits() -> None:
    rng = np.random.default_rng(0)
    rows = rng.integers(-3, 4, (40, 30))
    basis = dependencies(rows)
    assert max(abs(int(v)) for v in basis.ravel()) > 2**63
    assert not (basis @ rows.astype(object)).any()
    assert unclosed_cycles(rows.T, rows @ rng.normal(size=30)) == []
    assert emergent_cycles(rows.T, np.arange(30) < 15).shape == (15, 40)
    assert not (conservation_laws(rows).astype(object) @ rows.astype(object)).any()


@given(matrices(7, 5))
def test_doubling_a_row_adds_a_dependency(rows: np.ndarray) -> None:
    assert len(dependencies(np.vstack([rows, rows]))) == len(dependencies(rows)) + rows.shape[0]


@given(matrices())
def test_cycles_change_nothing_and_laws_conserve(stoichiometry: np.ndarray) -> None:
    found, laws = cycles(stoichiometry), conservation_laws(stoichiometry)
    assert found.shape == (stoichiometry.shape[1] - rank(stoichiometry), stoichiometry.shape[1])
    assert laws.shape == (stoichiometry.shape[0] - rank(stoichiometry), stoichiometry.shape[0])
    assert not (stoichiometry @ found.T).any()
    assert not (laws @ stoichiometry).any()
    assert rank(laws) == len(laws), "lifting a law to non-negative weights must not lose it"


def test_a_triangle_is_one_cycle_and_one_law() -> None:
    triangle = np.array([[-1, 0, 1], [1, -1, 0], [0, 1, -1]])
    assert cycles(triangle).tolist() == [[1, 1, 1]]
    assert conservation_laws(triangle).tolist() == [[1, 1, 1]]


def test_conserved_moieties_of_a_kinase_come_out_positive() -> None:
    """ATP + sugar <=> ADP + sugarP; ATP <=> ADP + Pi; adenylates, sugars and phosphate are what a biochemist expects."""
    order = ["ATP", "ADP", "Pi", "sugar", "sugarP"]
    stoichiometry = np.array([[-1, -1], [1, 1], [0, 1], [-1, 0], [1, 0]])
    laws = conservation_laws(stoichiometry)
    assert len(laws) == 3
    assert (laws >= 0).all(), dict(zip(order, laws.T, strict=True))
    span = np.vstack([laws, [[1, 1, 0, 0, 0], [0, 0, 0, 1, 1], [1, 0, 1, 0, 1]]])
    assert rank(span) == 3


def test_a_law_that_cannot_be_positive_is_kept() -> None:
    """nothing <=> A + B conserves A - B and nothing else."""
    laws = conservation_laws(np.array([[1], [1]]))
    assert sorted(abs(laws[0])) == [1, 1]
    assert laws[0].sum() == 0


def test_no_reactions_conserve_everything() -> None:
    assert conservation_laws(np.zeros((3, 0), dtype=np.int64)).tolist() == np.eye(3, dtype=int).tolist()
    assert cycles(np.zeros((0, 2), dtype=np.int64)).tolist() == np.eye(2, dtype=int).tolist()


@given(matrices(6, 7), st.data())
def test_energies_from_potentials_close_every_cycle(stoichiometry: np.ndarray, data: st.DataObject) -> None:
    """First law: any assignment of energies to species gives reaction energies that close (dG = S^T g)."""
    g = data.draw(arrays(float, stoichiometry.shape[0], elements=st.floats(-2000, 2000)))
    dG0 = stoichiometry.T @ g
    assert unclosed_cycles(stoichiometry, dG0) == []
    for j in range(stoichiometry.shape[1]):
        moved = dG0.copy()
        moved[j] += 0.01
        opened = unclosed_cycles(stoichiometry, moved)
        on_a_cycle = bool(cycles(stoichiometry)[:, j].any())
        assert bool(opened) == on_a_cycle
        for cycle in opened:
            assert cycle.excess == pytest.approx(0.01 * cycle.reactions[j], rel=1e-4)


@given(matrices(6, 7), st.data())
def test_emergent_cycles_complete_the_cycles(stoichiometry: np.ndarray, data: st.DataObject) -> None:
    held = data.draw(arrays(bool, stoichiometry.shape[0]))
    emergent = emergent_cycles(stoichiometry, held)
    free = stoichiometry[~held]
    everything = np.vstack([cycles(stoichiometry), emergent])
    assert not (free @ emergent.T).any()
    assert rank(everything) == len(everything) == stoichiometry.shape[1] - rank(free)
    for vector in emergent:
        assert (stoichiometry[held] @ vector).any(), "an emergent cycle turns over something held"


def test_a_driven_cycle_emerges_when_its_fuel_is_held() -> None:
    """E + ATP <=> EP + ADP; EP <=> E + Pi: the sum hydrolyses ATP, a cycle only once ATP, ADP, Pi are held."""
    stoichiometry = np.array([[-1, 1], [1, -1], [-1, 0], [1, 0], [0, 1]])
    held = np.array([False, False, True, True, True])
    assert len(cycles(stoichiometry)) == 0
    assert emergent_cycles(stoichiometry, held).tolist() == [[1, 1]]


@given(matrices(5, 6), st.data())
def test_reconciled_is_the_nearest_point_that_closes(stoichiometry: np.ndarray, data: st.DataObject) -> None:
    """Against a constrained least squares of our own: parametrise dG = S^T g and fit g (the same set, the other way)."""
    m = stoichiometry.shape[1]
    dG0 = data.draw(arrays(float, m, elements=st.floats(-80, 80)))
    sd = data.draw(arrays(float, m, elements=st.floats(0.1, 5)))
    moved = reconciled(stoichiometry, dG0, sd)
    assert unclosed_cycles(stoichiometry, moved) == []
    g, *_ = np.linalg.lstsq(stoichiometry.T / sd[:, None], dG0 / sd, rcond=None)
    np.testing.assert_allclose(moved, stoichiometry.T @ g, atol=1e-7)


def test_a_certain_energy_does_not_move() -> None:
    triangle = np.array([[-1, 0, 1], [1, -1, 0], [0, 1, -1]])
    moved = reconciled(triangle, np.array([1.0, 2.0, 3.0]), np.array([0.0, 1.0, 2.0]))
    assert moved[0] == 1.0
    assert moved.sum() == pytest.approx(0.0, abs=1e-12)
    assert moved[1] - 2.0 == pytest.approx((moved[2] - 3.0) / 4)
    with pytest.raises(ValueError, match="may not move"):
        reconciled(triangle, np.array([1.0, 2.0, 3.0]), np.zeros(3))


@pytest.mark.long
def test_dependencies_of_large_sparse_networks() -> None:
    rng = np.random.default_rng(5)
    for _ in range(4):
        rows = np.zeros((300, 120), dtype=np.int64)
        for i in range(300):
            rows[i, rng.choice(120, 4, replace=False)] = rng.choice([-2, -1, 1, 2], 4)
        basis = dependencies(rows)
        assert not (basis.astype(object) @ rows.astype(object)).any()
        assert len(basis) == 300 - rank(rows)
