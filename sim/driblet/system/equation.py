"""Reaction equations as text: `A + 2 B <=> C`, `A -> B`, `nothing <=> A`, `"ATP + H2O <=> ADP + Pi"`."""

from __future__ import annotations

import re
from dataclasses import dataclass

NAME = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
WATER = "H2O"
NOTHING = "nothing"
RESERVED = frozenset({WATER, NOTHING, "total", "conc", "gibbs", "and", "or", "not"})
_TERM = re.compile(r"(?:([0-9]+)\s*)?([A-Za-z][A-Za-z0-9_]*)")
_LARGEST_NUMBER = 100


class EquationError(ValueError):
    """A text that is not a reaction equation; the message says what would be right."""


@dataclass(frozen=True)
class Equation:
    """Both sides of a reaction: (species, stoichiometric number) in the order written, water apart.

    Attributes: reactants, products : tuple of (name, number); water : products minus reactants; reversible : bool.
    """

    reactants: tuple[tuple[str, int], ...]
    products: tuple[tuple[str, int], ...]
    water: int
    reversible: bool

    @property
    def change(self) -> dict[str, int]:
        """Net stoichiometric number of each species that changes, water left out."""
        change = dict.fromkeys([n for n, _ in self.reactants + self.products], 0)
        for name, number in self.reactants:
            change[name] -= number
        for name, number in self.products:
            change[name] += number
        return {name: number for name, number in change.items() if number}

    @property
    def order_change(self) -> int:
        """Molecules on the right minus molecules on the left, water not counted."""
        return sum(n for _, n in self.products) - sum(n for _, n in self.reactants)

    def __str__(self) -> str:
        def side(terms: tuple[tuple[str, int], ...], water: int) -> str:
            parts = [(f"{n} " if n > 1 else "") + name for name, n in terms]
            parts += [(f"{water} " if water > 1 else "") + WATER] * (water > 0)
            return " + ".join(parts) or NOTHING

        arrow = "<=>" if self.reversible else "->"
        return f"{side(self.reactants, -self.water)} {arrow} {side(self.products, self.water)}"


def read_equation(text: str) -> Equation:
    """Parse a reaction equation; raises EquationError."""
    arrows = re.findall(r"<=>|->|<->|<-|=>|=|→|⇌", text)
    if arrows not in (["<=>"], ["->"]):
        found = f'"{arrows[0]}" is not an arrow here' if len(arrows) == 1 else f"{len(arrows)} arrows"
        raise EquationError(f'"{text}": {found}; write "A + B <=> C", or "A -> B" for one way')
    left, right = text.split(arrows[0])
    reactants, products = _side(left, text), _side(right, text)
    water = products.pop(WATER, 0) - reactants.pop(WATER, 0)
    if reactants == products:
        raise EquationError(f'"{text}": both sides are {"equal" if reactants else "empty"}, so nothing would change')
    return Equation(tuple(reactants.items()), tuple(products.items()), water, arrows[0] == "<=>")


def _side(text: str, whole: str) -> dict[str, int]:
    if text.strip() == NOTHING:
        return {}
    if not text.strip():
        raise EquationError(f'"{whole}": a side is blank; write "{NOTHING}" for an empty side')
    terms: dict[str, int] = {}
    for piece in text.split("+"):
        match = _TERM.fullmatch(piece.strip())
        if not match:
            raise EquationError(f'"{whole}": "{piece.strip()}" is not a species with a whole number before it')
        digits, name = match[1] or "1", match[2]
        if name == NOTHING:
            raise EquationError(f'"{whole}": "{NOTHING}" stands alone on its side')
        number = int(digits) if len(digits) < 10 else _LARGEST_NUMBER + 1
        if not 1 <= number <= _LARGEST_NUMBER:
            raise EquationError(f'"{whole}": the number before {name} must lie between 1 and {_LARGEST_NUMBER}')
        terms[name] = terms.get(name, 0) + number
    return terms
