"""The states a network can reach: breadth-first search over its channels, compiled where there are many.

A class is every state reachable from one state; with reversible channels it is the same from each of its states. Open
systems have infinite classes: caps cut a box out of one, a weight cuts out where an equilibrium law has its mass.
"""

from __future__ import annotations

import math
import sys
from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from driblet.energetics.cycles import conservation_laws
from driblet.network import Network

Array = NDArray[np.float64]
States = NDArray[np.int64]

LIMIT = 200_000
ENABLED_BUT_OUTSIDE, NOT_ENABLED = -2, -1
_NO_CAP = np.iinfo(np.int64).max
_DEPTH = 36.0  # states of less than exp(-36) = 2e-16 of the largest probability are left out of a cut-out
_LOOKED_UP = 20_000
_SLACK = 2  # but that many steps through rarer states are taken: a rare intermediate must not part the rest
_plain_left = [
    10_000
]  # states that a process finds in plain Python before it loads compiled code, which takes half a second


def enumerate_class(
    network: Network, initial_counts: ArrayLike, limit: int = LIMIT, caps: ArrayLike | None = None
) -> States | None:
    """Every state reachable from `initial_counts`, itself first; int64, shape=(states, species).

    caps : largest count kept of each species, shape=(species,); channels that lead beyond it are cut. None is returned
    when there are more than `limit` states.
    """
    start = _whole(initial_counts)
    top = np.full(len(network.species), _NO_CAP) if caps is None else np.asarray(caps, dtype=np.int64)
    need, change = channel_matrices(network)
    if (start > top).any():
        raise ValueError("the initial counts lie above the caps")
    if "numba" not in sys.modules:
        found = walk(tuple(start.tolist()), need, change, top, _plain_left[0])
        if found is not None:
            _plain_left[0] -= len(found)
            return np.array(found, dtype=np.int64).reshape(len(found), len(start)) if len(found) <= limit else None
    from driblet_analysis.references.state_search import explore

    states, count = explore(start, need, change, top, np.zeros(len(start)), np.inf, 0, limit)
    return states[:count].copy() if count else None


def walk(
    start: tuple[int, ...], need: States, change: States, top: NDArray[np.int64], most: int
) -> list[tuple[int, ...]] | None:
    """The states in the order of the compiled search; None where there are more than `most`."""
    needs = [[(i, n) for i, n in enumerate(row) if n] for row in need.tolist()]
    changes = [[(i, d) for i, d in enumerate(row) if d] for row in change.tolist()]
    caps = top.tolist()
    found, known = [start], {start}
    for state in found:
        for needed, changed in zip(needs, changes, strict=True):
            if any(state[i] < n for i, n in needed):
                continue
            moved = list(state)
            for i, d in changed:
                moved[i] += d
            after = tuple(moved)
            if after in known or any(after[i] > caps[i] for i, _ in changed):
                continue
            if len(found) == most:
                return None
            known.add(after)
            found.append(after)
    return found


def enumerate_mass(network: Network, initial_counts: ArrayLike, ln_mean: Array, limit: int = LIMIT) -> States | None:
    """The states of the class that carry all but about 1e-13 of the law prod_i exp(n_i ln_mean_i) / n_i!.

    ln_mean : shape=(species,), ln(c_i Omega). None is returned when there are more than `limit` of them.
    """
    from driblet_analysis.references.state_search import climb, explore

    need, change = channel_matrices(network)
    top = np.full(len(network.species), _NO_CAP)
    start = climb(_whole(initial_counts), need, change, ln_mean)
    while True:
        states, count = explore(start, need, change, top, ln_mean, _DEPTH, _SLACK, limit)
        if not count:
            return None
        states = states[:count].copy()
        # the climb can end on a local peak; then the search has passed a higher one
        weights = poisson_log_weights(states, ln_mean)
        best = int(np.argmax(weights))
        if weights[best] <= weights[0] + 1e-9:
            return states
        start = climb(states[best], need, change, ln_mean)


def neighbours(network: Network, states: States) -> NDArray[np.int64]:
    """For each state and channel the index of the state it leads to, shape=(states, channels).

    NOT_ENABLED where the channel cannot fire, ENABLED_BUT_OUTSIDE where it leads out of `states`.
    """
    from driblet_analysis.references.state_search import find_neighbours

    need, change = channel_matrices(network)
    return np.asarray(find_neighbours(np.ascontiguousarray(states, dtype=np.int64), need, change))


def is_finite(network: Network, reactions: Sequence[int]) -> bool:
    """Whether these reactions keep every count bounded: some conserved sum has a positive weight for each species."""
    S = network.stoichiometry[:, list(reactions)]
    S = S[(S != 0).any(axis=1)]
    laws = conservation_laws(S)
    if (laws[(laws >= 0).all(axis=1)].sum(axis=0) > 0).all():
        return True
    from scipy.optimize import linprog  # slow to import, and most checks never come here

    result = linprog(
        np.ones(S.shape[0]), A_eq=S.T.astype(float), b_eq=np.zeros(S.shape[1]), bounds=(1.0, None), method="highs"
    )
    return bool(result.status == 0)


def poisson_log_weights(states: States, ln_mean: Array) -> Array:
    """ln prod_i mean_i^n_i / n_i!, shape=(states,); a species of mean zero weighs 1 at n = 0 and 0 above."""
    finite = np.isfinite(ln_mean)
    out = states[:, finite] @ ln_mean[finite] - ln_factorial(states).sum(axis=1)
    return np.where((states[:, ~finite] > 0).any(axis=1), -np.inf, out)


def ln_factorial(counts: States) -> Array:
    """ln n! of whole numbers; looked up where they are small, since scipy.special takes longer to import."""
    top = int(counts.max(initial=0))
    if top > _LOOKED_UP:
        from scipy.special import gammaln

        return np.asarray(gammaln(counts + 1.0))
    return np.array([math.lgamma(n + 1.0) for n in range(top + 1)])[counts]


def channel_matrices(network: Network) -> tuple[States, States]:
    """Counts each channel needs and what a firing changes, int64, both of shape=(channels, species)."""
    need = np.zeros((len(network.channels), len(network.species)), dtype=np.int64)
    change = np.zeros_like(need)
    for j, channel in enumerate(network.channels):
        for i, number in channel.reactants:
            need[j, i] = number
        for i, number in channel.change:
            change[j, i] = number
    return need, change


def _whole(counts: ArrayLike) -> NDArray[np.int64]:
    given = np.asarray(counts)
    whole = np.ascontiguousarray(np.rint(given), dtype=np.int64)
    if (whole != given).any() or (whole < 0).any():
        raise ValueError("counts are whole numbers from zero up")
    return whole
