"""Energies and constants: K' = exp(-dG0'/RT), sums of formation energies, combinations of known reactions (Hess)."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants

from driblet.energetics.gibbs import energy_by_combination, energy_of_formation, equilibrium_constant, standard_energy

temperatures = st.floats(250, 400)


@given(st.floats(-500, 500), temperatures)
def test_constant_and_energy_are_inverse(dG0: float, temperature: float) -> None:
    K = equilibrium_constant(dG0, temperature)
    assert pytest.approx(math.exp(-1000 * dG0 / (constants.R * temperature)), rel=1e-12) == K
    assert standard_energy(K, temperature) == pytest.approx(dG0, rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("dG0", [-1e4, 1e4, 1e300, -1e300])
def test_constants_beyond_a_double_are_refused(dG0: float) -> None:
    with pytest.raises(OverflowError, match="out of the range"):
        equilibrium_constant(dG0, 298.15)


def test_a_temperature_near_zero_overflows_and_does_not_divide_by_it() -> None:
    with pytest.raises(OverflowError):
        equilibrium_constant(-30.5, 1e-300)


def test_formation_energies_add_up() -> None:
    """Round invented numbers; water takes part like any other substance here."""
    formation = {"A": -100.0, "B": -70.0, "H2O": -150.0}
    assert energy_of_formation({"A": -2, "B": 5, "H2O": -1}, formation) == pytest.approx(200 - 350 + 150)
    with pytest.raises(KeyError, match="C"):
        energy_of_formation({"C": 1}, formation)


def test_a_transfer_is_a_difference_of_hydrolyses() -> None:
    hydrolyses = [({"ATP": -1, "ADP": 1, "Pi": 1}, -30.5), ({"G6P": -1, "glucose": 1, "Pi": 1}, -13.8)]
    found = energy_by_combination({"ATP": -1, "glucose": -1, "ADP": 1, "G6P": 1}, hydrolyses)
    assert found is not None
    energy, weights = found
    assert energy == pytest.approx(-16.7)
    np.testing.assert_allclose(weights, [1, -1], atol=1e-12)


def test_a_reaction_outside_the_known_ones_is_none() -> None:
    hydrolyses = [({"ATP": -1, "ADP": 1, "Pi": 1}, -30.5)]
    assert energy_by_combination({"ATP": -1, "ADP": 1}, hydrolyses) is None
    assert energy_by_combination({"ATP": -1, "ADP": 1}, []) is None
    assert energy_by_combination({}, []) is None


@given(st.lists(st.integers(-3, 3), min_size=3, max_size=3), st.data())
def test_any_combination_is_found(weights: list[int], data: st.DataObject) -> None:
    names = "ABCDEF"
    known = [
        ({names[i]: -1, names[i + 1]: 1, names[i + 3]: 2}, data.draw(st.floats(-80, 80), label="energy"))
        for i in range(3)
    ]
    change: dict[str, int] = {}
    for weight, (numbers, _) in zip(weights, known, strict=True):
        for name, number in numbers.items():
            change[name] = change.get(name, 0) + weight * number
    found = energy_by_combination(change, known)
    assert found is not None
    assert found[0] == pytest.approx(sum(w * e for w, (_, e) in zip(weights, known, strict=True)), abs=1e-9)
