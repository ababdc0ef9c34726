"""The small language of readouts: + - * / ( ), numbers, quantities, counts, total(X), conc(X), gibbs(r).

A recursive-descent parser of our own; the text of a file is never given to an interpreter. Dimensions are tracked, so
that a count never adds to a concentration: (a, b) stands for (mol/L)^a (kJ/mol)^b.
"""

from __future__ import annotations

import re
from collections.abc import Collection
from dataclasses import dataclass

from driblet.quantities import Quantity, QuantityError, read_number, read_unit

Dimension = tuple[int, int]
PLAIN: Dimension = (0, 0)
_TOKEN = re.compile(r"\s*(?:(\d+(?:\.\d*)?(?:[eE][+-]?\d+)?)|([A-Za-z][A-Za-z0-9_]*)|([-+*/()−]))")
_DEPTH = 60
_MOST_TOKENS = 500  # a chain of operators is a tree as deep as it is long


class ExpressionError(ValueError):
    """A text outside the grammar, or one whose dimensions do not fit; the message says what would be right."""


@dataclass(frozen=True)
class Number:
    """A constant in driblet's units (plain, mol/L or kJ/mol)."""

    value: float
    dimension: Dimension = PLAIN


@dataclass(frozen=True)
class Reference:
    """A quantity of the moment: kind "count" (free copies), "total", "conc" (mol/L) or "gibbs" (kJ/mol) of a name."""

    kind: str
    name: str

    @property
    def dimension(self) -> Dimension:
        """Dimension of the value."""
        return {"conc": (1, 0), "gibbs": (0, 1)}.get(self.kind, PLAIN)


@dataclass(frozen=True)
class Operation:
    """`left operator right` with one of + - * /."""

    operator: str
    left: Node
    right: Node
    dimension: Dimension


Node = Number | Reference | Operation


@dataclass(frozen=True)
class Expression:
    """A parsed expression and the text it came from."""

    text: str
    root: Node

    @property
    def unit(self) -> str:
        """Unit of the value as text: "1", "M", "kJ/mol" or a product of powers."""
        molar, energy = self.root.dimension
        if self.root.dimension == (0, 1):
            return "kJ/mol"
        parts = [
            name + (f"^{power}" if power != 1 else "") for name, power in (("M", molar), ("(kJ/mol)", energy)) if power
        ]
        return " ".join(parts) or "1"


def read_expression(text: str, species: Collection[str], reactions: Collection[str]) -> Expression:
    """Parse `text`; raises ExpressionError for an unknown name or operator and for dimensions that do not fit."""
    parser = _Parser(text, species, reactions)
    root = parser.sum(0)
    if parser.token is not None:
        raise ExpressionError(f'"{parser.token}" is out of place in "{text}"')
    return Expression(text, root)


class _Parser:
    def __init__(self, text: str, species: Collection[str], reactions: Collection[str]) -> None:
        self.text, self.species, self.reactions = text, species, reactions
        self.tokens: list[str] = []
        position = 0
        body = text.rstrip()
        while position < len(body):
            match = _TOKEN.match(body, position)
            if not match:
                raise ExpressionError(
                    f'"{body[position:].strip()[0]}" in "{text}" is outside the grammar: '
                    "+ - * / ( ), names, total(), conc(), gibbs()"
                )
            self.tokens.append(match[0].strip().replace("−", "-"))
            position = match.end()
        if not self.tokens:
            raise ExpressionError("the expression is empty")
        if len(self.tokens) > _MOST_TOKENS:
            raise ExpressionError(f"the expression has {len(self.tokens)} parts; at most {_MOST_TOKENS} are read")
        self.at = 0

    @property
    def token(self) -> str | None:
        return self.tokens[self.at] if self.at < len(self.tokens) else None

    def take(self) -> str:
        token = self.token
        if token is None:
            raise ExpressionError(f'"{self.text}" ends too early')
        self.at += 1
        return token

    def sum(self, depth: int) -> Node:
        node = self.product(depth)
        while self.token in ("+", "-"):
            operator = self.take()
            right = self.product(depth)
            if node.dimension != right.dimension:
                raise ExpressionError(
                    f'"{self.text}" {"adds" if operator == "+" else "subtracts"} values of different units: '
                    "counts, concentrations (conc) and energies (gibbs) do not mix"
                )
            node = Operation(operator, node, right, node.dimension)
        return node

    def product(self, depth: int) -> Node:
        node = self.factor(depth)
        while self.token in ("*", "/"):
            operator = self.take()
            right = self.factor(depth)
            sign = 1 if operator == "*" else -1
            a, b = node.dimension, right.dimension
            node = Operation(operator, node, right, (a[0] + sign * b[0], a[1] + sign * b[1]))
        return node

    def factor(self, depth: int) -> Node:
        if depth > _DEPTH:
            raise ExpressionError("the expression is nested too deeply")
        token = self.take()
        if token == "-":
            right = self.factor(depth + 1)
            return Operation("-", Number(0.0, right.dimension), right, right.dimension)
        if token == "(":
            node = self.sum(depth + 1)
            self.close()
            return node
        if token[0].isdigit():
            return self.number(token)
        if not token[0].isalpha():
            raise ExpressionError(f'"{token}" is out of place in "{self.text}"')
        if self.token == "(":
            return self.call(token)
        if token in self.species:
            return Reference("count", token)
        raise ExpressionError(f'"{token}" in "{self.text}" is not a species{nearest(token, self.species)}')

    def number(self, token: str) -> Node:
        try:
            value = read_number(token)
            following = self.token
            if following is None or not following[0].isalpha() or following in self.species:
                return Number(value)
            unit_text = self.take()
            if self.token == "/" and self.at + 1 < len(self.tokens) and self.tokens[self.at + 1] == "mol":
                unit_text += self.take() + self.take()
            unit = read_unit(unit_text)
        except QuantityError as error:
            raise ExpressionError(str(error)) from error
        quantity = Quantity(value, unit, f"{token} {unit_text}")
        if quantity.kind == "concentration":
            return Number(quantity.to("concentration"), (1, 0))
        if quantity.kind == "energy":
            return Number(quantity.to("energy"), (0, 1))
        if quantity.kind == "copies":
            return Number(quantity.to("copies"))
        raise ExpressionError(f'"{quantity.text}" has no place here: a concentration, an energy or copies would')

    def call(self, function: str) -> Node:
        if function not in ("total", "conc", "gibbs"):
            raise ExpressionError(f'"{function}(" is not a function: total(X), conc(X) and gibbs(reaction) are')
        self.take()
        name = self.take()
        known = self.reactions if function == "gibbs" else self.species
        if name not in known:
            what = "reaction" if function == "gibbs" else "species"
            raise ExpressionError(f'"{name}" in "{self.text}" is not a {what}{nearest(name, known)}')
        self.close()
        return Reference(function, name)

    def close(self) -> None:
        if self.token != ")":
            raise ExpressionError(f'a ")" is missing in "{self.text}"')
        self.take()


def nearest(name: str, known: Collection[str]) -> str:
    """The closing half of a message about an unknown name: what was probably meant."""
    from difflib import get_close_matches

    close = get_close_matches(name, known, 1)
    return f'; did you mean "{close[0]}"?' if close else f"; known: {', '.join(sorted(known)) or 'none'}"
