"""The states a network can reach: compiled breadth-first search over its channels.

A class is every state reachable from one state; with reversible channels it is the same from each of its states. Open
systems have infinite classes: caps cut a box out of one, a weight cuts out where an equilibrium law has its mass.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from driblet.energetics.cycles import conservation_laws
from driblet.engines.compile_cache import CACHE
from driblet.network import Network

Array = NDArray[np.float64]
States = NDArray[np.int64]

LIMIT = 200_000
ENABLED_BUT_OUTSIDE, NOT_ENABLED = -2, -1
_NO_CAP = np.iinfo(np.int64).max
_DEPTH = 36.0  # states of less than exp(-36) = 2e-16 of the largest probability are left out of a cut-out
_SLACK = 2  # but that many steps through rarer states are taken: a rare intermediate must not part the rest
_MIX = np.uint64(0x9E3779B97F4A7C15)
_HALF, _ONE = np.uint64(32), np.uint64(1)


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
    states, count = _explore(start, need, change, top, np.zeros(len(start)), np.inf, 0, limit)
    return states[:count].copy() if count else None


def enumerate_mass(network: Network, initial_counts: ArrayLike, ln_mean: Array, limit: int = LIMIT) -> States | None:
    """The states of the class that carry all but about 1e-13 of the law prod_i exp(n_i ln_mean_i) / n_i!.

    ln_mean : shape=(species,), ln(c_i Omega). None is returned when there are more than `limit` of them.
    """
    need, change = channel_matrices(network)
    top = np.full(len(network.species), _NO_CAP)
    start = climb(_whole(initial_counts), need, change, ln_mean)
    while True:
        states, count = _explore(start, need, change, top, ln_mean, _DEPTH, _SLACK, limit)
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
    need, change = channel_matrices(network)
    return np.asarray(_neighbours(np.ascontiguousarray(states, dtype=np.int64), need, change))


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
    from scipy.special import gammaln

    finite = np.isfinite(ln_mean)
    out = states[:, finite] @ ln_mean[finite] - gammaln(states + 1.0).sum(axis=1)
    return np.where((states[:, ~finite] > 0).any(axis=1), -np.inf, out)


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


@njit(nogil=True, cache=CACHE)
def _hash(row):  # type: ignore[no-untyped-def]
    value = np.uint64(0)
    for i in range(row.size):
        value = (value ^ np.uint64(row[i])) * _MIX
        value ^= value >> _HALF
    return value


@njit(nogil=True, cache=CACHE)
def _slot(table, states, row):  # type: ignore[no-untyped-def]
    """Where in the hash table (open addressing, size a power of two) `row` is or belongs."""
    mask = np.uint64(table.size) - _ONE
    slot = _hash(row) & mask
    while table[slot] >= 0:
        known = states[table[slot]]
        same = True
        for i in range(row.size):
            if known[i] != row[i]:
                same = False
                break
        if same:
            break
        slot = (slot + _ONE) & mask
    return slot


@njit(nogil=True, cache=CACHE)
def _table(states, count, size):  # type: ignore[no-untyped-def]
    table = np.full(size, -1, dtype=np.int32)
    for k in range(count):
        table[_slot(table, states, states[k])] = k
    return table


@njit(nogil=True, cache=CACHE)
def _enabled(state, need, channel):  # type: ignore[no-untyped-def]
    enabled = True
    for i in range(state.size):
        enabled = enabled and state[i] >= need[channel, i]
    return enabled


@njit(nogil=True, cache=CACHE)
def _copy(row, into):  # type: ignore[no-untyped-def]
    for i in range(row.size):  # an assignment of whole rows takes numba seconds more to compile
        into[i] = row[i]


@njit(nogil=True, cache=CACHE)
def _log_weight(row, ln_mean):  # type: ignore[no-untyped-def]
    value = 0.0
    for i in range(row.size):
        value += row[i] * ln_mean[i] - math.lgamma(row[i] + 1.0)
    return value


@njit(nogil=True, cache=CACHE)
def _explore(start, need, change, caps, ln_mean, depth, slack, limit):  # type: ignore[no-untyped-def]
    """Breadth first. States below exp(-depth) of the start's weight are kept only for `slack` steps in a row."""
    channels, species = need.shape
    states = np.empty((64, species), dtype=np.int64)
    below = np.zeros(64, dtype=np.int64)
    _copy(start, states[0])
    table = _table(states, 1, 256)
    threshold = _log_weight(start, ln_mean) - depth
    row = np.empty(species, dtype=np.int64)
    count, k = 1, 0
    while k < count:
        for j in range(channels):
            if not _enabled(states[k], need, j):
                continue
            inside = True
            for i in range(species):
                row[i] = states[k, i] + change[j, i]
                if row[i] > caps[i]:
                    inside = False
            if not inside:
                continue
            slot = _slot(table, states, row)
            if table[slot] >= 0:
                continue
            steps = 0
            if depth < np.inf and _log_weight(row, ln_mean) < threshold:
                steps = below[k] + 1
                if steps > slack:
                    continue
            if count == limit:
                return states, 0
            if count == states.shape[0]:
                more, more_below = np.empty((2 * count, species), dtype=np.int64), np.zeros(2 * count, dtype=np.int64)
                for known in range(count):
                    _copy(states[known], more[known])
                    more_below[known] = below[known]
                states, below = more, more_below
                table = _table(states, count, 8 * count)
                slot = _slot(table, states, row)
            _copy(row, states[count])
            below[count] = steps
            table[slot] = count
            count += 1
        k += 1
    return states, count


@njit(nogil=True, cache=CACHE)
def _rise(state, need, change, ln_mean, channel, strides):  # type: ignore[no-untyped-def]
    """By how much the last of `strides` firings of a channel in a row raises ln weight; -inf when it cannot fire."""
    value = 0.0
    for i in range(state.size):
        d = change[channel, i]
        n = state[i] + (strides - 1) * d
        if n < need[channel, i]:
            return -np.inf
        value += d * ln_mean[i]
        for step in range(abs(d)):
            value += math.log(float(n - step)) if d < 0 else -math.log(n + 1.0 + step)
    return value


@njit(nogil=True, cache=CACHE)
def climb(start, need, change, ln_mean):  # type: ignore[no-untyped-def]
    """Fire whichever channel raises the weight most, as often as it does, until none does.

    Along repeated firings ln weight is concave: if the last one raises it, so did all before.
    """
    state = start.copy()
    for _ in range(100_000):
        best, gain = -1, 1e-12
        for j in range(need.shape[0]):
            rise = _rise(state, need, change, ln_mean, j, 1)
            if rise > gain:
                best, gain = j, rise
        if best < 0:
            break
        strides = 1
        while strides < 1 << 40 and _rise(state, need, change, ln_mean, best, 2 * strides) > 1e-12:
            strides *= 2
        for i in range(state.size):
            state[i] += strides * change[best, i]
    return state


@njit(nogil=True, cache=CACHE)
def _neighbours(states, need, change):  # type: ignore[no-untyped-def]
    count, species = states.shape
    channels = need.shape[0]
    size = 4
    while size < 4 * count:
        size *= 2
    table = _table(states, count, size)
    out = np.empty((count, channels), dtype=np.int64)
    row = np.empty(species, dtype=np.int64)
    for k in range(count):
        for j in range(channels):
            if not _enabled(states[k], need, j):
                out[k, j] = -1
                continue
            for i in range(species):
                row[i] = states[k, i] + change[j, i]
            found = table[_slot(table, states, row)]
            out[k, j] = found if found >= 0 else -2
    return out
