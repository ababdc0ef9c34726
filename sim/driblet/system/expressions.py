"""The small language of readouts: + - * / ( ), numbers, quantities, counts, total(X), conc(X), gibbs(r).

Requirements add < > <= >= and, or, not and the names of readouts. A recursive-descent parser of our own; the text of a
file is never given to an interpreter. Dimensions are tracked, so that a count never adds to a concentration and never
compares with one: (a, b) stands for (mol/L)^a (kJ/mol)^b.
"""

from __future__ import annotations

import re
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field

from driblet.quantities import OutOfRangeError, Quantity, QuantityError, check_unit, read_number
from driblet.system.standard_readouts import STANDARD_NAMES, standard_readout

Dimension = tuple[int, int]
PLAIN: Dimension = (0, 0)
_NUMBER, _NAME, _SIGNS = r"\d+(?:\.\d*)?(?:[eE][+-]?\d+)?", r"[A-Za-z][A-Za-z0-9_]*", r"[-+*/()−]"
_TOKEN = re.compile(rf"\s*({_NUMBER}|{_NAME}|{_SIGNS})")
_CONDITION_TOKEN = re.compile(rf"\s*({_NUMBER}|{_NAME}|<=|>=|[<>≤≥]|{_SIGNS})")
_SAME = {"−": "-", "≤": "<=", "≥": ">="}
COMPARISONS = ("<", "<=", ">", ">=")
KEYWORDS = ("and", "or", "not")
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


@dataclass(frozen=True)
class Named:
    """A readout by its name, standing for its expression."""

    name: str
    node: Node

    @property
    def dimension(self) -> Dimension:
        """Dimension of the value."""
        return self.node.dimension


Node = Number | Reference | Operation | Named


@dataclass(frozen=True)
class Comparison:
    """`left operator right` with one of < <= > >=; both sides have one dimension."""

    operator: str
    left: Node
    right: Node


@dataclass(frozen=True)
class Junction:
    """`left and right` or `left or right`."""

    operator: str
    left: Truth
    right: Truth


@dataclass(frozen=True)
class Negation:
    """`not inner`."""

    inner: Truth


Truth = Comparison | Junction | Negation


@dataclass(frozen=True)
class Condition:
    """A parsed condition, true or false of a state, and the text it came from."""

    text: str
    root: Truth


@dataclass(frozen=True)
class Names:
    """What an expression may refer to: species, reversible reactions, readouts, and RT in kJ/mol for energies in kT."""

    species: Collection[str]
    reactions: Collection[str] = ()
    readouts: Mapping[str, Expression] = field(default_factory=dict)
    RT_kJ_per_mol: float | None = None


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
    return read_value(text, Names(species, reactions))


def read_value(text: str, names: Names) -> Expression:
    """Parse an expression that has a value; raises ExpressionError as `read_expression` does."""
    parser = _Parser(text, names, conditions=False)
    root = parser.number_like(parser.sum(0))
    parser.end()
    return Expression(text, root)


def read_condition(text: str, names: Names) -> Condition:
    """Parse a condition; raises ExpressionError also when it compares nothing, or nothing that can change."""
    parser = _Parser(text, names, conditions=True)
    root = parser.either(0)
    parser.end()
    if not isinstance(root, Truth):
        raise ExpressionError(
            f'"{text}" is no condition: it compares nothing; write one such as "{text.strip()} > ..."'
        )
    for comparison in comparisons(root):
        if not (references(comparison.left) or references(comparison.right)):
            raise ExpressionError(f'"{text}" compares constants, which is true or false whatever happens')
    return Condition(text, root)


def comparisons(root: Truth) -> list[Comparison]:
    """Every comparison in a condition, from left to right."""
    if isinstance(root, Comparison):
        return [root]
    if isinstance(root, Negation):
        return comparisons(root.inner)
    return comparisons(root.left) + comparisons(root.right)


def references(root: Node) -> list[Reference]:
    """Every reference in an expression, from left to right."""
    if isinstance(root, Reference):
        return [root]
    if isinstance(root, Named):
        return references(root.node)
    return references(root.left) + references(root.right) if isinstance(root, Operation) else []


