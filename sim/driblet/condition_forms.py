"""Conditions as signs of polynomials in counts, the form a kernel can hold against every event.

A comparison of ratios N1/D1 < N2/D2 becomes N1 D2 - N2 D1 < 0, and gibbs(r) < v becomes
prod(products) - exp(v/RT) K' prod(reactants) < 0, both in counts left by the next firing: no division, no logarithm. What is
undefined (0/0) meets nothing, whatever the comparison; "not" is pushed down to the comparisons first, so that this holds
under "not" too. x/0 is larger than any number, and so is gibbs() with a reactant exhausted.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

from driblet.engines.requirement_arrays import LOG_DOWN, LOG_MIXED, LOG_UP, RATIO, SIGN
from driblet.free_counts import estimated_names
from driblet.readouts import copies_in
from driblet.system.expressions import Comparison, Junction, Named, Negation, Node, Number, Reference, Truth
from driblet.system.model import Reaction, System

MOST_FACTORS, MOST_TERMS = 6, 64
_SWAPPED = {">": "<", ">=": "<="}
_NEGATED = {"<": ">=", "<=": ">", ">": "<=", ">=": "<"}
_LARGEST_LOG = 600.0
Key = tuple[tuple[tuple[str, int], ...], int]


class NotInFormError(ValueError):
    """A condition that is no sign of a polynomial of few terms; the message says why."""


@dataclass(frozen=True)
class Polynomial:
    """A sum of coefficient * prod (n_s - k) * Omega^p: ((species, k), ...), p -> coefficient, exact."""

    terms: Mapping[Key, Fraction]

    @classmethod
    def constant(cls, value: Fraction | int) -> Polynomial:
        """A polynomial without counts."""
        return cls({((), 0): Fraction(value)} if value else {})

    @classmethod
    def monomial(cls, factors: list[tuple[str, int]], omega_power: int, value: Fraction | int = 1) -> Polynomial:
        """value * prod (n_s - k) * Omega^omega_power."""
        if len(factors) > MOST_FACTORS:
            raise NotInFormError(f"more than {MOST_FACTORS} counts multiply")
        return cls({(tuple(sorted(factors)), omega_power): Fraction(value)} if value else {})

    def __add__(self, other: Polynomial) -> Polynomial:
        terms = dict(self.terms)
        for key, value in other.terms.items():
            terms[key] = terms.get(key, Fraction(0)) + value
        return Polynomial(_few({k: v for k, v in terms.items() if v}))

    def __mul__(self, other: Polynomial) -> Polynomial:
        total = Polynomial({})
        for (left, p), a in self.terms.items():
            for (right, q), b in other.terms.items():
                total += Polynomial.monomial([*left, *right], p + q, a * b)
        return total

    def __neg__(self) -> Polynomial:
        return Polynomial({k: -v for k, v in self.terms.items()})

    def __sub__(self, other: Polynomial) -> Polynomial:
        return self + -other

    @property
    def value(self) -> Fraction | None:
        """The value of a constant, None where counts or the volume enter."""
        if not self.terms:
            return Fraction(0)
        return self.terms.get(((), 0)) if len(self.terms) == 1 else None

    @property
    def species(self) -> set[str]:
        """The species whose counts enter."""
        return {name for factors, _ in self.terms for name, _ in factors}


def _few(terms: dict[Key, Fraction]) -> dict[Key, Fraction]:
    if len(terms) > MOST_TERMS:
        raise NotInFormError(f"more than {MOST_TERMS} terms")
    return terms


_ONE = Polynomial.constant(1)


@dataclass(frozen=True)
class Ratio:
    """numerator / denominator."""

    numerator: Polynomial
    denominator: Polynomial = _ONE

    @property
    def constant(self) -> Fraction | None:
        """The value where no count enters."""
        above, below = self.numerator.value, self.denominator.value
        return above / below if above is not None and below else None


@dataclass(frozen=True)
class Logs:
    """constant + sum coefficient * RT ln(above / below), in kJ/mol."""

    parts: tuple[tuple[Fraction, Polynomial, Polynomial], ...]
    constant: Fraction = Fraction(0)

    def scaled(self, factor: Fraction) -> Logs:
        """Every coefficient and the constant times `factor`."""
        return Logs(tuple((c * factor, a, b) for c, a, b in self.parts), self.constant * factor)


@dataclass(frozen=True)
class Leaf:
    """value < 0, or value <= 0 where not strict.

    kind SIGN : value is polynomials[0]; RATIO : polynomials[0] / [1]; LOG_* : ln([0] / [1]), which is +inf where [1] is 0
    (UP), -inf where [0] is 0 (DOWN), undefined where both are (MIXED).
    """

    kind: int
    polynomials: tuple[Polynomial, ...]
    strict: bool = True


@dataclass(frozen=True)
class Join:
    """Both (and) or either (or) of two forms."""

    operator: str
    left: Form
    right: Form


Form = Leaf | Join


def form_of(system: System, condition: Truth, averaged: bool) -> Form:
    """A condition as a form; averaged : for the time averages of its sides, not for the state of a moment.

    Raises NotInFormError where there is no such form of few terms.
    """
    if isinstance(condition, Negation):
        return form_of(system, _negated(condition.inner), averaged)
    if isinstance(condition, Junction):
        return Join(
            condition.operator,
            form_of(system, condition.left, averaged),
            form_of(system, condition.right, averaged),
        )
    return _comparison(system, condition, averaged)


def _negated(condition: Truth) -> Truth:
    if isinstance(condition, Negation):
        return condition.inner
    if isinstance(condition, Junction):
        other = {"and": "or", "or": "and"}[condition.operator]
        return Junction(other, _negated(condition.left), _negated(condition.right))
    return Comparison(_NEGATED[condition.operator], condition.left, condition.right)


def _comparison(system: System, comparison: Comparison, averaged: bool) -> Form:
    low, high, operator = comparison.left, comparison.right, comparison.operator
    if operator in _SWAPPED:
        low, high, operator = high, low, _SWAPPED[operator]
    algebra = _Algebra(system)
    difference = algebra.sum(algebra.value(low), algebra.negative(algebra.value(high)))
    strict = operator == "<"
    if isinstance(difference, Ratio):
        return _ratio_average(difference, strict) if averaged else _ratio_sign(difference, strict)
    return _log_average(system, difference, strict) if averaged else _log_sign(system, difference, strict)


def _ratio_sign(difference: Ratio, strict: bool) -> Form:
    above, below = difference.numerator, difference.denominator
    signs = {value > 0 for value in below.terms.values()}
    if len(signs) == 1:
        return _guarded(above, below, strict) if signs == {True} else _guarded(-above, -below, strict)
    # of either sign, so the comparison may turn round: times the square it does not; at zero the numerator decides
    square = below * below
    at_zero = Join("and", Leaf(SIGN, (square,), False), Leaf(SIGN, (above,)))
    return Join("or", _guarded(above * below, square, strict), at_zero)


def _guarded(polynomial: Polynomial, positive: Polynomial, strict: bool) -> Form:
    """polynomial < 0, or <= 0 where `positive`, which is never negative, is above zero."""
    if strict or positive.value is not None:
        return Leaf(SIGN, (polynomial,), strict)
    here = Join("and", Leaf(SIGN, (polynomial,), False), Leaf(SIGN, (-positive,)))
    return Join("or", Leaf(SIGN, (polynomial,)), here)


def _ratio_average(difference: Ratio, strict: bool) -> Form:
    below = difference.denominator.value
    if below:
        return Leaf(SIGN, (difference.numerator * Polynomial.constant(1 / below),), strict)
    return Leaf(RATIO, (difference.numerator, difference.denominator), strict)


def _sides(system: System, logs: Logs) -> tuple[Polynomial, Polynomial]:
    """(A, B) such that ln(A / B) has the sign of the value."""
    scale = math.lcm(*(c.denominator for c, *_ in logs.parts))
    whole = logs.scaled(Fraction(scale))
    exponent = float(whole.constant) / system.conditions.RT_kJ_per_mol
    if abs(exponent) > _LARGEST_LOG or sum(abs(c) for c, *_ in whole.parts) > MOST_FACTORS:
        raise NotInFormError("energies too large to multiply out")
    above, below = Polynomial.constant(Fraction(math.exp(exponent))), Polynomial.constant(1)
    for coefficient, upper, lower in whole.parts:
        if coefficient < 0:
            upper, lower = lower, upper
        for _ in range(abs(int(coefficient))):
            above, below = above * upper, below * lower
    return above, below


def _log_sign(system: System, logs: Logs, strict: bool) -> Form:
    above, below = _sides(system, logs)
    return _guarded(above - below, below, strict)


def _log_average(system: System, logs: Logs, strict: bool) -> Form:
    signs = {c > 0 for c, *_ in logs.parts}
    kind = LOG_MIXED if len(signs) == 2 else LOG_UP if True in signs else LOG_DOWN
    return Leaf(kind, _sides(system, logs), strict)


class _Algebra:
    """Expressions as ratios of polynomials, or as sums of logarithms of ratios."""

    def __init__(self, system: System) -> None:
        self.system = system
        self.held = system.held_concentrations()
        self.estimated = estimated_names(system)

    def value(self, node: Node) -> Ratio | Logs:
        if isinstance(node, Named):
            return self.value(node.node)
        if isinstance(node, Number):
            return Ratio(Polynomial.constant(_written(node.value)))
        if isinstance(node, Reference):
            return self.reference(node)
        left, right = self.value(node.left), self.value(node.right)
        if node.operator == "+":
            return self.sum(left, right)
        if node.operator == "-":
            return self.sum(left, self.negative(right))
        return self.product(left, right) if node.operator == "*" else self.quotient(left, right)

    def reference(self, node: Reference) -> Ratio | Logs:
        if node.kind == "gibbs":
            return self.energy(self.system.reaction(node.name))
        if node.kind != "total" and node.name in self.estimated:
            text = f"the free count of {node.name} is estimated, its enzyme being lumped; total({node.name}) is counted"
            raise NotInFormError(text)
        power = -1 if node.kind == "conc" else 0
        total = Polynomial({})
        for name, number in copies_in(self.system, node):
            if name in self.held:
                total += Polynomial.monomial([], power + 1, number * _written(self.held[name]))
            else:
                total += Polynomial.monomial([(name, 0)], power, number)
        return Ratio(total)

    def energy(self, reaction: Reaction) -> Logs:
        """gibbs(r): dG0' + RT ln of the products left by the next firing over the reactants it takes, net."""
        sides = []
        for sign in (1, -1):
            factors: list[tuple[str, int]] = []
            constant, power = Fraction(1), 0
            for name, change in reaction.equation.change.items():
                number = sign * change
                if number <= 0:
                    continue
                if name in self.held:
                    constant *= _written(self.held[name]) ** number
                    continue
                factors += [(name, k - max(change, 0)) for k in range(number)]
                power -= number
            sides.append(Polynomial.monomial(factors, power, constant))
        products, reactants = sides
        assert reaction.K is not None
        if not reactants.terms or not products.terms:
            raise NotInFormError(f"gibbs({reaction.name}) meets a concentration of zero")
        return Logs(((Fraction(1), products, reactants * Polynomial.constant(Fraction(reaction.K))),))

    def sum(self, left: Ratio | Logs, right: Ratio | Logs) -> Ratio | Logs:
        if isinstance(left, Ratio) and isinstance(right, Ratio):
            a, b, c, d = left.numerator, left.denominator, right.numerator, right.denominator
            if b.terms == d.terms:
                return Ratio(a + c, b)
            return Ratio(a * d + c * b, b * d)
        left, right = self.logs(left), self.logs(right)
        return Logs(left.parts + right.parts, left.constant + right.constant)

    def logs(self, value: Ratio | Logs) -> Logs:
        if isinstance(value, Logs):
            return value
        if value.constant is None:
            raise NotInFormError("an energy is added to counts")
        return Logs((), value.constant)

    def negative(self, value: Ratio | Logs) -> Ratio | Logs:
        if isinstance(value, Logs):
            return value.scaled(Fraction(-1))
        return Ratio(-value.numerator, value.denominator)

    def product(self, left: Ratio | Logs, right: Ratio | Logs) -> Ratio | Logs:
        if isinstance(left, Ratio) and isinstance(right, Ratio):
            return Ratio(left.numerator * right.numerator, left.denominator * right.denominator)
        if isinstance(left, Logs):
            left, right = right, left
        if isinstance(left, Logs) or not left.constant:
            raise NotInFormError("an energy is multiplied by something that changes")
        assert isinstance(right, Logs)
        return right.scaled(left.constant)

    def quotient(self, left: Ratio | Logs, right: Ratio | Logs) -> Ratio | Logs:
        if isinstance(right, Logs):
            raise NotInFormError("something is divided by an energy")
        return self.product(left, Ratio(right.denominator, right.numerator))


def _written(value: float) -> Fraction:
    """The decimal that a file says, exactly: 0.3 is 3/10."""
    return Fraction(repr(float(value)))
