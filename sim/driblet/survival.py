"""Pure statistics of shares, lifetimes and what sets two groups apart: arrays in, numbers out, no simulation objects."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr, ndtri

Array = NDArray[np.float64]
LEVEL = 0.95


class Interval(NamedTuple):
    """An estimate and its confidence limits; a limit the data do not set is infinite or NaN."""

    value: float
    low: float
    high: float


class Survival(NamedTuple):
    """A survival curve: a step at each distinct time at which something failed; arrays of shape (steps,).

    time : s; at_risk : how many were still watched just before; failures; survival : after the step; standard_error :
    Greenwood's; low, high : pointwise limits, NaN once nothing survives.
    """

    time: Array
    at_risk: NDArray[np.int64]
    failures: NDArray[np.int64]
    survival: Array
    standard_error: Array
    low: Array
    high: Array

    def at(self, time: float) -> Interval:
        """Share that survives beyond `time`, with its limits."""
        k = int(np.searchsorted(self.time, time, side="right")) - 1
        if k < 0:
            return Interval(1.0, 1.0, 1.0)
        return Interval(float(self.survival[k]), float(self.low[k]), float(self.high[k]))

    def quantile(self, share: float) -> Interval:
        """Time by which `share` has failed: the first with survival <= 1 - share, inf where that was not reached.

        The limits are where the limits of the curve get there (Brookmeyer & Crowley, Biometrics 38:29, 1982).
        """
        return Interval(*(self._first(curve, 1.0 - share) for curve in (self.survival, self.low, self.high)))

    def _first(self, curve: Array, level: float) -> float:
        below = (curve <= level * (1.0 + 1e-12)) | (np.isnan(curve) & (self.survival == 0.0) & (curve is self.low))
        return float(self.time[int(np.argmax(below))]) if below.any() else np.inf


class Contrast(NamedTuple):
    """How a quantity sets two groups apart. effect : rank-biserial, 1 where every value of the first group is the larger
    one, 0 where neither tends to be, -1 where every one is the smaller; p : two-sided.
    """

    effect: float
    p: float


def wilson(successes: int, trials: int, level: float = LEVEL) -> Interval:
    """A share and Wilson's score interval (J. Am. Stat. Assoc. 22:209, 1927); NaN without trials."""
    if trials == 0:
        return Interval(np.nan, 0.0, 1.0)
    z = float(ndtri(0.5 + level / 2))
    share = successes / trials
    centre = (share + z * z / (2 * trials)) / (1 + z * z / trials)
    half = z / (1 + z * z / trials) * np.sqrt(share * (1 - share) / trials + z * z / (4.0 * trials * trials))
    low = 0.0 if successes == 0 else max(0.0, float(centre - half))
    high = 1.0 if successes == trials else min(1.0, float(centre + half))
    return Interval(share, low, high)


def trials_to_tell(share: float, asked: float, level: float = LEVEL) -> int | None:
    """How many trials would part an observed `share` from `asked`, by Wilson's interval; None where none would.

    The score interval ends at `asked` when |share - asked| = z sqrt(asked (1 - asked) / n).
    """
    if share == asked or asked in (0.0, 1.0):
        return None
    z = float(ndtri(0.5 + level / 2))
    return int(np.ceil(z * z * asked * (1 - asked) / (share - asked) ** 2))


def kaplan_meier(time: ArrayLike, failed: ArrayLike, level: float = LEVEL) -> Survival:
    """The product-limit estimate (Kaplan & Meier, J. Am. Stat. Assoc. 53:457, 1958).

    time : when each was last seen, shape=(n,); failed : whether it failed then or was merely seen no longer. One that is
    last seen as another fails is at risk then. Limits by log(-log S) and Greenwood's variance (Kalbfleisch & Prentice, The
    Statistical Analysis of Failure Time Data, 1980, section 1.3).
    """
    seen, lost = np.asarray(time, dtype=float), np.asarray(failed, dtype=bool)
    steps, failures = np.unique(seen[lost], return_counts=True)
    at_risk = len(seen) - np.searchsorted(np.sort(seen), steps, side="left")
    survival = np.asarray(np.cumprod(1.0 - failures / at_risk), dtype=np.float64)
    left = at_risk - failures
    with np.errstate(divide="ignore", invalid="ignore"):
        greenwood = np.cumsum(failures / (at_risk * left))
        standard_error = np.where(left > 0, survival * np.sqrt(greenwood), 0.0)
        log = np.log(survival)
        spread = ndtri(0.5 + level / 2) * np.sqrt(greenwood) / np.abs(log)
        low, high = survival ** np.exp(spread), survival ** np.exp(-spread)
    low, high = (np.where(left > 0, limit, np.nan) for limit in (low, high))
    return Survival(steps, at_risk.astype(np.int64), failures.astype(np.int64), survival, standard_error, low, high)


def contrast(first: ArrayLike, second: ArrayLike) -> Contrast:
    """The Mann-Whitney test of two groups (Ann. Math. Stat. 18:50, 1947) and its rank-biserial effect 2 U/(n m) - 1.

    p by the normal limit with ties counted, good from about 8 in each group; NaN where a group is empty.
    """
    a, b = np.asarray(first, dtype=float), np.asarray(second, dtype=float)
    n, m = len(a), len(b)
    if not n or not m:
        return Contrast(np.nan, np.nan)
    both = np.concatenate([a, b])
    _, inverse, ties = np.unique(both, return_inverse=True, return_counts=True)
    rank = (np.cumsum(ties) - (ties - 1) / 2.0)[inverse]
    u = float(rank[:n].sum() - n * (n + 1) / 2)
    total = n + m
    variance = n * m / 12.0 * (total + 1 - float(np.sum(ties.astype(float) ** 3 - ties)) / (total * (total - 1)))
    effect = 2 * u / (n * m) - 1
    if variance <= 0:
        return Contrast(0.0, 1.0)
    return Contrast(effect, float(2 * ndtr(-abs(u - n * m / 2) / np.sqrt(variance))))