class _Parser:
    def __init__(self, text: str, names: Names, conditions: bool) -> None:
        self.text, self.names, self.conditions = text, names, conditions
        self.species, self.reactions = names.species, names.reactions
        self.tokens: list[str] = []
        position = 0
        body = text.rstrip()
        pattern = _CONDITION_TOKEN if conditions else _TOKEN
        while position < len(body):
            match = pattern.match(body, position)
            if not match:
                raise ExpressionError(self.outside(body[position:].strip()[0]))
            self.tokens.append(_SAME.get(match[1], match[1]))
            position = match.end()
        if not self.tokens:
            raise ExpressionError(f"the {'condition' if conditions else 'expression'} is empty")
        if len(self.tokens) > _MOST_TOKENS:
            raise ExpressionError(f"the expression has {len(self.tokens)} parts; at most {_MOST_TOKENS} are read")
        self.at = 0

    def outside(self, character: str) -> str:
        more = " < > <= >= and or not" if self.conditions else ""
        hint = "; comparisons belong in [requirements]" if not self.conditions and character in "<>≤≥" else ""
        return (
            f'"{character}" in "{self.text}" is outside the grammar: '
            f"+ - * / ( ){more}, names, total(), conc(), gibbs(){hint}"
        )

    def end(self) -> None:
        if self.token in COMPARISONS:
            raise ExpressionError(f'"{self.text}" compares twice in a row; join two comparisons with "and"')
        if self.token is not None:
            raise ExpressionError(f'"{self.token}" is out of place in "{self.text}"')

    def either(self, depth: int) -> Node | Truth:
        """A condition, or a value where nothing is compared."""
        left = self.conjunction(depth)
        while self.token == "or":
            self.take()
            left = Junction("or", self.truth_like(left), self.truth_like(self.conjunction(depth)))
        return left

    def conjunction(self, depth: int) -> Node | Truth:
        left = self.negation(depth)
        while self.token == "and":
            self.take()
            left = Junction("and", self.truth_like(left), self.truth_like(self.negation(depth)))
        return left

    def negation(self, depth: int) -> Node | Truth:
        if depth > _DEPTH:
            raise ExpressionError("the expression is nested too deeply")
        if self.token == "not":
            self.take()
            return Negation(self.truth_like(self.negation(depth + 1)))
        left = self.sum(depth)
        if self.token not in COMPARISONS or isinstance(left, Truth):
            return left
        operator = self.take()
        right = self.number_like(self.sum(depth))
        if left.dimension != right.dimension:
            raise ExpressionError(self.mismatch(left, right))
        return Comparison(operator, left, right)

    def mismatch(self, left: Node, right: Node) -> str:
        value, constant = (right, left) if not references(left) else (left, right)
        if not references(constant):
            example = {(1, 0): '"1 mM"', (0, 1): '"-45 kJ/mol"', (-1, 0): '"1e4 /M"'}.get(value.dimension)
            if constant.dimension == PLAIN and example:
                return f'"{self.text}" compares with a bare number; a unit is needed there, such as {example}'
            if (value.dimension, constant.dimension) == (PLAIN, (1, 0)):
                return f'"{self.text}" compares a number of copies with a concentration; conc(...) is one'
        return (
            f'"{self.text}" compares values of different units: counts, concentrations (conc) and energies (gibbs) '
            "compare only with their like"
        )

    def number_like(self, node: Node | Truth) -> Node:
        if isinstance(node, Truth):
            raise ExpressionError(f'"{self.text}" reckons with a condition, which is true or false and no number')
        return node

    def truth_like(self, node: Node | Truth) -> Truth:
        if not isinstance(node, Truth):
            raise ExpressionError(
                f'"{self.text}" joins a value that is compared with nothing; "and", "or" and "not" join comparisons'
            )
        return node

    @property
    def token(self) -> str | None:
        return self.tokens[self.at] if self.at < len(self.tokens) else None

    def take(self) -> str:
        token = self.token
        if token is None:
            raise ExpressionError(f'"{self.text}" ends too early')
        self.at += 1
        return token

    def sum(self, depth: int) -> Node | Truth:
        node = self.product(depth)
        while self.token in ("+", "-"):
            node = self.number_like(node)
            operator = self.take()
            right = self.number_like(self.product(depth))
            if node.dimension != right.dimension:
                raise ExpressionError(
                    f'"{self.text}" {"adds" if operator == "+" else "subtracts"} values of different units: '
                    "counts, concentrations (conc) and energies (gibbs) do not mix"
                )
            node = Operation(operator, node, right, node.dimension)
        return node

    def product(self, depth: int) -> Node | Truth:
        node = self.factor(depth)
        while self.token in ("*", "/"):
            node = self.number_like(node)
            operator = self.take()
            right = self.number_like(self.factor(depth))
            sign = 1 if operator == "*" else -1
            a, b = node.dimension, right.dimension
            node = Operation(operator, node, right, (a[0] + sign * b[0], a[1] + sign * b[1]))
        return node

    def factor(self, depth: int) -> Node | Truth:
        if depth > _DEPTH:
            raise ExpressionError("the expression is nested too deeply")
        token = self.take()
        if token == "-":
            right = self.number_like(self.factor(depth + 1))
            return Operation("-", Number(0.0, right.dimension), right, right.dimension)
        if token == "(":
            node = self.either(depth + 1) if self.conditions else self.sum(depth + 1)
            self.close()
            return node
        if token[0].isdigit():
            return self.number(token)
        if not token[0].isalpha() or (self.conditions and token in KEYWORDS):
            raise ExpressionError(f'"{token}" is out of place in "{self.text}"')
        if self.token == "(":
            return self.call(token)
        return self.named(token)

    def named(self, name: str) -> Node:
        readouts = self.names.readouts
        if name in self.species:
            if name in readouts:
                raise ExpressionError(f'"{name}" in "{self.text}" is a species and a readout; rename the readout')
            return Reference("count", name)
        if name in readouts:
            return Named(name, readouts[name].root)
        standard = standard_readout(name, self.species)
        if standard is not None:
            return Named(name, read_expression(standard, self.species, ()).root)
        if name in STANDARD_NAMES:
            missing = [s for s in STANDARD_NAMES[name] if s not in self.species]
            raise ExpressionError(f'"{name}" in "{self.text}" needs the species {" and ".join(missing)}')
        what = "a species or readout" if self.conditions else "a species"
        raise ExpressionError(f'"{name}" in "{self.text}" is not {what}{nearest(name, [*self.species, *readouts])}')

    def number(self, token: str) -> Node:
        try:
            value = read_number(token)
            unit_text = self.unit_text()
            if unit_text is None:
                return Number(value)
            unit = check_unit(unit_text)
        except QuantityError as error:
            raise ExpressionError(str(error)) from error
        try:
            return self.constant(Quantity(value, unit, f"{token} {unit_text}"))
        except OutOfRangeError as error:
            raise ExpressionError(str(error)) from error

    def constant(self, quantity: Quantity) -> Node:
        if quantity.kind == "concentration":
            return Number(quantity.to("concentration"), (1, 0))
        if quantity.kind == "energy":
            return Number(quantity.to("energy"), (0, 1))
        if quantity.kind == "thermal energy" and self.names.RT_kJ_per_mol is not None:
            return Number(quantity.to("thermal energy") * self.names.RT_kJ_per_mol, (0, 1))
        if quantity.kind == "copies":
            return Number(quantity.to("copies"))
        try:
            return Number(quantity.to_power(-1), (-1, 0))
        except QuantityError as error:
            text = f'"{quantity.text}" has no place here: a concentration, an energy or copies would'
            raise ExpressionError(text) from error

    def unit_text(self) -> str | None:
        """The unit after a number, taken; None where a name, an operator or nothing follows."""
        per = self.token == "/"  # "1e4 /M"
        at = self.at + per
        following = self.tokens[at] if at < len(self.tokens) else None
        if following is None or not following[0].isalpha() or self.known(following):
            return None
        if at + 1 < len(self.tokens) and self.tokens[at + 1] == "(":
            return None
        self.at = at + 1
        if per:
            return "/" + following
        if self.token == "/" and self.at + 1 < len(self.tokens) and self.tokens[self.at + 1] == "mol":
            return following + self.take() + self.take()
        return following

    def known(self, name: str) -> bool:
        if name in self.species or name in self.names.readouts or standard_readout(name, self.species):
            return True
        return self.conditions and name in KEYWORDS

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

    close = [k for k in known if k.lower() == name.lower()] or get_close_matches(name, known, 1)
    return f'; did you mean "{close[0]}"?' if close else f"; known: {', '.join(sorted(known)) or 'none'}"
