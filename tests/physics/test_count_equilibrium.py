"""The exact law of counts, against distributions of scipy and plain enumeration; then simulated end states against it.

Each test on simulated counts has a false-alarm rate of 1e-3 on a right simulator, and a twin broken on purpose that it
must reject.
"""

import math
from collections.abc import Callable
from itertools import pairwise, product

import numpy as np
import pytest
from scipy import stats

import driblet
from driblet.errors import CannotAnswerError
from driblet.network import Network
from driblet_analysis.references.count_equilibrium import CountLaw, count_law, enumerate_class, log_weights
from driblet_analysis.references.master_equation import MasterEquation
from tests.physics.support import FALSE_ALARM, chi_square, counts_at, squares_for_falling_factorials, system

N = 12
ISOMERS = {"A": '"12 copies"', "B": '"0 copies"'}
DIMER = {"M": '"12 copies"', "D": '"0 copies"'}


def isomerisation(energy: float = -2.0) -> driblet.System:
    return system(ISOMERS, {"turn": f'equation = "A <=> B", energy = "{energy} kJ/mol", forward = "1 /s"'})


def dimerisation(energy: float = 4.0) -> driblet.System:
    """K' = 0.2 per copy: monomers and dimers both count."""
    return system(DIMER, {"pair": f'equation = "2 M <=> D", energy = "{energy} kJ/mol", forward = "0.1 /M/s"'})


def capture(energy: float = 4.0) -> driblet.System:
    return system(
        {"A": '"1 copies"', "B": '"6 copies"', "C": '"0 copies"'},
        {"bind": f'equation = "A + B <=> C", energy = "{energy} kJ/mol", forward = "0.3 /M/s"'},
    )


def supply(energy: float = -5.0) -> driblet.System:
    return system(
        {"A": '"0 copies"'}, {"supply": f'equation = "nothing <=> A", energy = "{energy} kJ/mol", forward = "7 M/s"'}
    )


def six_and_six() -> driblet.System:
    return system(
        {"donor": '"6 copies"', "acceptor": '"6 copies"', "spent": '"0 copies"', "charged": '"0 copies"'},
        {"transfer": 'equation = "donor + acceptor <=> spent + charged", K = 10, forward = "0.1 /M/s"'},
    )


