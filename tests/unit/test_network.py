"""System -> arrays: propensity constants by hand, falling factorials, the dependency graph against brute force."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest

import driblet
from driblet.network import BACKWARD, FORWARD, Network
from driblet.quantities import AVOGADRO, GAS_CONSTANT
from tests.texts import MIXED, SMALL, changed


@pytest.fixture(scope="module")
def system() -> driblet.System:
    return driblet.loads(MIXED)


@pytest.fixture(scope="module")
def network(system: driblet.System) -> Network:
    return Network.of(system)


def test_channels_come_in_pairs_and_one_way_alone(network: Network) -> None:
    order = [(network.reactions[c.reaction], c.direction) for c in network.channels]
    both = [(r, d) for r in ("supply", "turn", "pair", "triple", "meet") for d in (FORWARD, BACKWARD)]
    assert order == [*both, ("leak", FORWARD)]
    assert network.species == ("A", "B", "C", "D", "E")
    assert network.channel_index(FORWARD).tolist() == [0, 2, 4, 6, 8, 10]
    assert network.channel_index(BACKWARD).tolist() == [1, 3, 5, 7, 9, -1]


def test_propensity_constants_by_hand(network: Network) -> None:
    """w = k Omega (n)_nu / Omega^nu, held species as (c)^nu: each constant written out from the file."""
    omega = 5e4
    got = dict(
        zip(
            [(network.reactions[c.reaction], c.direction) for c in network.channels],
            network.rates(np.array([omega]))[0],
            strict=True,
        )
    )
    expected = {
        ("supply", FORWARD): 2e-4 * omega,
        ("supply", BACKWARD): 2e-4 / 5e-5,
        ("turn", FORWARD): 1e4 / omega,
        ("turn", BACKWARD): 1e4 / 3 / omega,
        ("pair", FORWARD): 5e4 / omega,  # times n (n - 1): no 1/2
        ("pair", BACKWARD): 5e4 / 1e4,
        ("triple", FORWARD): 0.5 * 1e12 / omega**2,
        ("triple", BACKWARD): 0.5,
        ("meet", FORWARD): 1e3 * 5e7 / omega**2,
        ("meet", BACKWARD): 1e3 * 1e-3,  # F is held at 1 mM
        ("leak", FORWARD): 0.05,
    }
    assert got.keys() == expected.keys()
    for key, value in expected.items():
        assert got[key] == pytest.approx(value, rel=1e-12), key


def test_detailed_balance_of_every_single_transition(system: driblet.System, network: Network) -> None:
    """w+(n) / w-(n + nu) = exp(-dG(n)/RT), dG written out from falling factorials, in a hundred random states."""
    rng = np.random.default_rng(3)
    RT = GAS_CONSTANT * 303.15
    held = {"F": 1e-3}
    for _ in range(100):
        omega = 10 ** rng.uniform(3, 6)
        n = rng.integers(3, 40, 5)
        count = dict(zip(network.species, n.tolist(), strict=True))
        for r, reaction in enumerate(system.reactions):
            if reaction.dG0_kJ_per_mol is None:
                continue
            after = {name: count[name] + reaction.equation.change.get(name, 0) for name in count}
            ln_q = 0.0
            for sign, state, terms in (
                (-1, count, reaction.equation.reactants),
                (1, after, reaction.equation.products),
            ):
                for name, number in terms:
                    if name in held:
                        ln_q += sign * number * math.log(held[name])
                    else:
                        ln_q += sign * math.log(math.perm(state[name], number)) - sign * number * math.log(omega)
            w_forward = network.propensities(n, network.rates(np.array([omega]))[0])[network.channel_index(FORWARD)[r]]
            later = np.array([after[name] for name in network.species])
            w_backward = network.propensities(later, network.rates(np.array([omega]))[0])[
                network.channel_index(BACKWARD)[r]
            ]
            dG = reaction.dG0_kJ_per_mol + RT * ln_q
            assert w_forward / w_backward == pytest.approx(math.exp(-dG / RT), rel=1e-9)


def test_propensities_are_falling_factorials(network: Network) -> None:
    """Against math.perm, small counts included: one copy makes no pair and two no triple."""
    rates = network.rates(np.array([1e4]))[0]
    for n in itertools.product(range(4), repeat=5):
        got = network.propensities(np.array(n), rates)
        for j, channel in enumerate(network.channels):
            ways = math.prod(math.perm(n[i], multiplicity) for i, multiplicity in channel.reactants)
            assert got[j] == pytest.approx(rates[j] * ways, rel=1e-13)
            assert (got[j] == 0) == (ways == 0)


def test_n_squared_would_be_caught(network: Network) -> None:
    """The broken twin of the test above: a pair propensity of n^2 differs wherever there are molecules."""
    rates = network.rates(np.array([1e4]))[0]
    j = int(network.channel_index(FORWARD)[2])
    assert network.propensities(np.array([0, 3, 0, 0, 0]), rates)[j] == pytest.approx(rates[j] * 6)
    assert network.propensities(np.array([0, 3, 0, 0, 0]), rates)[j] != pytest.approx(rates[j] * 9)


def test_flat_arrays_give_the_same_propensities(network: Network) -> None:
    """What a kernel computes from reactant and offset, spelled out in numpy, against Network.propensities."""
    arrays = network.arrays
    rng = np.random.default_rng(4)
    rates = network.rates(np.array([3e4]))[0]
    for _ in range(50):
        n = rng.integers(0, 6, 5).astype(float)
        padded = np.append(n, 1.0)
        got = rates.copy()
        for slot in range(3):
            got *= padded[arrays.reactant[:, slot]] - arrays.offset[:, slot]
        np.testing.assert_allclose(got, network.propensities(n, rates), rtol=1e-14)


def test_changes_are_the_stoichiometry(system: driblet.System, network: Network) -> None:
    arrays = network.arrays
    for j, channel in enumerate(network.channels):
        rows = slice(arrays.change_start[j], arrays.change_start[j + 1])
        got = dict(zip(arrays.change_species[rows].tolist(), arrays.change_amount[rows].tolist(), strict=True))
        change = system.reactions[channel.reaction].equation.change
        expected = {network.species.index(k): channel.direction * v for k, v in change.items() if k in network.species}
        assert got == expected
        assert 4 not in got, "the catalyst E does not change"
    np.testing.assert_array_equal(network.stoichiometry[:, network.reactions.index("meet")], [-1, -1, 1, -1, 0])


def random_system(seed: int) -> str:
    rng = np.random.default_rng(seed)
    names = list("ABCDEFG")
    text = '[conditions]\ntemperature = "25 degC"\n[compartments.c]\nvolume = "1 fL"\n[species]\n'
    text += "".join(f'{n} = "5 copies"\n' for n in names)
    for k in range(10):
        left, right = (
            {n: int(rng.integers(1, 3)) for n in rng.choice(names, rng.integers(0, 2) + (side == 0), replace=False)}
            for side in (0, 1)
        )
        if left == right:
            continue
        sides = [" + ".join(f"{v} {n}" for n, v in side.items()) or "nothing" for side in (left, right)]
        if any(sum(side.values()) > 3 for side in (left, right)):
            continue
        order = sum(left.values())
        unit = {1: "/s", 2: "/M/s", 3: "/M^2/s"}[order]
        text += f'[reactions.r{k}]\nequation = "{sides[0]} -> {sides[1]}"\none_way = "test"\nforward = "2 {unit}"\n'
    return text


@pytest.mark.parametrize("seed", range(12))
def test_dependency_graph_against_brute_force(seed: int) -> None:
    """Fire each channel in many states; whatever propensity changes must be listed, and listed ones must be able to."""
    network = Network.of(driblet.loads(random_system(seed)))
    arrays, m = network.arrays, len(network.channels)
    rates = network.rates(np.array([1e8]))[0]
    rng = np.random.default_rng(seed + 100)
    changes: list[set[int]] = [set() for _ in range(m)]
    for _ in range(200):
        n = rng.integers(0, 7, len(network.species))
        before = network.propensities(n, rates)
        for j, channel in enumerate(network.channels):
            after = n.copy()
            for i, amount in channel.change:
                after[i] += amount
            changes[j] |= set(np.flatnonzero(network.propensities(after, rates) != before).tolist())
    for j in range(m):
        listed = arrays.depend_channel[arrays.depend_start[j] : arrays.depend_start[j + 1]].tolist()
        assert listed == sorted(listed)
        assert set(listed) == changes[j]
        assert arrays.first_dependent[j] == (listed[0] if listed else m)


def test_constants_scale_with_the_volume_of_each_replicate(network: Network) -> None:
    rates = network.rates(np.array([1e4, 2e4]))
    ratio = rates[1] / rates[0]
    order = np.array([c.order for c in network.channels])
    np.testing.assert_allclose(ratio, 2.0 ** (1 - order))


def test_a_system_of_held_species_alone_has_channels_without_change() -> None:
    text = changed(
        SMALL,
        ('A = "10 copies"', 'A = { amount = "1 mM", held = true }'),
        ('B = "0 copies"', 'B = { amount = "2 mM", held = true }'),
        ('part = "B / (A + B)"', 'x = "1"'),
    )
    network = Network.of(driblet.loads(text))
    assert network.species == ()
    assert network.arrays.depend_channel.size == network.arrays.change_species.size == 0
    omega = 1e-16 * AVOGADRO
    np.testing.assert_allclose(network.rates(np.array([omega]))[0], [1e-3 * omega, 0.5 * 2e-3 * omega])
