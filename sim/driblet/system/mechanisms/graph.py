"""Mechanisms as graphs, before they have constants: states of the enzyme and the links between them.

A state is the tuple of what is bound, first bound first; a covalently modified form stands in it as "A-P", what A leaves
behind when P has gone. Ligands are species names; where the two sites of a random mechanism bind the same species, the
second site's ligand carries "#2".
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

State = tuple[str, ...]
SECOND_SITE = "#2"
FREE: State = ()


class Link(NamedTuple):
    """One elementary step, in the direction of the catalysed reaction.

    binds, releases : the ligand (with its site mark), or None. A link with neither turns central complexes over.
    """

    source: State
    target: State
    binds: str | None = None
    releases: str | None = None

    @property
    def key(self) -> str:
        """How a system file names the step; "" for a turnover, which is named after its reaction."""
        if self.binds is not None:
            return f"binds_{self.binds}" + _with(self.source)
        if self.releases is not None:
            return f"releases_{self.releases}" + _with(self.target)
        return ""


def _with(state: State) -> str:
    return f"_with_{'_'.join(state)}" if state else ""


def species_of(ligand: str) -> str:
    """The species a ligand is, its site mark taken off."""
    return ligand.removesuffix(SECOND_SITE)


def is_form(ligand: str) -> bool:
    """Whether an entry of a state is a covalent modification and no species."""
    return "-" in ligand


@dataclass(frozen=True)
class Chain:
    """Substrates bind in order, one turnover, products leave in order.

    start, end : the forms of the enzyme before and after; both FREE but in the halves of a ping pong mechanism.
    """

    start: State
    end: State
    substrates: tuple[str, ...]
    products: tuple[str, ...]

    @property
    def binding(self) -> tuple[Link, ...]:
        """The binding steps, in order."""
        states = [self.start + self.substrates[:i] for i in range(len(self.substrates) + 1)]
        return tuple(Link(states[i], states[i + 1], binds=name) for i, name in enumerate(self.substrates))

    @property
    def turnover(self) -> Link:
        """The step between the central complexes."""
        return Link(self.start + self.substrates, self.end + self.products[::-1])

    @property
    def release(self) -> tuple[Link, ...]:
        """The release steps, in order."""
        left = [self.end + self.products[j:][::-1] for j in range(len(self.products) + 1)]
        return tuple(Link(left[j], left[j + 1], releases=name) for j, name in enumerate(self.products))

    @property
    def links(self) -> tuple[Link, ...]:
        """All steps in the order they happen."""
        return (*self.binding, self.turnover, *self.release)


@dataclass(frozen=True)
class Square:
    """Two substrates bind in either order, one turnover, two products leave in either order."""

    substrates: tuple[str, str]
    products: tuple[str, str]

    @property
    def binding(self) -> tuple[tuple[Link, Link], tuple[Link, Link]]:
        """For each substrate: its binding to the free enzyme, and to the enzyme that has the other one."""
        a, b = self.substrates
        full = (a, b)
        return (Link(FREE, (a,), binds=a), Link((b,), full, binds=a)), (
            Link(FREE, (b,), binds=b),
            Link((a,), full, binds=b),
        )

    @property
    def turnover(self) -> Link:
        """The step between the central complexes."""
        return Link(self.substrates, self.products)

    @property
    def release(self) -> tuple[tuple[Link, Link], tuple[Link, Link]]:
        """For each product: its release as the last one, and as the first."""
        p, q = self.products
        full = (p, q)
        return (Link((p,), FREE, releases=p), Link(full, (q,), releases=p)), (
            Link((q,), FREE, releases=q),
            Link(full, (p,), releases=q),
        )

    @property
    def links(self) -> tuple[Link, ...]:
        """All steps."""
        (a0, a1), (b0, b1) = self.binding
        (p0, p1), (q0, q1) = self.release
        return (a0, b0, b1, a1, self.turnover, p1, q1, q0, p0)


def ping_pong(substrates: tuple[str, str], products: tuple[str, str]) -> tuple[Chain, Chain]:
    """The two halves of a ping pong bi bi mechanism, joined by the modified form of the enzyme."""
    form: State = (f"{substrates[0]}-{products[0]}",)
    return Chain(FREE, form, substrates[:1], products[:1]), Chain(form, FREE, substrates[1:], products[1:])


def square(substrates: tuple[str, ...], products: tuple[str, ...]) -> Square:
    """A random bi bi mechanism; sites are marked where both bind one species."""

    def marked(pair: tuple[str, ...]) -> tuple[str, str]:
        first, second = pair
        return first, second + SECOND_SITE * (first == second)

    return Square(marked(substrates), marked(products))


MECHANISMS: dict[str, tuple[int, int]] = {
    "uni uni": (1, 1),
    "ordered uni bi": (1, 2),
    "ordered bi uni": (2, 1),
    "ordered bi bi": (2, 2),
    "random bi bi": (2, 2),
    "ping pong bi bi": (2, 2),
}
"""Cleland's name -> molecules bound, molecules released."""