def dimer_law(K: float) -> np.ndarray:
    """P(dimers = d) by enumeration from balance of single steps: P(d + 1)/P(d) = K m(m - 1)/(d + 1), m = N - 2d."""
    weights = [1.0]
    for d in range(N // 2):
        m = N - 2 * d
        weights.append(weights[-1] * K * m * (m - 1) / (d + 1))
    return np.array(weights) / sum(weights)


def exact(one: driblet.System, species: int = -1) -> tuple[np.ndarray, np.ndarray]:
    start = [s.mean_copies(one.compartment.omega) for s in one.free_species]
    law = count_law(one, start, one.compartment.omega)
    assert law is not None
    assert law.probability.sum() == pytest.approx(1, abs=1e-14)
    return law.marginal(species)


def test_isomerisation_is_binomial() -> None:
    one = isomerisation()
    K = one.reactions[0].K
    support, pmf = exact(one)
    assert list(support) == list(range(N + 1))
    np.testing.assert_allclose(pmf, stats.binom.pmf(support, N, K / (1 + K)), rtol=1e-11)


def test_one_A_among_six_B() -> None:
    """Two states: P(C)/P(A) = K' n_B at Omega = 1."""
    one = capture()
    _, pmf = exact(one)
    assert pmf[1] / pmf[0] == pytest.approx(one.reactions[0].K * 6, rel=1e-12)


def test_dimerisation_by_enumeration() -> None:
    one = dimerisation()
    _, pmf = exact(one)
    np.testing.assert_allclose(pmf, dimer_law(one.reactions[0].K), rtol=1e-12)


def test_supply_and_decay_is_poisson() -> None:
    one = supply()
    support, pmf = exact(one)
    mean = one.reactions[0].K
    expected = stats.poisson.pmf(support, mean)
    np.testing.assert_allclose(pmf, expected, rtol=1e-9)
    assert expected.sum() == pytest.approx(1, abs=1e-13)  # what the cut leaves out


def test_six_and_six() -> None:
    """K' = 10, yet the ratio of products of means is 13.3: plain sums over the extent 0 to 6."""
    weights = [10.0**x / (math.factorial(x) * math.factorial(6 - x)) ** 2 for x in range(7)]
    mean = sum(x * w for x, w in enumerate(weights)) / sum(weights)
    law = count_law(six_and_six(), [6, 6, 0, 0], 1.0)
    assert law is not None
    donor, acceptor, spent, charged = law.mean()
    assert charged == pytest.approx(mean, rel=1e-12)
    assert spent * charged / (donor * acceptor) == pytest.approx(mean**2 / (6 - mean) ** 2, rel=1e-12)
    assert round(spent * charged / (donor * acceptor), 1) == 13.3
    # the ratio of means of products is K' at any copy number
    left, right = law.expect(lambda n: np.stack([n[:, 0] * n[:, 1], n[:, 2] * n[:, 3]], axis=1))
    assert right / left == pytest.approx(10, rel=1e-12)


def test_isomerisation_shows_no_difference() -> None:
    law = count_law(isomerisation(), [12, 0], 1.0)
    assert law is not None
    A, B = law.mean()
    assert pytest.approx(isomerisation().reactions[0].K, rel=1e-12) == B / A


def test_held_species_set_the_law() -> None:
    """A + X <=> B with X held at x: A and B are as isomers of constant K' x."""
    one = system(
        {"A": '"9 copies"', "B": '"0 copies"', "X": '{ amount = "0.25 M", held = true }'},
        {"turn": 'equation = "A + X <=> B", K = "6 /M", forward = "1 /M/s"'},
    )
    support, pmf = exact(one)
    np.testing.assert_allclose(pmf, stats.binom.pmf(support, 9, 1.5 / 2.5), rtol=1e-11)


def test_open_and_conserved_parts_together() -> None:
    """A + X <=> B, X supplied and removed: X is Poisson of mean m, B binomial of odds K' m, and they are independent."""
    one = system(
        {"A": '"5 copies"', "B": '"0 copies"', "X": '"40 copies"'},
        {
            "supply": 'equation = "nothing <=> X", K = "3 M", forward = "1 M/s"',
            "turn": 'equation = "A + X <=> B", K = "0.5 /M", forward = "1 /M/s"',
        },
    )
    law = count_law(one, [5, 0, 40], 1.0)
    assert law is not None
    assert not law.complete
    b, x = law.states[:, 1], law.states[:, 2]
    expected = stats.binom.pmf(b, 5, 1.5 / 2.5) * stats.poisson.pmf(x, 3)
    np.testing.assert_allclose(law.probability, expected, rtol=1e-9)
    assert expected.sum() == pytest.approx(1, abs=1e-12)


def test_the_class_depends_on_what_is_there() -> None:
    """Odd monomers: one is left over. A catalyst that is absent: nothing turns."""
    law = count_law(dimerisation(), [5, 1], 1.0)
    assert law is not None
    assert sorted(map(tuple, law.states)) == [(1, 3), (3, 2), (5, 1), (7, 0)]
    one = system(
        {"A": '"5 copies"', "B": '"0 copies"', "E": '"0 copies"'},
        {"turn": 'equation = "A + E <=> B + E", K = 2, forward = "1 /M/s"'},
    )
    for enzyme, states in ((0, 1), (1, 6)):
        law = count_law(one, [5, 0, enzyme], 1.0)
        assert law is not None
        assert len(law.states) == states


def test_enumeration_against_nested_loops() -> None:
    one = system(
        {"A": '"4 copies"', "B": '"3 copies"', "C": '"0 copies"', "D": '"0 copies"'},
        {
            "bind": 'equation = "A + B <=> C", K = "2 /M", forward = "1 /M/s"',
            "pair": 'equation = "2 A <=> D", K = "1 /M", forward = "1 /M/s"',
        },
    )
    network = Network.of(one)
    found = enumerate_class(network, [4, 3, 0, 0])
    assert found is not None
    expected = [(a, b, c, d) for a, b, c, d in product(range(5), repeat=4) if a + c + 2 * d == 4 and b + c == 3]
    assert sorted(map(tuple, found)) == sorted(expected)
    assert enumerate_class(network, [4, 3, 0, 0], limit=len(expected) - 1) is None
    assert enumerate_class(network, [4, 3, 0, 0], limit=len(expected)) is not None
    capped = enumerate_class(network, [4, 3, 0, 0], caps=[4, 3, 1, 9])
    assert sorted(map(tuple, capped)) == sorted(s for s in expected if s[2] <= 1)
    weights = log_weights(np.array([[1, 0, 0, 0], [0, 0, 0, 2]]), np.array([0.0, 0.0, 0.0, -np.inf]), 3.0)
    assert list(weights) == [pytest.approx(math.log(3)), -np.inf]


def test_a_class_too_large_is_none() -> None:
    one = system(
        dict.fromkeys("ABCDEF", '"400 copies"'),
        {f"r{k}": f'equation = "{a} <=> {b}", K = 1, forward = "1 /s"' for k, (a, b) in enumerate(pairwise("ABCDEF"))},
    )
    assert count_law(one, [400] * 6, 1.0, limit=5_000) is None


def test_a_large_finite_class_is_cut_to_its_mass() -> None:
    """50,000 isomers, far from equilibrium at first, where 4,000 states will do."""
    one = isomerisation()
    law = count_law(one, [50_000, 0], 1.0, limit=4_000)
    assert law is not None
    assert not law.complete
    K = one.reactions[0].K
    support, pmf = law.marginal(1)
    expected = stats.binom.pmf(support, 50_000, K / (1 + K))
    np.testing.assert_allclose(pmf, expected, rtol=1e-7)
    assert expected.sum() == pytest.approx(1, abs=1e-12)


def test_moments_agree_with_the_stationary_master_equation() -> None:
    one = dimerisation()
    law = count_law(one, [12, 0], 1.0)
    solved = MasterEquation.of(Network.of(one), [12, 0], 1.0).stationary()
    assert law is not None
    np.testing.assert_allclose(law.mean(), solved.mean(), rtol=1e-10)
    np.testing.assert_allclose(law.covariance(), solved.covariance(), rtol=1e-9)


def test_driven_and_one_way_systems_have_none() -> None:
    species = {"A": '"5 copies"', "B": '"0 copies"', "X": '{ amount = "1 M", held = true }'}
    turn = 'equation = "A <=> B", K = 2, forward = "1 /s"'
    driven = system(species, {"turn": turn, "push": 'equation = "A + X <=> B", K = "3 /M", forward = "1 /M/s"'})
    with pytest.raises(CannotAnswerError, match=r"driven: .*spends 1\.005 kJ/mol"):  # RT ln(3/2)
        count_law(driven, [5, 0], 1.0)
    leaky = system(species, {"turn": turn, "leak": 'equation = "B -> nothing", one_way = "a test", forward = "1 /s"'})
    with pytest.raises(CannotAnswerError, match="leak"):
        count_law(leaky, [5, 0], 1.0)


CASES = {
    "isomerisation": (isomerisation, 20.0),
    "dimerisation": (dimerisation, 20.0),
    "one A": (capture, 20.0),
    "supply and decay": (supply, 10.0),
    "six and six": (six_and_six, 20.0),
}


def end_states(one: driblet.System, duration: float, replicates: int, seed: int = 5) -> np.ndarray:
    return counts_at(one, np.array([0, duration]), replicates, seed)[:, -1, -1]


@pytest.mark.parametrize(("make", "duration"), CASES.values(), ids=CASES.keys())
def test_simulated_end_states_follow_the_law(make: Callable[..., driblet.System], duration: float) -> None:
    one = make()
    assert chi_square(end_states(one, duration, 4000), *exact(one)) > FALSE_ALARM


@pytest.mark.parametrize(
    ("make", "energy"), [(isomerisation, -2.0), (dimerisation, 4.0), (capture, 4.0), (supply, -5.0)]
)
def test_twin_a_reverse_rate_off_by_half_a_kilojoule(make: Callable[..., driblet.System], energy: float) -> None:
    simulated = end_states(make(energy + 0.5), 20.0, 4000)
    assert chi_square(simulated, *exact(make(energy))) < FALSE_ALARM


def test_twin_squares_for_falling_factorials(monkeypatch: pytest.MonkeyPatch) -> None:
    one = dimerisation()
    squares_for_falling_factorials(monkeypatch)
    # of 12 an even number stays single, so no lone monomer can pair with itself and leave a count of -1
    simulated = end_states(one, 20.0, 4000)
    assert chi_square(simulated, *exact(one)) < FALSE_ALARM


@pytest.mark.long
@pytest.mark.parametrize(("make", "duration"), CASES.values(), ids=CASES.keys())
def test_long_end_states(make: Callable[..., driblet.System], duration: float) -> None:
    one = make()
    assert chi_square(end_states(one, duration, 200_000, seed=77), *exact(one)) > FALSE_ALARM


@pytest.mark.long
@pytest.mark.parametrize("make", [isomerisation, dimerisation])
def test_long_false_alarm_rate(make: Callable[..., driblet.System]) -> None:
    """Of 300 right ensembles a test at 5 % rejects 15 or so: between 5 and 28 but for chances of 1e-3 either way."""
    one = make()
    rejected = sum(chi_square(end_states(one, 20.0, 500, seed), *exact(one)) < 0.05 for seed in range(300))
    low, high = stats.binom.ppf([1e-3, 1 - 1e-3], 300, 0.05)
    assert low <= rejected <= high


def test_a_count_that_cannot_change_has_variance_zero_to_the_last_bit() -> None:
    """A catalyst beside others: tests over compartments leave out what cannot vary, and rounding must not bring it back."""
    rng = np.random.default_rng(2)
    states = np.column_stack([np.arange(300), np.full(300, 7), np.arange(300)[::-1]])
    for _ in range(20):
        p = rng.random(300)
        law = CountLaw(states, p / p.sum())
        assert law.mean()[1] == 7.0
        assert (law.covariance()[1] == 0.0).all()
