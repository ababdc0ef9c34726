"""Microscopic rate constants from kcat, K_M and an equilibrium constant: numbers in, numbers out.

A chain binds its substrates one after another, turns over once between two central complexes, and lets its products go:

    E + A <=> EA,  EA + B <=> EAB,  EAB <=> EPQ,  EPQ <=> EQ + P,  EQ <=> E + Q.

Chains of one or two substrates and products make Cleland's ordered mechanisms (Biochim. Biophys. Acta 67:104, 1963), two
chains in a row a ping pong one; with `random` set, either ligand may come or go first. With no product and the other
substrate saturating, let g be the rate at which a full central complex goes on to let its first product go for good, r
the rates of release. Then

    1/kcat = 1/g + sum 1/r,   kcat/K_A = k_on of A when it is followed by a saturating substrate, and otherwise
    kcat/K_A = k_on g / (k_off + g),   and the Haldane relation reads  prod K_product * kf/kr = K' prod K_substrate,

K of a ligand its dissociation constant. What is not stated is chosen so: a substrate's off-rate is kcat (for the leading
one of an ordered mechanism that makes K_i = K_M); products bind alike and as weakly as the limits below allow; they leave
at the geometric mean of kcat and the fastest rate, or faster where the limits need it: the first as fast as it must,
later ones at least a tenth as fast.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np

FASTEST_ON = 1e9  # /M/s, about what diffusion allows; common practice, no source
FASTEST = 1e6  # /s, for every derived constant that is not an on-rate; common practice, no source
WEAKEST = 1.0  # mol/L: a product that binds more weakly than this does not bind
_ROUNDING = 1e-12
_LATER = 0.1
_TIGHTEST, _GRID = 1e-15, 400


class MechanismError(ValueError):
    """Constants that no mechanism can have.

    key : the key of the enzyme's table it concerns; position : of the substrate, until `named` puts its name into the key;
    largest : the largest kcat that would do, 1/s, where the message is about that.
    """

    def __init__(self, text: str, key: str = "", position: int | None = None, largest: float | None = None) -> None:
        super().__init__(text)
        self.text, self.key, self.position, self.largest = text, key, position, largest

    def __str__(self) -> str:
        return self.text if self.largest is None else f"{self.text}: at most {self.largest:.4g} /s"

    def named(self, substrates: Sequence[str]) -> MechanismError:
        """The same with the substrate's name in the key."""
        if self.position is None:
            return self
        return MechanismError(self.text, f"{self.key}.{substrates[self.position]}", None, self.largest)

    def scaled(self, of_whole: Callable[[float], float]) -> MechanismError:
        """The same about the kcat of a whole reaction of which this was a part."""
        largest = None if self.largest is None else of_whole(self.largest)
        return MechanismError(self.text, self.key, self.position, largest)


class Pair(NamedTuple):
    """Rate constants of one reversible binding: on in /M/s, off in /s."""

    on: float
    off: float

    @property
    def Kd(self) -> float:
        """Dissociation constant, mol/L."""
        return self.off / self.on


@dataclass(frozen=True)
class Substrate:
    """What is known of a substrate: KM and perhaps Kd in mol/L, or `fixed`, the constants an earlier reaction gave it.

    leading : whether another substrate binds after it in a fixed order.
    """

    KM: float | None = None
    Kd: float | None = None
    leading: bool = False
    fixed: Pair | None = None


@dataclass(frozen=True)
class Product:
    """What is known of a product: perhaps its Kd in mol/L, or `fixed`."""

    Kd: float | None = None
    fixed: Pair | None = None


@dataclass(frozen=True)
class ChainConstants:
    """The result: bindings in the order of the arguments, and the turnover between the central complexes, 1/s.

    With `random`, a substrate's pair holds for binding to the enzyme that has the other one already.
    """

    substrates: tuple[Pair, ...]
    products: tuple[Pair, ...]
    forward: float
    backward: float


@dataclass(frozen=True)
class Problem:
    """One chain to solve. kcat : 1/s; K : equilibrium constant relative to 1 mol/L; interaction : factor on the Kd of
    a substrate when the other one is bound (random only).
    """

    kcat: float
    K: float
    substrates: tuple[Substrate, ...]
    products: tuple[Product, ...]
    random: bool = False
    interaction: float = 1.0


