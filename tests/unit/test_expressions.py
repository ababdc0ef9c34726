"""Readouts: the grammar, the dimensions, the values, and that a file's text is never handed to an interpreter."""

from __future__ import annotations

import math
from contextlib import suppress

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import driblet
from driblet.quantities import GAS_CONSTANT
from driblet.readouts import evaluate, transition_energy
from driblet.system.expressions import Expression, ExpressionError, read_expression
from tests.texts import MIXED, SMALL, changed

SPECIES, REACTIONS = ("A", "B", "mM"), ("turn",)


def read(text: str) -> Expression:
    return read_expression(text, SPECIES, REACTIONS)


def value(text: str, counts: dict[str, int], omega: float = 1e6) -> float:
    system = driblet.loads(SMALL)
    expression = read_expression(text, ("A", "B"), ("turn",))
    return float(evaluate(system, expression, np.array([counts["A"], counts["B"]]), np.array(omega)))


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("A", 7.0),
        ("total(A)", 7.0),
        ("A + B * 2", 13.0),
        ("(A + B) * 2", 20.0),
        ("A - B - 1", 3.0),
        ("A / B / 2", 7 / 6),
        ("12 / A * B", 12 / 7 * 3),
        ("-A + B", -4.0),
        ("−A + B", -4.0),  # U+2212
        ("--A", 7.0),
        ("2 * -A", -14.0),
        ("-(A - B)", -4.0),
        ("2e1 + 0.5e1", 25.0),
        ("B / (A + B)", 0.3),
        ("conc(A)", 7e-6),
        ("conc(A) / 1 uM", 7.0),
        ("(conc(A) - 2 uM) / 1 mM", 5e-3),
        ("conc(A) * conc(B) / conc(A)", 3e-6),
        ("A + 3 copies", 10.0),
        ("1 kcal/mol + 1 kJ/mol", 5.184),
        ("A*B-A", 14.0),
    ],
)
def test_values(text: str, expected: float) -> None:
    assert value(text, {"A": 7, "B": 3}) == pytest.approx(expected, rel=1e-13)


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        ("A", "1"),
        ("A / B", "1"),
        ("conc(A)", "M"),
        ("conc(A) * conc(B)", "M^2"),
        ("1 / conc(A)", "M^-1"),
        ("gibbs(turn)", "kJ/mol"),
        ("-gibbs(turn)", "kJ/mol"),
        ("gibbs(turn) * conc(A)", "M (kJ/mol)"),
        ("gibbs(turn) / gibbs(turn)", "1"),
    ],
)
def test_units(text: str, unit: str) -> None:
    assert read(text).unit == unit


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("", "empty"),
        ("   ", "empty"),
        ("A +", "ends too early"),
        ("A + * B", "out of place"),
        ("* A", "out of place"),
        ("+ A", "out of place"),
        ("A B", "out of place"),
        ("2 A", "out of place"),
        ("A)", "out of place"),
        ("(A", "missing"),
        ("total(A", "missing"),
        ("total()", "is not a species"),
        ("total(A, B)", "outside the grammar"),
        ("total(A + B)", "missing"),
        ("total(2)", "is not a species"),
        ("total(turn)", "is not a species"),
        ("total", "is not a species"),
        ("gibbs(A)", "is not a reaction"),
        ("gibbs(gibbs(turn))", "is not a reaction"),
        ("C", "is not a species"),
        ("a", "is not a species"),
        ("exp(A)", "is not a function"),
        ("A(B)", "is not a function"),
        ("A ** 2", "out of place"),
        ("A ^ 2", "outside the grammar"),
        ("A % 2", "outside the grammar"),
        ("A // 2", "out of place"),
        ("A < 2", "outside the grammar"),
        ("A == 2", "outside the grammar"),
        ("A if B else A", "out of place"),
        ("A and B", "out of place"),
        ("A; B", "outside the grammar"),
        ("A = 2", "outside the grammar"),
        ("A.real", "outside the grammar"),
        ("A[0]", "outside the grammar"),
        ("'A'", "outside the grammar"),
        ("__import__('os')", "outside the grammar"),
        ("lambda: A", "outside the grammar"),
        ("1e400", "too large"),
        ("1e-400 * A", "too small"),
        ("1,5 * A", "outside the grammar"),
        ("10 000 * A", "out of place"),
        ("٣ * A", "is not a number"),
        ("A + conc(A)", "different units"),
        ("conc(A) - gibbs(turn)", "different units"),
        ("A + 4 uM", "different units"),
        ("conc(A) + 1", "different units"),
        ("gibbs(turn) - 40", "different units"),
        ("-conc(A) + A", "different units"),
        ("4 s", "has no place here"),
        ("4 degC", "has no place here"),
        ("4 XY", "is not a unit"),
        ("(" * 100 + "A" + ")" * 100, "nested too deeply"),
        ("-" * 100 + "A", "nested too deeply"),
        ("A" + " + A" * 5000, "at most"),
        ("A" + " * A" * 5000, "at most"),
    ],
)
def test_refused(text: str, complaint: str) -> None:
    with pytest.raises(ExpressionError) as caught:
        read(text)
    assert complaint in str(caught.value)


def test_the_longest_expression_that_is_read_can_be_evaluated() -> None:
    assert value(" + ".join(["A"] * 250), {"A": 2, "B": 0}) == 500.0
    assert value("(" * 50 + "A" + ")" * 50, {"A": 2, "B": 0}) == 2.0


