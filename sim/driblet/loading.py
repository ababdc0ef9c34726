"""What a replicate starts with: its size, its molecules and its random stream, from its own seed alone.

Every draw is an inverse distribution function of one uniform number, so that a replicate's load rises with the mean when
a sweep or a sizing changes it (common random numbers).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from driblet.quantities import copies_per_molar
from driblet.system.model import Compartment, System

Array = NDArray[np.float64]
_MANY = 1e9
_PREPARATION, _ADDITIONS = 1, 2  # spawn keys that set these draws of a replicate apart from its reaction events


@dataclass(frozen=True)
class Preparation:
    """Start of some replicates. omega : copies per mol/L, (R,); counts : (R, free species); stream : uint64, (R, 4)."""

    omega: Array
    counts: Array
    stream: NDArray[np.uint64]

    @property
    def volume_L(self) -> Array:
        """Inner volume, L, shape=(R,)."""
        return self.omega / copies_per_molar(1.0)


def prepare(system: System, seed: int, replicates: Sequence[int], key: int = 0) -> Preparation:
    """Draw sizes and loads of the given replicates; `key` sets the points of a sweep apart."""
    species = system.free_species
    streams = np.array(
        [np.random.SeedSequence(seed, spawn_key=(key, r)).generate_state(4, np.uint64) for r in replicates],
        dtype=np.uint64,
    ).reshape(len(replicates), 4)
    words = np.array(
        [
            np.random.SeedSequence(seed, spawn_key=(key, r, _PREPARATION)).generate_state(1 + len(species), np.uint64)
            for r in replicates
        ],
        dtype=np.uint64,
    ).reshape(len(replicates), 1 + len(species))
    uniform = ((words >> np.uint64(12)).astype(float) + 0.5) * 2.0**-52
    omega = copies_per_molar(1.0) * volumes(system.compartment, uniform[:, 0])
    counts = np.zeros((len(replicates), len(species)))
    for i, one in enumerate(species):
        mean = one.concentration_M * omega if one.concentration_M is not None else np.full(len(omega), one.copies)
        counts[:, i] = poisson_quantile(uniform[:, 1 + i], mean) if one.loading == "poisson" else np.rint(mean)
    return Preparation(omega, counts, streams)


def additions_of(system: System, seed: int, replicates: Sequence[int], omega: Array, key: int = 0) -> Array:
    """Copies that each addition brings to the given replicates, shape=(R, additions); omega as in Preparation."""
    count = len(system.additions)
    out = np.zeros((len(replicates), count))
    if not count:
        return out
    words = [
        np.random.SeedSequence(seed, spawn_key=(key, r, _ADDITIONS)).generate_state(count, np.uint64)
        for r in replicates
    ]
    uniform = ((np.array(words, dtype=np.uint64) >> np.uint64(12)).astype(float) + 0.5) * 2.0**-52
    for i, one in enumerate(system.additions):
        mean = one.concentration_M * omega if one.concentration_M is not None else np.full(len(omega), one.copies)
        out[:, i] = poisson_quantile(uniform[:, i], mean) if one.loading == "poisson" else np.rint(mean)
    return out


def volumes(compartment: Compartment, uniform: Array) -> Array:
    """Inner volumes in L of a lognormal size spread, or of sizes as measured, from uniform numbers in (0, 1).

    A diameter below two walls is no compartment; the build refuses spreads where that is likelier than one in a million,
    and what is left of it is cut off here.
    """
    if compartment.sizes_L:
        sizes = np.array(compartment.sizes_L)
        return np.asarray(sizes[np.minimum((uniform * len(sizes)).astype(np.int64), len(sizes) - 1)])
    sigma = math.sqrt(math.log1p(compartment.cv**2))
    if not sigma:
        return np.full(len(uniform), compartment.volume_L)
    from scipy.special import ndtr, ndtri  # not needed by every run, and slow to import

    if compartment.diameter_m is None:
        return np.asarray(compartment.volume_L * np.exp(sigma * ndtri(uniform)))
    lowest = ndtr(math.log(2.0 * compartment.wall_m / compartment.diameter_m) / sigma) if compartment.wall_m else 0.0
    diameter = compartment.diameter_m * np.exp(sigma * ndtri(lowest + (1.0 - lowest) * uniform))
    return np.asarray(math.pi / 6 * (diameter - 2 * compartment.wall_m) ** 3 * 1000.0)


def poisson_quantile(p: Array, mean: Array) -> Array:
    """Smallest k with P(N <= k) >= p for N Poisson of the given mean; shapes alike.

    Above 1e9 copies, where scipy's inverse gives up, to the nearest copy or two by Cornish and Fisher's expansion.
    """
    from scipy.special import ndtri, pdtr, pdtrik

    k = np.zeros_like(p)
    many = mean > _MANY
    z = ndtri(p[many])
    k[many] = np.ceil(mean[many] + z * np.sqrt(mean[many]) + (z * z - 1.0) / 6.0 - 0.5)
    some = (mean > 0) & ~many
    q, m = p[some], mean[some]
    guess = np.ceil(np.nan_to_num(pdtrik(q, m), nan=0.0))
    guess = np.maximum(guess, 0.0)
    below = np.maximum(guess - 1.0, 0.0)
    k[some] = np.where(pdtr(below, m) >= q, below, guess)
    return k
