"""Derived values of a sweep: arithmetic over quantities, such as "0.05 * species.ATP".

A recursive-descent parser of our own; the text of a file is never given to an interpreter. Key paths stand for the values of
the point; units are carried along, so that mM + nm is refused and 2 * mM is mM.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from driblet.quantities import Quantity, QuantityError, check_unit, read_number, read_quantity, read_unit
from driblet_analysis.sweep.keypaths import Scalar

_TOKEN = re.compile(
    r"\s*(?:(?P<number>\d+(?:\.\d*)?(?:[eE][+-]?\d+)?)(?:\s+(?P<unit>[A-Za-zµμ°]+(?:/mol)?)(?![\w.]))?"
    r"|(?P<path>[A-Za-z][A-Za-z0-9_]*(?:\.[A-Za-z][A-Za-z0-9_]*)+)|(?P<sign>[-+*/()−]))"
)
_DEPTH = 60
_MOST_TOKENS = 200
DIGITS = 10  # of a computed value as it is written into the point; what is written is what is simulated


class DerivedError(ValueError):
    """A text outside the grammar, or one that cannot be computed; the message says what would be right."""


@dataclass(frozen=True)
class Formula:
    """A parsed formula. Attributes: text; paths : the key paths it refers to, in order."""

    text: str
    root: Any
    paths: tuple[str, ...]

    def value(self, values: Mapping[str, Scalar]) -> Scalar:
        """What the formula gives for the values of a point: a text with a unit, or a plain number.

        Raises DerivedError when the units do not fit, a value is no quantity, or the result is not finite.
        """
        try:
            result = self.root(lambda path: _read(path, values[path]))
            magnitude, unit = float(result.magnitude), result.units
        except (QuantityError, ArithmeticError) as error:
            reason = "it divides by zero" if isinstance(error, ZeroDivisionError) else str(error)
            raise DerivedError(f'"{self.text}" cannot be computed: {reason}') from error
        except _pint_errors() as error:
            raise DerivedError(f'"{self.text}" adds or subtracts quantities of different units') from error
        if not abs(magnitude) < float("inf"):
            raise DerivedError(f'"{self.text}" is not finite')
        number = f"{magnitude:.{DIGITS}g}"
        if unit.dimensionless:
            factor = float((1.0 * unit).to("").magnitude)
            plain = float(f"{magnitude * factor:.{DIGITS}g}")
            return int(plain) if plain.is_integer() and abs(plain) < 2**53 else plain
        return f"{number} {unit_text(unit)}"


def unit_text(unit: Any) -> str:
    """A pint unit as a system file writes it."""
    text = f"{unit:~C}".replace("°C", "degC").replace("Δ", "")
    return "/" + text[2:] if text.startswith("1/") else text


def _pint_errors() -> tuple[type[Exception], ...]:
    from pint.errors import PintError

    return (PintError, TypeError)


def _read(path: str, value: Scalar) -> Any:
    if isinstance(value, bool):
        raise QuantityError(f"{path} is {value}, not a quantity")
    return _quantity(read_quantity(value, allow_plain=True))


def _quantity(quantity: Quantity) -> Any:
    """The pint quantity of ours: a product of number and unit, an offset unit (degC) turned into kelvin."""
    if quantity.kind == "temperature":
        return quantity.to("temperature") * read_unit("K")
    return quantity.value * quantity.unit


def read_formula(text: str) -> Formula:
    """Parse a formula; raises DerivedError for what is outside the grammar."""
    parser = _Parser(text)
    root = parser.sum(0)
    if parser.token is not None:
        raise DerivedError(f'"{parser.token[1]}" is out of place in "{text}"')
    return Formula(text, root, tuple(dict.fromkeys(parser.paths)))


_Node = Callable[[Callable[[str], Any]], Any]


class _Parser:
    def __init__(self, text: str) -> None:
        self.text, self.at = text, 0
        self.paths: list[str] = []
        self.tokens: list[tuple[str, str, str]] = []
        body, position = text.rstrip(), 0
        while position < len(body):
            match = _TOKEN.match(body, position)
            if not match:
                rest = body[position:].strip()
                raise DerivedError(
                    f'"{rest.split()[0]}" in "{text}" is outside the grammar: + - * / ( ), numbers, quantities such as '
                    "5 mM, and key paths such as species.ATP"
                )
            kind = match.lastgroup if match.lastgroup != "unit" else "number"
            assert kind is not None
            self.tokens.append((kind, match[kind], match["unit"] or ""))
            position = match.end()
        if not self.tokens:
            raise DerivedError("the formula is empty")
        if len(self.tokens) > _MOST_TOKENS:
            raise DerivedError(f"the formula has {len(self.tokens)} parts; at most {_MOST_TOKENS} are read")

    @property
    def token(self) -> tuple[str, str, str] | None:
        return self.tokens[self.at] if self.at < len(self.tokens) else None

    def take(self) -> tuple[str, str, str]:
        token = self.token
        if token is None:
            raise DerivedError(f'"{self.text}" ends too early')
        self.at += 1
        return token

    def is_sign(self, signs: str) -> bool:
        return self.token is not None and self.token[0] == "sign" and self.token[1] in signs

    def sum(self, depth: int) -> _Node:
        node = self.product(depth)
        while self.is_sign("+-−"):
            plus, left, right = self.take()[1] == "+", node, self.product(depth)
            node = _sum(left, right) if plus else _difference(left, right)
        return node

    def product(self, depth: int) -> _Node:
        node = self.factor(depth)
        while self.is_sign("*/"):
            times, left, right = self.take()[1] == "*", node, self.factor(depth)
            node = _product(left, right) if times else _quotient(left, right)
        return node

    def factor(self, depth: int) -> _Node:
        if depth > _DEPTH:
            raise DerivedError("the formula is nested too deeply")
        kind, text, unit = self.take()
        if kind == "path":
            self.paths.append(text)
            return lambda values: values(text)
        if kind == "number":
            try:
                quantity = _quantity(
                    Quantity(read_number(text), check_unit(unit), f"{text} {unit}") if unit else _plain(text)
                )
            except QuantityError as error:
                raise DerivedError(str(error)) from error
            return lambda _: quantity
        if text in "-−":
            inner = self.factor(depth + 1)
            return lambda values: -inner(values)
        if text == "(":
            node = self.sum(depth + 1)
            if not self.is_sign(")"):
                raise DerivedError(f'a ")" is missing in "{self.text}"')
            self.take()
            return node
        raise DerivedError(f'"{text}" is out of place in "{self.text}"')


def _plain(text: str) -> Quantity:
    return read_quantity(text, allow_plain=True)


def _sum(left: _Node, right: _Node) -> _Node:
    return lambda values: left(values) + right(values)


def _difference(left: _Node, right: _Node) -> _Node:
    return lambda values: left(values) - right(values)


def _product(left: _Node, right: _Node) -> _Node:
    return lambda values: left(values) * right(values)


def _quotient(left: _Node, right: _Node) -> _Node:
    return lambda values: left(values) / right(values)
