"""What the leap engine needs beyond the network: reversible pairs, what a channel depends on, and the noise of turnover."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.engines.contract import NetworkArrays

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]

# columns of `work`, what was done in each replicate
LEAPS, IMPLICIT, EVENTS, CRITICAL_EVENTS, REJECTED, UNCORRECTED, LONGEST, STIFFEST = range(8)
WORK = 8


class Pairs(NamedTuple):
    """The K reversible pairs of a network of M channels; a leap moves along net extents of pairs.

    forward, backward : (K,), channels, -1 where there is none; pair : (M,), of each channel; sense : (M,), +1 or -1
    change_start, change_species, change_amount : CSR over pairs, what one net forward firing changes
    depend_start, depend_species : CSR over channels, the species that change at all and that its propensity depends on
    order : (M,), how many molecules of such species it takes, at least 1
    taken_start, taken_species, taken_amount : CSR over channels, what one firing uses up
    """

    forward: Ints
    backward: Ints
    pair: Ints
    sense: NDArray[np.float64]
    change_start: Ints
    change_species: Ints
    change_amount: NDArray[np.float64]
    depend_start: Ints
    depend_species: Ints
    order: NDArray[np.float64]
    taken_start: Ints
    taken_species: Ints
    taken_amount: NDArray[np.float64]


class Turnover(NamedTuple):
    """Noise of the turnovers of E lumped enzymes, as ratios of polynomials in counts over c1 of each enzyme's generator.

    copies : (E,), species; activities : (E,), A
    law_start : (E + 1,), law_pair : (L,), law_turns : (L, A max), pairs of an enzyme and the turns of one net firing
    unit : (E, A max), the pair that turns one activity alone
    monomial_start : (E + 1,), over monomials; variable_start : (T + 1,), over their variables; species, held : what is
    counted, and how many molecules of it are held already
    row_start : (E + 1,), over rows of coefficients: c1; c2, s; d_1 .. d_A; g_11, g_12 .. g_AA, 1/s. Row k of enzyme e has a
    coefficient for each of its monomials; they follow the constants in `rates`, from `coefficient_start`[e] on (E + 1,).
    """

    copies: Ints
    activities: Ints
    law_start: Ints
    law_pair: Ints
    law_turns: NDArray[np.float64]
    unit: Ints
    monomial_start: Ints
    variable_start: Ints
    species: Ints
    held: NDArray[np.float64]
    row_start: Ints
    coefficient_start: Ints


class Room(NamedTuple):
    """Scratch of one call, each replicate's after the other; sizes in M channels, N species, K pairs, A activities."""

    w: Floats
    end_w: Floats
    slope: Floats
    pace: Floats
    end_pace: Floats
    scratch: Floats
    adjoint: Floats
    gradient: Floats
    critical: Ints
    bound: Floats
    drift: Floats
    spread: Floats
    pull: Floats
    end: Floats
    matrix: Floats
    lu: Floats
    pivot: Ints
    there: Floats
    back: Floats
    more: Floats
    fewer: Floats
    fix: Floats
    rest: Floats
    extent: Floats
    drawn: Ints
    J: Floats
    C: Floats
    value: Floats
    lower: Floats
    turned: Floats
    big: Ints
    one: Ints


def new_room(pairs: Pairs, turnover: Turnover, species: int, nodes: int) -> Room:
    """Scratch for a network whose largest factor has `nodes` nodes."""
    M, K, N, A = len(pairs.pair), len(pairs.forward), species + 1, turnover.unit.shape[1]
    sizes: dict[str, tuple[int, ...]] = {
        **dict.fromkeys(("w", "end_w", "critical", "pace", "end_pace"), (M,)),
        **dict.fromkeys(("bound", "drift", "spread", "pull", "end", "gradient"), (N,)),
        **dict.fromkeys(("there", "back", "more", "fewer", "fix", "rest", "extent", "drawn", "pivot"), (K,)),
        **dict.fromkeys(("scratch", "adjoint"), (nodes + 1,)),
        **dict.fromkeys(("matrix", "lu"), (K, K)),
        **dict.fromkeys(("J", "turned", "big"), (A,)),
        **dict.fromkeys(("C", "lower"), (A, A)),
        "slope": (len(pairs.depend_species),),
        "value": (2 + A + A * (A + 1) // 2,),
        "one": (1,),
    }
    whole = {"critical", "pivot", "drawn", "big", "one"}
    arrays: dict[str, Any] = {k: np.zeros(n, dtype=np.int64 if k in whole else np.float64) for k, n in sizes.items()}
    room = Room(**arrays)
    room.scratch[0] = room.end[-1] = 1.0
    return room


def no_turnover() -> Turnover:
    """No enzyme whose turnovers are anything but independent."""
    none, start = np.zeros(0, dtype=np.int64), np.zeros(1, dtype=np.int64)
    return Turnover(
        none, none, start, none, np.zeros((0, 1)), np.zeros((0, 1), dtype=np.int64), start, start, none, np.zeros(0), start,
        start,
    )  # fmt: skip


def pairs_of(network: NetworkArrays, reaction: Ints, direction: Ints, species: int) -> Pairs:
    """Lay out pairs. reaction, direction : (M,), of each channel, +1 or -1; species : how many are free."""
    channels = len(reaction)
    names = np.unique(reaction)
    place = {int(r): k for k, r in enumerate(names)}
    forward = np.full(len(names), -1, dtype=np.int64)
    backward = forward.copy()
    pair = np.array([place[int(r)] for r in reaction], dtype=np.int64)
    changes: list[list[tuple[int, float]]] = [[] for _ in names]
    taken: list[list[tuple[int, float]]] = []
    for j in range(channels):
        span = slice(network.change_start[j], network.change_start[j + 1])
        own = [
            (int(i), float(a)) for i, a in zip(network.change_species[span], network.change_amount[span], strict=True)
        ]
        taken.append([(i, -a) for i, a in own if a < 0])
        (forward if direction[j] > 0 else backward)[pair[j]] = j
        changes[pair[j]] = [(i, a * float(direction[j])) for i, a in own]
    moving = {i for one in changes for i, _ in one}
    depends: list[list[int]] = []
    order = np.ones(channels)
    for j in range(channels):
        reactants = [int(i) for i in network.reactant[j] if i < species]
        nodes = slice(network.factor_start[j, 0], network.factor_start[j, 2])
        others = [int(i) for i in network.node_species[nodes] if i < species]
        depends.append(sorted({*reactants, *others} & moving))
        order[j] = max(1, sum(i in moving for i in reactants))
    change_start, change = _csr(changes)
    taken_start, used = _csr(taken)
    depend_start = np.cumsum([0, *(len(d) for d in depends)]).astype(np.int64)
    return Pairs(
        forward,
        backward,
        pair,
        np.asarray(direction, dtype=np.float64),
        change_start,
        change[:, 0].astype(np.int64),
        np.ascontiguousarray(change[:, 1]),
        depend_start,
        np.array([i for d in depends for i in d], dtype=np.int64),
        order,
        taken_start,
        used[:, 0].astype(np.int64),
        np.ascontiguousarray(used[:, 1]),
    )


def _csr(rows: list[list[tuple[int, float]]]) -> tuple[Ints, NDArray[np.float64]]:
    start = np.cumsum([0, *(len(row) for row in rows)]).astype(np.int64)
    return start, np.array([item for row in rows for item in row], dtype=np.float64).reshape(-1, 2)