@lru_cache(maxsize=1024)  # a sweep builds thousands of systems with the same enzymes
def solve(problem: Problem) -> ChainConstants:
    """All constants of a chain within the limits. Raises MechanismError, which tells the largest kcat where that helps."""
    _check_encounters(problem)
    found = _weakest_products(problem)
    if found is None:
        largest = _largest_kcat(problem)
        limits = "on-rates at most 1e9 /M/s and the other constants 1e6 /s"
        raise MechanismError(f"is more than this energy allows with {limits}", "kcat", largest=largest)
    return found


def _check_encounters(problem: Problem) -> None:
    for i, substrate in enumerate(problem.substrates):
        if substrate.fixed is not None:
            continue
        assert substrate.KM is not None
        slope = problem.kcat / substrate.KM
        if slope >= FASTEST_ON:
            raise MechanismError(
                f"kcat/K_M is {slope:.3g} /M/s, faster than molecules meet: it must be below 1e9 /M/s", "KM", i
            )
        if substrate.leading and substrate.Kd is not None and slope * substrate.Kd > FASTEST:
            raise MechanismError(
                f"it would leave at {slope * substrate.Kd:.3g} /s; at most {FASTEST / slope:.3g} M is possible", "Kd", i
            )
        if not substrate.leading and substrate.Kd is not None:
            # k_off = Kd kcat/K_M g/(g - Kd kcat/K_M) with g hardly above kcat, products leaving fast
            limit = substrate.KM / problem.interaction
            if substrate.Kd >= limit:
                raise MechanismError(
                    f"must be below {limit:.3g} M for this K_M; an enzyme that lets its product go slowly needs steps",
                    "Kd",
                    i,
                )


class _Trial(NamedTuple):
    constants: ChainConstants | None
    margin: float  # ln of kf/kr over the least it may be; below zero the trial breaks a limit
    g: float = math.inf
    chemistry: float = 0.0  # kf/kr


_BROKEN = _Trial(None, -math.inf)


def _eased(problem: Problem, kcat: float, weak: float) -> ChainConstants | None:
    """Constants as by `_try`, the first product leaving no faster than it must: fewer events, the same energies.

    At the geometric mean of kcat and the fastest rate, or faster so that a central complex turns back no more often than
    it goes on.
    """
    fast = _try(problem, kcat, weak)
    if fast.margin < -_ROUNDING:
        return None
    rate = max(math.sqrt(FASTEST * kcat), (1.0 if problem.random else 2.0) * fast.g / fast.chemistry)
    trial = _try(problem, kcat, weak, rate)
    return trial.constants if trial.margin >= 0 else fast.constants


def _try(problem: Problem, kcat: float, weak: float, fastest_release: float = FASTEST) -> _Trial:
    """Constants when every product without a stated Kd dissociates at `weak` mol/L."""
    products = []
    for j, product in enumerate(problem.products):
        if product.fixed is not None:
            products.append(product.fixed)
            continue
        Kd = product.Kd if product.Kd is not None else weak
        rate = min(fastest_release, FASTEST_ON * Kd)
        if j and not problem.random:
            # slower, or the last product would come and go at every free moment; slower still, and the first one would
            # find its complex again and inhibit far below its Kd
            rate = min(rate, max(math.sqrt(FASTEST * kcat), _LATER * products[0].off))
        products.append(Pair(rate / Kd, rate))
    rates = [pair.off for pair in products]
    if problem.random:
        first = sum(rates)
        releasing = 1.0 / first + (rates[0] / rates[1] + rates[1] / rates[0]) / first
    else:
        first = rates[0]
        releasing = sum(1.0 / rate for rate in rates)
    left = 1.0 / kcat - releasing
    if left <= 1e-9 / kcat:
        return _BROKEN
    g = 1.0 / left
    substrates = [_substrate(one, kcat, g, problem.interaction) for one in problem.substrates]
    if any(pair is None for pair in substrates) or g > FASTEST:
        return _BROKEN
    pairs = tuple(pair for pair in substrates if pair is not None)
    chemistry = problem.K * math.prod(pair.Kd for pair in pairs) / math.prod(pair.Kd for pair in products)
    if problem.random:
        chemistry /= problem.interaction
    least = max(g / FASTEST + g / first, g / first / (1.0 - g / FASTEST) if g < FASTEST else math.inf)
    if not (0.0 < chemistry < math.inf) or not math.isfinite(least):
        return _BROKEN
    backward = g / (chemistry - g / first) if chemistry > g / first else math.inf
    constants = ChainConstants(pairs, tuple(products), chemistry * backward, backward)
    return _Trial(constants, math.log(chemistry) - math.log(least), g, chemistry)


