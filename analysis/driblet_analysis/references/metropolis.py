"""The equilibrium law of counts by Metropolis sampling, where a class has too many states to enumerate.

Energies only, never rates: the weight of a state is prod_i (c_i Omega)^n_i / n_i!, a move is some firings of one reaction
in one direction, allowed where each of them could occur, and accepted with min(1, weight ratio) (Metropolis et al.,
J. Chem. Phys. 21:1087, 1953). The way back from an allowed move is allowed, so the law is kept exactly.
"""

from __future__ import annotations

from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from driblet.engines.compile_cache import CACHE
from driblet.network import FORWARD, Network
from driblet_analysis.references.state_search import climb
from driblet_analysis.references.state_space import channel_matrices

Array = NDArray[np.float64]
MOVES_A_STATE = 400  # between states kept, per reaction, where there is time
BURN_SHARE = 0.3  # of all moves, before the first state is kept
_TABLE = 1 << 16  # ln n! is looked up below this count


class MetropolisSample(NamedTuple):
    """Samples of one replicate's law. states : int64, shape=(samples, species), nearly independent of each other."""

    states: NDArray[np.int64]

    def mean(self) -> Array:
        """Mean counts, shape=(species,)."""
        return np.asarray(self.states.mean(axis=0))


def metropolis(
    network: Network,
    start: ArrayLike,
    ln_mean: Array,
    active: NDArray[np.bool_],
    samples: int,
    seed: int,
    moves: int | None = None,
) -> MetropolisSample:
    """Sample the law of the class of `start`, from its most probable state on.

    start : copies, shape=(species,), any state of the class; ln_mean : ln(c_i Omega), shape=(species,); active : which
    reactions can run, shape=(reactions,); samples : how many states to keep; moves : in all, default MOVES_A_STATE per
    state and reaction. Every sample has the right mean once the burn-in has passed; with few moves samples are correlated.
    """
    need, change = channel_matrices(network)
    forward = network.channel_index(FORWARD)[active]
    backward = network.channel_index(-FORWARD)[active]
    channels = np.concatenate([forward, backward])
    need, change = need[channels], change[channels]
    weight = np.where(np.isfinite(ln_mean), ln_mean, -1e300)
    state = climb(np.array(start, dtype=np.int64), need, change, weight)
    if moves is None:
        moves = int(MOVES_A_STATE * max(1, len(forward)) * samples / (1.0 - BURN_SHARE))
    burn = int(BURN_SHARE * moves)
    out = np.empty((samples, len(state)), dtype=np.int64)
    reach = np.ones(len(channels))
    _sample(state, need, change, weight, reach, out, max(1, (moves - burn) // samples), burn, seed, _ln_factorials())
    return MetropolisSample(out)


@lru_cache(maxsize=1)
def _ln_factorials() -> Array:
    from scipy.special import gammaln

    return np.asarray(gammaln(np.arange(_TABLE) + 1.0))


@njit(nogil=True, cache=CACHE)
def _ln_factorial(n, table):  # type: ignore[no-untyped-def]
    """ln n!, from the table or by Stirling's series (error below 1e-13 there)."""
    if n < table.size:
        return table[n]
    x = n + 1.0
    series = 1.0 / (12.0 * x) - 1.0 / (360.0 * x**3)
    return (x - 0.5) * np.log(x) - x + 0.9189385332046727 + series


@njit(nogil=True, cache=CACHE)
def _ln_ratio(state, change, times, ln_mean, table):  # type: ignore[no-untyped-def]
    """ln of weight(state + times change) / weight(state); -inf where a count would be negative."""
    total = 0.0
    for i in range(state.size):
        d = change[i] * times
        if d != 0:
            n = state[i]
            if n + d < 0:
                return -np.inf
            total += d * ln_mean[i] - _ln_factorial(n + d, table) + _ln_factorial(n, table)
    return total


@njit(nogil=True, cache=CACHE)
def _possible(state, need, change, times):  # type: ignore[no-untyped-def]
    """Whether `times` firings in a row could occur: the needs only tighten or loosen along the way, so both ends tell."""
    for i in range(state.size):  # noqa: SIM110
        if state[i] < need[i] or state[i] + change[i] * (times - 1) < need[i]:
            return False
    return True


@njit(nogil=True, cache=CACHE)
def _sample(state, need, change, ln_mean, reach, out, between, burn, seed, table):  # type: ignore[no-untyped-def]
    np.random.seed(seed)  # noqa: NPY002  (numba's own generator, one a thread)
    kinds = need.shape[0]
    for step in range(burn + between * out.shape[0]):
        m = np.random.randint(kinds)  # noqa: NPY002
        times = 1 + int(np.random.random() * reach[m])  # noqa: NPY002
        accepted = False
        if _possible(state, need[m], change[m], times):
            gain = _ln_ratio(state, change[m], times, ln_mean, table)
            if gain >= 0.0 or np.random.random() < np.exp(gain):  # noqa: NPY002
                accepted = True
                for i in range(state.size):
                    state[i] += change[m, i] * times
        if step < burn:
            # the reach of a reaction's moves settles at about half accepted, the same for both ways
            pair = (m + kinds // 2) % kinds
            factor = 1.02 if accepted else 0.98
            reach[m] = reach[pair] = min(max(1.0, reach[m] * factor), 1e9)
        elif (step - burn + 1) % between == 0:
            for i in range(state.size):
                out[(step - burn) // between, i] = state[i]
