"""The equilibrium law of counts by Metropolis sampling, where a class has too many states to enumerate.

Energies only, never rates: the weight of a state is prod_i (c_i Omega)^n_i / n_i!, a move is some firings of one reaction
in one direction, allowed where each of them could occur, and accepted with min(1, weight ratio) (Metropolis et al.,
J. Chem. Phys. 21:1087, 1953). The way back from an allowed move is allowed, so the law is kept exactly.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import ArrayLike, NDArray

from driblet.engines.compile_cache import CACHE
from driblet.network import FORWARD, Network
from driblet_analysis.references.state_space import channel_matrices

Array = NDArray[np.float64]
SWEEPS = 400  # moves a state sampled, per reaction
BURN = 200


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
) -> MetropolisSample:
    """Sample the law of the class of `start`.

    start : copies, shape=(species,), any state of the class; ln_mean : ln(c_i Omega), shape=(species,); active : which
    reactions can run, shape=(reactions,); samples : how many states to keep.
    """
    need, change = channel_matrices(network)
    forward = network.channel_index(FORWARD)[active]
    backward = network.channel_index(-FORWARD)[active]
    moves = np.concatenate([forward, backward])
    keep = np.isfinite(ln_mean)
    weight = np.where(keep, ln_mean, -1e300)
    state = np.array(start, dtype=np.int64)
    reach = np.ones(len(moves))
    out = np.empty((samples, len(state)), dtype=np.int64)
    _sample(state, need[moves], change[moves], weight, reach, out, SWEEPS * max(1, len(forward)), BURN, seed)
    return MetropolisSample(out)


@njit(nogil=True, cache=CACHE)
def _ln_ratio(state, change, times, ln_mean):  # type: ignore[no-untyped-def]
    """ln of weight(state + times change) / weight(state); -inf where a count would be negative."""
    total = 0.0
    for i in range(state.size):
        d = change[i] * times
        if d == 0:
            continue
        n = state[i]
        if n + d < 0:
            return -np.inf
        total += d * ln_mean[i]
        if abs(d) <= 16:
            for k in range(d):
                total -= np.log(n + k + 1.0)
            for k in range(-d):
                total += np.log(n - k + 0.0)
        else:
            total -= _ln_factorial(n + d) - _ln_factorial(n)
    return total


@njit(nogil=True, cache=CACHE)
def _ln_factorial(n):  # type: ignore[no-untyped-def]
    """ln n!, by Stirling's series from 32 up (error below 1e-13)."""
    if n < 32:
        total = 0.0
        for k in range(2, n + 1):
            total += np.log(k + 0.0)
        return total
    x = n + 1.0
    series = 1.0 / (12.0 * x) - 1.0 / (360.0 * x**3) + 1.0 / (1260.0 * x**5)
    return (x - 0.5) * np.log(x) - x + 0.9189385332046727 + series


@njit(nogil=True, cache=CACHE)
def _possible(state, need, change, times):  # type: ignore[no-untyped-def]
    """Whether `times` firings in a row could occur: the needs only tighten or loosen along the way, so both ends tell."""
    for i in range(state.size):  # noqa: SIM110
        if state[i] < need[i] or state[i] + change[i] * (times - 1) < need[i]:
            return False
    return True


@njit(nogil=True, cache=CACHE)
def _sample(state, need, change, ln_mean, reach, out, moves_a_sample, burn, seed):  # type: ignore[no-untyped-def]
    np.random.seed(seed)  # noqa: NPY002  (numba's own generator, one a thread)
    kinds = need.shape[0]
    for sample in range(-burn, out.shape[0]):
        for _ in range(moves_a_sample):
            m = np.random.randint(kinds)  # noqa: NPY002
            times = 1 + int(np.random.random() * reach[m])  # noqa: NPY002
            accepted = False
            if _possible(state, need[m], change[m], times):
                gain = _ln_ratio(state, change[m], times, ln_mean)
                if gain >= 0.0 or np.random.random() < np.exp(gain):  # noqa: NPY002
                    accepted = True
                    for i in range(state.size):
                        state[i] += change[m, i] * times
            # while burning in, the reach of each reaction's moves settles at about half accepted; the same for both ways
            if sample < 0:
                pair = (m + kinds // 2) % kinds
                factor = 1.02 if accepted else 0.98
                reach[m] = reach[pair] = min(max(1.0, reach[m] * factor), 1e9)
        if sample >= 0:
            for i in range(state.size):
                out[sample, i] = state[i]
