"""The value at which a share reaches a target, from trials at several values: curves, profile likelihood, exact bounds.

A curve is F(u) = L(g(p) + b (u - theta)) around the root theta, where F is the target p, with one of four laws L. The
interval of theta is that of the profile likelihood, the slope b and the law both being nuisances: at each theta the best
law counts, so the interval is as wide as not knowing the law makes it (discrete profiling: Dauncey et al., J. Instrum.
10:P04015, 2015). Values far from the root are left out where no law fits them all, so the fit is local where it must be.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import betaincinv, chdtrc, expit, logit, ndtr, ndtri, xlogy

from driblet.survival import LEVEL, Interval

Array = NDArray[np.float64]
_FINE = 241  # thetas looked at in one pass
_TINY = 1e-12
_MANY = 30.0
MISFIT = 0.005  # p of the deviance below which no law is taken to fit; looked at many times in a search
_GOLDEN = (np.sqrt(5.0) - 1.0) / 2.0
_STEPS = 34  # golden sections: the logarithm of the slope to one part in 10^6


class Law(NamedTuple):
    """A distribution function and its inverse."""

    of: Callable[[Array], Array]
    inverse: Callable[[ArrayLike], Array]


# probit, logit and the two extreme-value laws: that a Poisson number is not zero follows the third with slope 1 in log mean
LAWS: dict[str, Law] = {
    "probit": Law(lambda e: np.asarray(ndtr(e)), lambda p: np.asarray(ndtri(p))),
    "logit": Law(lambda e: np.asarray(expit(e)), lambda p: np.asarray(logit(p))),
    "complementary log-log": Law(
        lambda e: np.asarray(-np.expm1(-np.exp(np.minimum(e, 50.0)))), lambda p: np.log(-np.log1p(-np.asarray(p)))
    ),
    "log-log": Law(
        lambda e: np.asarray(np.exp(-np.exp(np.minimum(-e, 50.0)))), lambda p: -np.log(-np.log(np.asarray(p)))
    ),
}


def clopper_pearson(met: int, trials: int, level: float = LEVEL) -> Interval:
    """A share with the exact limits of Clopper & Pearson (Biometrika 26:404, 1934); (0, 1) without trials."""
    if not trials:
        return Interval(np.nan, 0.0, 1.0)
    tail = (1.0 - level) / 2
    low = 0.0 if met == 0 else float(betaincinv(met, trials - met + 1, tail))
    high = 1.0 if met == trials else float(betaincinv(met + 1, trials - met, 1.0 - tail))
    return Interval(met / trials, low, high)


def fewest_to_show(target: float, level: float = LEVEL) -> int:
    """How many trials, all met, put the lower Clopper-Pearson limit above `target` (below 1)."""
    return int(np.floor(np.log((1.0 - level) / 2) / np.log(target))) + 1


def mcnemar(first: ArrayLike, second: ArrayLike) -> float:
    """Exact one-sided p that `second` is met less often than `first`, outcomes of the same trials, shape=(n,) each.

    Source: McNemar, Psychometrika 12:153 (1947), by the binomial law of the pairs that differ.
    """
    a, b = np.asarray(first) == 1, np.asarray(second) == 1
    lost, won = int((a & ~b).sum()), int((~a & b).sum())
    if not lost:
        return 1.0
    from scipy.special import bdtrc

    return float(bdtrc(lost - 1, lost + won, 0.5))


class Trials(NamedTuple):
    """Independent trials: at positions u, `trials` of which `met` met it; shape=(J,) each, parts of trials allowed."""

    u: Array
    trials: Array
    met: Array

    @classmethod
    def of(cls, rows: Iterable[tuple[float, float, float]]) -> Trials:
        """From (u, trials, met), rows of one position added up."""
        total: dict[float, list[float]] = {}
        for u, n, k in rows:
            sum_ = total.setdefault(float(u), [0.0, 0.0])
            sum_[0] += n
            sum_[1] += k
        ordered = sorted(total.items())
        return cls(
            np.array([u for u, _ in ordered]),
            np.array([n for _, (n, _) in ordered]),
            np.array([k for _, (_, k) in ordered]),
        )

    def only(self, kept: NDArray[np.bool_]) -> Trials:
        """The trials at some of the positions."""
        return Trials(self.u[kept], self.trials[kept], self.met[kept])

    def deviance(self, share: Array) -> tuple[float, int]:
        """2 log likelihood ratio of a share of its own at each position to the ones given, and positions counted.

        Positions of few trials are left out, their deviance being far from chi-squared.
        """
        many = self.trials >= _MANY
        k, n, p = self.met[many], self.trials[many], np.clip(share[many], _TINY, 1.0 - _TINY)
        own = k / n
        parts = xlogy(k, own / p) + xlogy(n - k, (1.0 - own) / (1.0 - p))
        return 2.0 * float(np.sum(parts)), int(many.sum())


@dataclass(frozen=True)
class Root:
    """Where the curve reaches the target.

    theta : in u, with its interval; share : of the curve at theta.value, with its interval; law, slope : of the best
    curve, slope signed, per u, law "" where none fits and theta comes from exact bounds; misfit_p : of its deviance, NaN
    with too few positions; used : positions the fit rests on.
    """

    theta: Interval
    share: Interval
    law: str
    slope: float
    misfit_p: float
    used: tuple[float, ...]
    target: float

    def curve(self, u: ArrayLike) -> Array:
        """The fitted share at positions u."""
        law = LAWS[self.law or "probit"]
        eta = law.inverse(self.target) + self.slope * (np.asarray(u, dtype=float) - self.theta.value)
        return law.of(eta)

    def position(self, share: float) -> float:
        """Where the fitted curve has a share."""
        law = LAWS[self.law or "probit"]
        return self.theta.value + float(law.inverse(share) - law.inverse(self.target)) / self.slope


def _profile(data: Trials, theta: Array, target: ArrayLike, law: Law, sign: int, scale: float) -> tuple[Array, Array]:
    """Largest log likelihood over slopes of one sign at each theta, and the logarithm of that slope; shape=(T,).

    target : one for all thetas, or one each.
    """
    eta0 = law.inverse(np.broadcast_to(target, theta.shape))[:, None]
    distance = sign * (data.u[None, :] - theta[:, None])

    def likelihood(log_slope: Array) -> Array:
        p = np.clip(law.of(eta0 + np.exp(log_slope)[:, None] * distance), _TINY, 1.0 - _TINY)
        return np.asarray((data.met * np.log(p) + (data.trials - data.met) * np.log1p(-p)).sum(axis=1))

    low = np.full(len(theta), np.log(0.02 / scale))
    high = np.full(len(theta), np.log(2e4 / scale))
    a, b = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
    fa, fb = likelihood(a), likelihood(b)
    for _ in range(_STEPS):
        left = fa > fb
        low, high = np.where(left, low, a), np.where(left, b, high)
        new = np.where(left, high - _GOLDEN * (high - low), low + _GOLDEN * (high - low))
        fnew = likelihood(new)
        a, b = np.where(left, new, b), np.where(left, a, new)
        fa, fb = np.where(left, fnew, fb), np.where(left, fa, fnew)
    middle = (low + high) / 2
    return likelihood(middle), middle


def _best(
    data: Trials, theta: Array, target: ArrayLike, sign: int, scale: float
) -> tuple[Array, NDArray[np.int64], Array]:
    """Over all laws: the largest log likelihood at each theta, which law gives it, and its slope's logarithm."""
    found = [_profile(data, theta, target, law, sign, scale) for law in LAWS.values()]
    likelihood = np.array([f for f, _ in found])
    law = likelihood.argmax(axis=0)
    columns = np.arange(len(theta))
    return likelihood[law, columns], law, np.array([s for _, s in found])[law, columns]