@given(st.text(alphabet="AB12.e+-*/() conctalgibsurmMkJ<>_,^'", max_size=30))
def test_any_text_is_read_or_refused(text: str) -> None:
    with suppress(ExpressionError):
        assert read(text).unit


trees = st.recursive(
    st.integers(1, 9).map(str) | st.sampled_from(["A", "B", "total(A)"]),
    lambda inner: st.tuples(inner, st.sampled_from("+-*/"), inner).map(lambda t: f"({t[0]} {t[1]} {t[2]})"),
    max_leaves=12,
)


@given(trees, st.integers(0, 9), st.integers(0, 9))
def test_arithmetic_agrees_with_python(text: str, a: int, b: int) -> None:
    """Python's own evaluator as the oracle, on texts that this test itself made of digits and two names."""
    try:
        expected = eval(text.replace("total(A)", "A"), {"__builtins__": {}}, {"A": float(a), "B": float(b)})
    except ZeroDivisionError:
        return
    assert value(text, {"A": a, "B": b}) == pytest.approx(expected, rel=1e-12, abs=1e-12)


def test_an_undefined_ratio_is_nan_and_never_a_number() -> None:
    assert math.isnan(value("A / B", {"A": 0, "B": 0}))
    assert math.isnan(value("A / B", {"A": 3, "B": 0}))
    assert math.isnan(value("1e308 * 1e308 * A", {"A": 3, "B": 0}))
    assert math.isnan(value("1 / (A - A)", {"A": 3, "B": 0}))


def test_held_species_read_as_concentration_and_as_the_copies_they_amount_to() -> None:
    system = driblet.loads(MIXED)
    counts = np.zeros((2, 5), dtype=np.int64)
    omega = np.array([1e5, 2e5])
    held = read_expression("F + conc(F) / 1 M", ("F",), ())
    np.testing.assert_allclose(evaluate(system, held, counts, omega), [100.001, 200.001])


def test_gibbs_of_the_next_forward_firing() -> None:
    """exp(-dG/RT) = w+(n) / w-(n + nu), from the propensities themselves: A + 10 copies at K = 2."""
    system = driblet.loads(SMALL)
    RT = GAS_CONSTANT * 298.15
    turn = system.reactions[0]
    counts = np.array([[10, 0], [3, 7], [0, 10]])
    energy = transition_energy(system, turn, counts, np.array(6e7))
    assert energy[0] == pytest.approx(-RT * math.log(2 * 10 / 1))
    assert energy[1] == pytest.approx(-RT * math.log(2 * 3 / 8))
    assert energy[2] == np.inf  # nothing is left to fire


def test_gibbs_of_a_homodimer_counts_pairs() -> None:
    system = driblet.loads(MIXED)
    pair = next(r for r in system.reactions if r.name == "pair")
    RT = GAS_CONSTANT * 303.15
    omega = 1e5
    counts = np.array([[0, 5, 2, 0, 0], [0, 1, 2, 0, 0]])
    energy = transition_energy(system, pair, counts, np.array(omega))
    ratio = 1e4 * (5 * 4 / omega**2) / (3 / omega)  # K' (n)_2 / Omega^2 over (m + 1) / Omega
    assert energy[0] == pytest.approx(-RT * math.log(ratio))
    assert energy[1] == np.inf  # one copy makes no pair


def test_a_catalyst_cancels_in_gibbs_whether_it_is_there_or_not() -> None:
    """w+(n)/w-(n + nu) has the catalyst's copies above and below; with none of it the transition still has its energy."""
    system = driblet.loads(
        changed(
            SMALL, ('equation = "A <=> B"', 'equation = "A + C <=> B + C"'), ('forward = "1 /s"', 'forward = "1 /M/s"')
        ).replace('B = "0 copies"', 'B = "0 copies"\nC = "1 copies"')
    )
    RT = GAS_CONSTANT * 298.15
    counts = np.array([[3, 7, 2], [3, 7, 0], [0, 10, 2]])
    energy = transition_energy(system, system.reactions[0], counts, np.array(6e7))
    assert energy[:2] == pytest.approx([-RT * math.log(2 * 3 / 8)] * 2)
    assert energy[2] == np.inf


def test_gibbs_of_a_one_way_reaction_is_refused() -> None:
    with pytest.raises(driblet.InputError, match="is not a reaction"):
        driblet.loads(changed(MIXED, ('pull = "gibbs(pair)"', 'pull = "gibbs(leak)"')))
    system = driblet.loads(MIXED)
    leak = next(r for r in system.reactions if r.name == "leak")
    with pytest.raises(ValueError, match="one way"):
        transition_energy(system, leak, np.zeros((1, 5), dtype=np.int64), np.array(1.0))


def test_readouts_broadcast_over_replicates_and_times() -> None:
    system = driblet.loads(SMALL)
    counts = np.arange(24).reshape(3, 4, 2)
    omega = np.array([1.0, 2.0, 4.0])[:, None]
    got = evaluate(system, read_expression("conc(B)", ("A", "B"), ()), counts, omega)
    np.testing.assert_array_equal(got, counts[..., 1] / omega)
    constant = evaluate(system, read_expression("3", ("A", "B"), ()), counts, omega)
    np.testing.assert_array_equal(constant, np.full((3, 4), 3.0))
