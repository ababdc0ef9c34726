"""The references against each other and against closed forms, since other tests stand on them."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import linalg, stats

import driblet
from driblet.drive import emergent_affinities, is_driven, runnable
from driblet.energetics.equilibrium import NoEquilibriumError
from driblet.errors import CannotAnswerError
from driblet.network import Network
from driblet_analysis.references.count_equilibrium import count_law
from driblet_analysis.references.master_equation import MasterEquation
from driblet_analysis.references.rate_equations import relaxation_time, relaxation_times, solve_rate_equations
from tests.physics.support import system

BIND = 'equation = "A + B <=> C", K = "0.4 /M", forward = "0.3 /M/s"'
TURN = 'equation = "C <=> D", K = 3, forward = "0.2 /s"'
SPECIES = {"A": '"6 copies"', "B": '"4 copies"', "C": '"0 copies"', "D": '"0 copies"'}


def two_steps() -> driblet.System:
    return system(SPECIES, {"bind": BIND, "turn": TURN})


def test_transient_against_a_dense_exponential() -> None:
    one = two_steps()
    equation = MasterEquation.of(Network.of(one), [6, 4, 0, 0], 1.0)
    G = equation.flow.toarray() - np.diag(equation.leaving)
    np.testing.assert_allclose(G.sum(axis=0), 0, atol=1e-13)
    solved = equation.transient([0.0, 0.3, 5.0])
    for k, t in enumerate((0.0, 0.3, 5.0)):
        np.testing.assert_allclose(solved.probability[k], linalg.expm(G * t)[:, 0], atol=1e-12)
    assert (solved.lost == 0).all()
    np.testing.assert_allclose(solved.law(2).mean(), solved.mean()[2])
    np.testing.assert_allclose(np.diag(solved.law(2).covariance()), solved.variance()[2], atol=1e-12)


def test_the_end_of_a_transient_is_the_stationary_law_and_the_count_equilibrium() -> None:
    one = two_steps()
    equation = MasterEquation.of(Network.of(one), [6, 4, 0, 0], 1.0)
    end = equation.transient([400.0]).probability[0]
    np.testing.assert_allclose(equation.stationary().probability, end, atol=1e-11)
    law = count_law(one, [6, 4, 0, 0], 1.0)
    assert law is not None
    order = {tuple(n): p for n, p in zip(law.states, law.probability, strict=True)}
    np.testing.assert_allclose([order[tuple(n)] for n in equation.states], end, atol=1e-11)


def test_caps_report_what_they_lose() -> None:
    """Supply at 3/s without decay to speak of: lost is the chance that a Poisson number passes the cap."""
    one = system({"X": '"0 copies"'}, {"supply": 'equation = "nothing <=> X", forward = "3 M/s", backward = "1e-9 /s"'})
    network = Network.of(one)
    solved = MasterEquation.of(network, [0], 1.0, caps=[6]).transient([0.5, 1.0, 2.0])
    np.testing.assert_allclose(solved.lost, stats.poisson.sf(6, [1.5, 3.0, 6.0]), rtol=1e-6)
    assert solved.law(0).probability.sum() == pytest.approx(1)
    with pytest.raises(CannotAnswerError, match="more than 50 states"):
        MasterEquation.of(network, [0], 1.0, limit=50)


def test_absorbing_states_take_all() -> None:
    one = system(
        {"A": '"3 copies"', "B": '"0 copies"'},
        {"out": 'equation = "A -> B", one_way = "a test", forward = "1 /s"'},
    )
    law = MasterEquation.of(Network.of(one), [3, 0], 1.0).stationary()
    np.testing.assert_allclose(law.mean(), [0, 3], atol=1e-14)
    forked = system(
        {"A": '"1 copies"', "B": '"0 copies"', "C": '"0 copies"'},
        {
            "left": 'equation = "A -> B", one_way = "a test", forward = "1 /s"',
            "right": 'equation = "A -> C", one_way = "a test", forward = "1 /s"',
        },
    )
    with pytest.raises(CannotAnswerError, match="2 sets of states"):
        MasterEquation.of(Network.of(forked), [1, 0, 0], 1.0).stationary()


def test_relaxation_times_in_closed_form() -> None:
    """Isomers: 1/(k+ + k-). A + B <=> C: 1/(k+ (A + B) + k-). Supply and decay: 1/k-. From memory, Eigen's formulas."""
    isomers = system(
        {"A": '"5 copies"', "B": '"0 copies"'}, {"r": 'equation = "A <=> B", forward = "2 /s", backward = "0.5 /s"'}
    )
    assert relaxation_time(isomers) == pytest.approx(1 / 2.5, rel=1e-12)
    binding = system(
        {"A": '"2 copies"', "B": '"2 copies"', "C": '"0 copies"'},
        {"r": 'equation = "A + B <=> C", forward = "1 /M/s", backward = "1 /s"'},
    )
    assert relaxation_time(binding) == pytest.approx(1 / (1 + 1 + 1), rel=1e-9)  # 1 + 1 left of each, 1 bound
    supply = system({"A": '"0 copies"'}, {"r": 'equation = "nothing <=> A", forward = "7 M/s", backward = "0.25 /s"'})
    assert relaxation_time(supply) == pytest.approx(4.0, rel=1e-12)
    idle = system({"A": '"0 copies"', "B": '"0 copies"'}, {"r": 'equation = "A <=> B", K = 2, forward = "1 /s"'})
    assert relaxation_time(idle) is None
    leak = system({"A": '"5 copies"'}, {"r": 'equation = "A -> nothing", one_way = "a test", forward = "1 /s"'})
    with pytest.raises(NoEquilibriumError, match="one-way"):
        relaxation_time(leak)


