"""Pure statistics: corrections, intervals, transforms; arrays in, numbers out, no simulation objects."""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import fdtrc, kolmogorov, ndtr, stdtr

Array = NDArray[np.float64]


def holm(p: Array) -> Array:
    """Holm's step-down correction (Scand. J. Stat. 6:65, 1979): corrected p values, in the order given.

    Rejecting where the corrected value is below alpha keeps the chance of any false alarm at alpha, whatever the
    dependence between the tests.
    """
    p = np.asarray(p, dtype=float)
    order = np.argsort(p)
    factors = len(p) - np.arange(len(p))
    stepped = np.minimum(1.0, np.maximum.accumulate(p[order] * factors))
    corrected = np.empty_like(p)
    corrected[order] = stepped
    return corrected


def randomised_pit(below: Array, at: Array, uniform: Array) -> Array:
    """Randomised probability integral transform F(n - 1) + V P(n): uniform on (0, 1) if n follows the law.

    below : P(N < n); at : P(N = n); uniform : independent numbers in (0, 1); shapes alike. Source: Rosenblatt,
    Ann. Math. Stat. 23:470 (1952); randomised for counts as in Czado, Gneiting & Held, Biometrics 65:1254 (2009).
    """
    return np.asarray(below + uniform * at)


def jackknife(statistic: Callable[[Array], float], samples: Array) -> tuple[float, float]:
    """A statistic of replicates and its delete-one jackknife standard error.

    samples : shape=(replicates, ...), at least 2 replicates; statistic takes the mean over replicates, shape=(...).
    """
    n = len(samples)
    total = samples.sum(axis=0)
    whole = statistic(total / n)
    parts = np.array([statistic((total - one) / (n - 1)) for one in samples])
    return whole, float(np.sqrt((n - 1) / n * np.sum((parts - parts.mean()) ** 2)))


def student_t(differences: Array) -> tuple[float, float]:
    """Student's t of a mean against zero and its two-sided p; differences : shape=(n,), n at least 2, not all equal."""
    n = len(differences)
    t = float(np.mean(differences) / (np.std(differences, ddof=1) / np.sqrt(n)))
    return t, float(2.0 * stdtr(n - 1, -abs(t)))


def uniformity(values: Array) -> tuple[float, float]:
    """Kolmogorov-Smirnov distance of values from the uniform law on (0, 1), and its p.

    Stephens' modification of the limiting distribution (J. R. Stat. Soc. B 32:115, 1970), good from n = 5 up. (The exact
    distribution stands in scipy.stats, whose import takes longer than most checks.)
    """
    n = len(values)
    x = np.sort(values)
    steps = np.arange(1, n + 1) / n
    distance = float(max(np.max(steps - x), np.max(x - steps + 1.0 / n)))
    root = np.sqrt(n)
    return distance, float(kolmogorov((root + 0.12 + 0.11 / root) * distance))


class Hotelling(NamedTuple):
    """T-squared of a mean vector against zero. statistic : T^2; p; dimensions : of the vector, after the rank is found."""

    statistic: float
    p: float
    dimensions: int


def hotelling(differences: Array) -> Hotelling:
    """Hotelling's one-sample T-squared against a zero mean (Ann. Math. Stat. 2:360, 1931).

    differences : shape=(samples, dimensions). Directions without variance are left out (their mean must be tested apart).
    Raises ValueError when there are no more samples than dimensions.
    """
    x = np.atleast_2d(np.asarray(differences, dtype=float))
    n = len(x)
    scale = x.std(axis=0, ddof=1)
    x = x[:, scale > 0] / scale[scale > 0]
    if x.shape[1] == 0:
        return Hotelling(0.0, 1.0, 0)
    mean = x.mean(axis=0)
    values, vectors = np.linalg.eigh(np.atleast_2d(np.cov(x, rowvar=False)))
    kept = values > 1e-10 * values.max()
    k = int(kept.sum())
    if k == n - 1 < x.shape[1]:
        raise ValueError(f"{n} samples cannot test {x.shape[1]} dimensions")
    t2 = float(n * np.sum((vectors[:, kept].T @ mean) ** 2 / values[kept]))
    return Hotelling(t2, float(fdtrc(k, n - k, t2 * (n - k) / (k * (n - 1)))), k)


def normal_p(z: Array) -> Array:
    """Two-sided p of standard normal scores."""
    return np.asarray(2.0 * ndtr(-np.abs(z)))