def fit_root(data: Trials, target: float, sign: int, limits: tuple[float, float], level: float = LEVEL) -> Root:
    """The position at which the share reaches `target`, for shares that rise (sign 1) or fall (-1) with u.

    limits : of u; the root is looked for to half their distance beyond them, where its interval may end. Raises ValueError
    without trials at two positions.
    """
    if len(data.u) < 2:
        raise ValueError("trials at two positions are needed")
    while True:
        root = _fit(data, target, sign, limits, level)
        if not root.misfit_p < MISFIT or len(data.u) <= 3:
            return root
        data = data.only(np.arange(len(data.u)) != np.argmax(np.abs(data.u - root.theta.value)))


def _fit(data: Trials, target: float, sign: int, limits: tuple[float, float], level: float) -> Root:
    span = limits[1] - limits[0]
    bound = float(ndtri(0.5 + level / 2)) ** 2 / 2  # of the log likelihood's fall
    theta = np.linspace(limits[0] - span / 2, limits[1] + span / 2, _FINE)
    top = -np.inf
    for _ in range(5):  # closer and closer around where the likelihood has not yet fallen by the bound
        likelihood, law, slope = _best(data, theta, target, sign, span)
        top = float(likelihood.max())
        inside = np.flatnonzero(likelihood >= top - bound)
        first, last = max(0, inside[0] - 2), min(_FINE - 1, inside[-1] + 2)
        if last - first > _FINE // 3:
            break
        theta = np.linspace(theta[first], theta[last], _FINE)
    fall = top - likelihood
    plateau = np.flatnonzero(fall < 1e-5)
    best = int(plateau[len(plateau) // 2])
    low, high = _crossing(theta, fall, best, bound, -1), _crossing(theta, fall, best, bound, 1)
    name = list(LAWS)[int(law[best])]
    value = float(theta[best])
    signed = sign * float(np.exp(slope[best]))
    fitted = LAWS[name].of(LAWS[name].inverse(target) + signed * (data.u - value))
    deviance, positions = data.deviance(fitted)
    misfit = float(chdtrc(positions - 2, max(0.0, deviance))) if positions > 2 else np.nan
    share = _share_interval(data, value, target, sign, span, top, bound)
    return Root(Interval(value, low, high), share, name, signed, misfit, tuple(map(float, data.u)), target)


def _crossing(theta: Array, fall: Array, best: int, bound: float, side: int) -> float:
    """Where the fall of the likelihood passes the bound on one side of the best; infinite where it does not."""
    order = range(best, len(theta)) if side > 0 else range(best, -1, -1)
    outer = None
    indices = list(order)
    for k, i in enumerate(indices):  # the outermost crossing: with several laws the fall may have two dips
        if fall[i] <= bound:
            outer = k
    assert outer is not None
    if outer + 1 >= len(indices):
        return side * np.inf
    i, j = indices[outer], indices[outer + 1]
    return float(theta[i] + (bound - fall[i]) / (fall[j] - fall[i]) * (theta[j] - theta[i]))


def _share_interval(
    data: Trials, theta: float, target: float, sign: int, scale: float, top: float, bound: float
) -> Interval:
    """The share at theta with its profile interval: the targets for which theta cannot be ruled out as the root."""
    shares = np.asarray(ndtr(ndtri(target) + np.linspace(-1.5, 1.5, 121)))
    fall = top - _best(data, np.full(len(shares), theta), shares, sign, scale)[0]
    inside = np.flatnonzero(fall <= bound)
    return Interval(target, float(shares[max(0, inside[0] - 1)]), float(shares[min(len(shares) - 1, inside[-1] + 1)]))


def isotonic_bracket(data: Trials, target: float, sign: int, level: float = LEVEL) -> Interval:
    """The root without any law: where the monotone fit crosses the target, between the last value shown to be on one side
    and the first shown to be on the other (Clopper-Pearson).

    The monotone fit is that of Ayer et al. (Ann. Math. Stat. 26:641, 1955), by scipy.
    """
    from scipy.optimize import isotonic_regression

    share = data.met / data.trials
    fitted = isotonic_regression(share, weights=data.trials, increasing=sign > 0).x
    exact = [clopper_pearson(int(k), int(n), level) for k, n in zip(data.met, data.trials, strict=True)]
    below = np.array([one.high < target for one in exact])
    above = np.array([one.low > target for one in exact])
    if sign < 0:
        fitted, below, above = -fitted, above, below
        target = -target
    low = float(data.u[below].max()) if below.any() else -np.inf
    high = float(data.u[above & (data.u > low)].min()) if (above & (data.u > low)).any() else np.inf
    if fitted[0] >= target:
        value = float(data.u[0])
    elif fitted[-1] < target:
        value = float(data.u[-1])
    else:
        j = int(np.argmax(fitted >= target))
        part = (target - fitted[j - 1]) / (fitted[j] - fitted[j - 1])
        value = float(data.u[j - 1] + part * (data.u[j] - data.u[j - 1]))
    return Interval(float(np.clip(value, low, high)), low, high)
