"""Derived values against Python's own arithmetic, and everything outside the grammar refused."""

from __future__ import annotations

import math

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from driblet.quantities import read_quantity
from driblet_analysis.sweep.derived import DerivedError, read_formula

NUMBERS = {"a.x": 3.5, "a.y": 0.25, "b.z": 12}

leaves = st.sampled_from([*NUMBERS, "2", "0.5", "7e-1", "10"])
formulas = st.recursive(
    leaves,
    lambda inner: (
        st.builds("{} {} {}".format, inner, st.sampled_from("+-*/"), inner)
        | st.builds("({})".format, inner)
        | st.builds("-{}".format, leaves)
    ),
    max_leaves=10,
)


@given(formulas)
def test_arithmetic_is_pythons(text: str) -> None:
    """In a test of our own texts eval is the independent reference."""
    python = text
    for path, value in NUMBERS.items():
        python = python.replace(path, repr(value))
    try:
        expected = eval(python)
    except ZeroDivisionError:
        with pytest.raises(DerivedError, match="divides by zero"):
            read_formula(text).value(NUMBERS)
        return
    assume(abs(expected) < 1e300)
    result = read_formula(text).value(NUMBERS)
    assert math.isclose(float(result), expected, rel_tol=1e-9, abs_tol=1e-12)


@pytest.mark.parametrize(
    ("text", "values", "result"),
    [
        ("0.05 * species.ATP", {"species.ATP": "0.5 mM"}, "0.025 mM"),
        ("species.ATP + 5 uM", {"species.ATP": "0.5 mM"}, "0.505 mM"),
        ("5 uM + species.ATP", {"species.ATP": "0.5 mM"}, "505 µM"),
        ("species.A / species.B", {"species.A": "1 mM", "species.B": "100 uM"}, 10),
        ("conditions.temperature + 5 K", {"conditions.temperature": "30 degC"}, "308.15 K"),
        ("2 * reactions.r.forward", {"reactions.r.forward": "1e4 /M/s"}, "20000 /M/s"),
        ("-reactions.r.energy", {"reactions.r.energy": "−16.7 kJ/mol"}, "16.7 kJ/mol"),
        ("12 kJ/mol / 3", {}, "4 kJ/mol"),
        ("species.E - 3 copies", {"species.E": "20 copies"}, "17 copies"),
    ],
)
def test_units_are_carried_along(text: str, values: dict, result: object) -> None:
    found = read_formula(text).value(values)
    assert found == result
    read_quantity(found, allow_plain=True)  # a system file can hold it


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("", "empty"),
        ("2 *", "ends too early"),
        ("2 ^ 3", "outside the grammar"),
        ("__import__('os')", "outside the grammar"),
        ("ATP", "outside the grammar"),
        ("species.ATP(3)", "out of place"),
        ("(species.ATP", "is missing"),
        ("2 species.ATP", "out of place"),
        ("1,5 * species.ATP", "outside the grammar"),
        ("3 nonsense", "is not a unit"),
        ("1e400 * species.ATP", "too large"),
        ("(" * 70 + "1" + ")" * 70, "nested too deeply"),
        ("1" + " + 1" * 200, "at most 200"),
    ],
)
def test_outside_the_grammar(text: str, complaint: str) -> None:
    with pytest.raises(DerivedError, match=complaint):
        read_formula(text)


@pytest.mark.parametrize(
    ("text", "values", "complaint"),
    [
        ("a.x + 3 nm", {"a.x": "1 mM"}, "different units"),
        ("a.x + 1", {"a.x": "1 mM"}, "different units"),
        ("a.x / 0", {"a.x": "1 mM"}, "divides by zero"),
        ("2 * a.x", {"a.x": "poisson"}, "is not a number"),
        ("2 * a.x", {"a.x": True}, "not a quantity"),
        ("a.x * a.x", {"a.x": 1e300}, "not finite"),
    ],
)
def test_what_cannot_be_computed(text: str, values: dict, complaint: str) -> None:
    with pytest.raises(DerivedError, match=complaint):
        read_formula(text).value(values)


def test_paths_are_named_once_and_in_order() -> None:
    assert read_formula("b.y * a.x + b.y / 2").paths == ("b.y", "a.x")