def _substrate(substrate: Substrate, kcat: float, g: float, interaction: float) -> Pair | None:
    if substrate.fixed is not None:
        return substrate.fixed
    assert substrate.KM is not None
    slope = kcat / substrate.KM
    if substrate.leading:
        Kd = substrate.Kd if substrate.Kd is not None else substrate.KM
        return Pair(slope, slope * Kd) if slope <= FASTEST_ON and slope * Kd <= FASTEST else None
    if substrate.Kd is not None:
        Kd = substrate.Kd * interaction
        if Kd * slope >= g:
            return None
        on = slope * g / (g - Kd * slope)
        return Pair(on, Kd * on) if on <= FASTEST_ON and Kd * on <= FASTEST else None
    off = min(kcat, (FASTEST_ON / slope - 1.0) * g)
    return Pair(slope * (off + g) / g, off) if 0.0 < off <= FASTEST else None


def _weakest_products(problem: Problem, kcat: float | None = None) -> ChainConstants | None:
    """The constants with the weakest products that break no limit, or None."""
    from scipy.optimize import brentq, minimize_scalar  # slow to import, and needed by systems with enzymes only

    rate = problem.kcat if kcat is None else kcat

    def margin(ln_weak: float) -> float:
        return _try(problem, rate, math.exp(ln_weak)).margin

    if all(p.fixed is not None or p.Kd is not None for p in problem.products):
        return _eased(problem, rate, WEAKEST)
    grid = np.linspace(math.log(_TIGHTEST), math.log(WEAKEST), _GRID)
    margins = np.array([margin(x) for x in grid])
    if margins[-1] >= 0:
        return _eased(problem, rate, WEAKEST)
    inside = np.flatnonzero(margins >= 0)
    if len(inside):
        low = float(grid[inside[-1]])
        high = float(grid[inside[-1] + 1])
    else:
        best = int(np.argmax(margins))
        if not math.isfinite(margins[best]):
            return None
        bounds = (float(grid[max(best - 1, 0)]), float(grid[min(best + 1, _GRID - 1)]))
        from scipy.optimize import minimize_scalar  # takes long to import, and most files never come here

        peak = minimize_scalar(lambda x: -margin(x), bounds=bounds, method="bounded", options={"xatol": 1e-9})
        if -peak.fun < 0:
            return None
        low, high = float(peak.x), bounds[1]
    root = low
    if margin(low) > 0:
        from scipy.optimize import brentq

        root = brentq(lambda x: max(margin(x), -1.0), low, high, xtol=1e-14, rtol=1e-15)
        while margin(root) < 0:
            root -= 1e-14 * max(1.0, abs(root))
    return _eased(problem, rate, math.exp(root))


def _largest_kcat(problem: Problem) -> float:
    """The largest kcat, 1/s, for which there are constants, everything else as stated; to a part in 1e6, from below."""
    low, high = -30.0, math.log(FASTEST)
    if _weakest_products(problem, math.exp(low)) is None:
        return 0.0
    while high - low > 1e-6:
        middle = 0.5 * (low + high)
        if _weakest_products(problem, math.exp(middle)) is None:
            high = middle
        else:
            low = middle
    return math.exp(low)


def chain_time(substrates: Sequence[Pair], products: Sequence[Pair], forward: float, backward: float) -> float:
    """1/kcat of an ordered chain whose constants are known, s."""
    rates = [pair.off for pair in products]
    return (1.0 + backward / rates[0]) / forward + sum(1.0 / rate for rate in rates)
