"""Reaction equations: what is read, what is refused, and that nothing is lost between text and Equation."""

from __future__ import annotations

from contextlib import suppress

import pytest
from hypothesis import given
from hypothesis import strategies as st

from driblet.system.equation import NOTHING, WATER, Equation, EquationError, read_equation


def test_a_reversible_equation() -> None:
    equation = read_equation("A + 2 B <=> C")
    assert equation == Equation((("A", 1), ("B", 2)), (("C", 1),), 0, True)
    assert equation.change == {"A": -1, "B": -2, "C": 1}
    assert equation.order_change == -2


def test_a_one_way_equation_and_an_empty_side() -> None:
    assert read_equation("A -> nothing") == Equation((("A", 1),), (), 0, False)
    assert read_equation("nothing <=> A").reactants == ()


def test_water_is_the_solvent() -> None:
    equation = read_equation("ATP + H2O <=> ADP + Pi")
    assert equation.water == -1
    assert dict(equation.reactants) == {"ATP": 1}
    assert equation.order_change == 1
    assert read_equation("A + B <=> C + 2 H2O").water == 2


def test_a_catalyst_is_counted_on_both_sides_and_does_not_change() -> None:
    equation = read_equation("A + E <=> B + E")
    assert equation.change == {"A": -1, "B": 1}
    assert dict(equation.products) == {"B": 1, "E": 1}


@pytest.mark.parametrize(
    ("text", "reactants"),
    [
        ("2A <=> B", {"A": 2}),
        ("2  A <=> B", {"A": 2}),
        ("A+A<=>B", {"A": 2}),
        ("A + 2 A <=> B", {"A": 3}),
        (" A  <=>  B ", {"A": 1}),
        ("A2 <=> B", {"A2": 1}),
        ("2 A2 <=> B", {"A2": 2}),
        ("A_1 + a <=> B", {"A_1": 1, "a": 1}),
    ],
)
def test_spellings(text: str, reactants: dict[str, int]) -> None:
    assert dict(read_equation(text).reactants) == reactants


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("", "0 arrows"),
        ("A", "0 arrows"),
        ("A <=> B <=> C", "2 arrows"),
        ("A -> B -> C", "2 arrows"),
        ("A = B", '"=" is not an arrow'),
        ("A => B", '"=>" is not an arrow'),
        ("A <-> B", '"<->" is not an arrow'),
        ("A <- B", '"<-" is not an arrow'),
        ("A → B", '"→" is not an arrow'),
        ("A ⇌ B", '"⇌" is not an arrow'),
        ("A <=> A", "both sides are equal"),
        ("A + B <=> B + A", "both sides are equal"),
        ("A + A <=> 2 A", "both sides are equal"),
        ("nothing <=> nothing", "both sides are empty"),
        ("H2O <=> nothing", "both sides are empty"),
        ("A + H2O <=> A", "both sides are equal"),
        (" <=> A", "a side is blank"),
        ("A <=> ", "a side is blank"),
        ("A + <=> B", "is not a species"),
        ("A + + B <=> C", "is not a species"),
        ("+ A <=> B", "is not a species"),
        ("0 A <=> B", "must lie between 1 and 100"),
        ("101 A <=> B", "must lie between 1 and 100"),
        ("9" * 6000 + " A <=> B", "must lie between 1 and 100"),
        ("-1 A <=> B", "is not a species"),
        ("1.5 A <=> B", "is not a species"),
        ("٣ A <=> B", "is not a species"),
        ("A B <=> C", "is not a species"),
        ("A * B <=> C", "is not a species"),
        ("NAD+ <=> B", "is not a species"),
        ("Å <=> B", "is not a species"),
        ("_A <=> B", "is not a species"),
        ("1A2B <=> C!", "is not a species"),
        ("A(lumen) <=> B", "is not a species"),
        ("A + nothing <=> B", "stands alone"),
        ("2 nothing <=> B", "stands alone"),
    ],
)
def test_refused(text: str, complaint: str) -> None:
    with pytest.raises(EquationError) as caught:
        read_equation(text)
    assert complaint in str(caught.value)


names = st.from_regex(r"[A-Za-z][A-Za-z0-9_]{0,6}", fullmatch=True).filter(lambda n: n not in (NOTHING, WATER))
sides = st.dictionaries(names, st.integers(1, 9), max_size=4)


@given(sides, sides, st.integers(-3, 3), st.booleans())
def test_text_and_equation_are_the_same_thing(
    left: dict[str, int], right: dict[str, int], water: int, reversible: bool
) -> None:
    equation = Equation(tuple(left.items()), tuple(right.items()), water, reversible)
    if left == right:
        return
    assert read_equation(str(equation)) == equation
    # an independent count of what changes
    for name in {*left, *right}:
        assert equation.change.get(name, 0) == right.get(name, 0) - left.get(name, 0)


@given(st.text(alphabet="AB2 +<=>-nothig_Ω\n→", max_size=20))
def test_any_text_is_read_or_refused(text: str) -> None:
    with suppress(EquationError):
        equation = read_equation(text)
        assert equation.change or equation.water or equation.reactants