def test_relaxation_over_twenty_powers_of_ten() -> None:
    one = system(
        {"A": '"5 copies"', "B": '"0 copies"', "C": '"0 copies"'},
        {
            "fast": 'equation = "A <=> B", forward = "1e8 /s", backward = "1e8 /s"',
            "slow": 'equation = "B <=> C", forward = "1e-12 /s", backward = "1e-12 /s"',
        },
    )
    # half of A + B is B: 1/(0.5e-12 + 1e-12)
    np.testing.assert_allclose(relaxation_times(one), [1 / 1.5e-12, 0.5e-8], rtol=1e-9)


def test_relaxation_time_is_that_of_the_rate_equations() -> None:
    one = two_steps()
    network, slowest = Network.of(one), relaxation_time(one)
    assert slowest is not None
    late = np.array([0.0, 12.0, 13.0, 500.0]) * slowest
    copies = solve_rate_equations(network, [6, 4, 0, 0], 1.0, late, rtol=1e-12)
    away = np.abs(copies[1:3] - copies[3])
    np.testing.assert_allclose(away[0] / away[1], np.e, rtol=1e-3)


@given(K=st.lists(st.floats(-12, 12), min_size=2, max_size=2), A=st.integers(0, 9), B=st.integers(0, 9))
def test_count_equilibrium_is_stationary(K: list[float], A: int, B: int) -> None:
    """G pi = 0 for any energies and loads, and the ratio of means of falling-factorial products is K'."""
    one = system(
        {"A": f'"{A} copies"', "B": f'"{B} copies"', "C": '"0 copies"'},
        {
            "pair": f'equation = "2 A <=> C", energy = "{K[0]!r} kJ/mol", forward = "1 /M/s"',
            "swap": f'equation = "C + B <=> 2 B + A", energy = "{K[1]!r} kJ/mol", forward = "1 /M/s"',
        },
    )
    law = count_law(one, [A, B, 0], 1.3)
    equation = MasterEquation.of(Network.of(one), [A, B, 0], 1.3)
    assert law is not None
    order = {tuple(n): p for n, p in zip(law.states, law.probability, strict=True)}
    p = np.array([order[tuple(n)] for n in equation.states])
    assert len(order) == len(p)
    out = equation.leaving * p
    np.testing.assert_allclose(equation.flow @ p, out, atol=1e-11 * out.max(initial=1e-300), rtol=1e-9)
    n = law.states
    right, left = law.expect(n[:, 2]) / 1.3, law.expect(n[:, 0] * (n[:, 0] - 1.0)) / 1.3**2
    assert right == pytest.approx(one.reactions[0].K * left, rel=1e-9)


def test_drive() -> None:
    """Two ways to turn A into B, of which one spends X: driven by dG0' - RT ln x, unless x is at its equilibrium value."""
    species = {"A": '"5 copies"', "B": '"0 copies"', "X": '{ amount = "1.5 M", held = true }'}
    reactions = {"turn": 'equation = "A <=> B", K = 3, forward = "1 /s"',
                 "push": 'equation = "A + X <=> B", K = "2 /M", forward = "1 /M/s"'}  # fmt: skip
    assert is_driven(system(species, reactions)) is False
    more = system(species | {"X": '{ amount = "3 M", held = true }'}, reactions)
    assert is_driven(more) is True
    (cycle,) = emergent_affinities(more)
    assert dict(zip(("turn", "push"), cycle.reactions, strict=True)) == {"turn": -1, "push": 1}
    assert cycle.affinity_kJ_per_mol == pytest.approx(2.4789570 * np.log(2), rel=1e-6)
    assert is_driven(more, present=()) is False  # nothing there that could turn
    # a one-way reaction leaves it undefined, once it can run
    leak = reactions | {"leak": 'equation = "B -> nothing", one_way = "a test", forward = "1 /s"'}
    assert is_driven(system(species, leak)) is None
    assert is_driven(system(species | {"X": '{ amount = "3 M", held = true }'}, leak)) is True
    backward = {"leak": 'equation = "B -> A", one_way = "a test", forward = "1 /s"'}
    never = system({"A": '"5 copies"', "B": '"0 copies"'}, backward)
    assert is_driven(never) is False
    assert list(runnable(never)) == [False]
