"""What a search for a size works on and ends in: jobs, scales, what is asked, what was found."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.survival import Interval
from driblet_analysis.sizing_model import Root

FOUND, ALREADY_MET, NOT_REACHABLE = "found", "already met at the limit", "not reachable between the limits"
NOT_MONOTONE, UNDECIDED = "not monotone", "undecided"
Outcome = NDArray[np.int8]


class Job(NamedTuple):
    """Compartments to simulate: `replicates` of random stream `stream`, at a value."""

    value: float
    stream: int
    replicates: int


Ask = Callable[[Sequence[Job]], list[Outcome]]


@dataclass(frozen=True)
class Scale:
    """The values between the limits and the positions u that the search works with.

    Attributes: low, high : limits; log : whether u is the logarithm; whole : whether only whole values can be.
    """

    low: float
    high: float
    log: bool
    whole: bool = False

    def u(self, value: float) -> float:
        """The position of a value."""
        return math.log(value) if self.log else value

    def value(self, u: float) -> float:
        """The value at a position, to six digits, a whole one where it must be; infinite positions stay."""
        if math.isinf(u):
            return u
        exact = math.exp(u) if self.log else u
        exact = min(max(exact, self.low), self.high)
        return float(round(exact)) if self.whole else float(f"{exact:.6g}")

    @property
    def limits(self) -> tuple[float, float]:
        """Positions of the limits."""
        return self.u(self.low), self.u(self.high)

    def relative_width(self, interval: Interval) -> float:
        """Width of an interval of u: of values, relative to the value, or to the distance of the limits without logs."""
        if not (math.isfinite(interval.low) and math.isfinite(interval.high)):
            return math.inf
        if self.log:
            return math.exp(interval.high - interval.value) - math.exp(interval.low - interval.value)
        return (interval.high - interval.low) / (self.high - self.low)


@dataclass(frozen=True)
class Settings:
    """What is asked: share : in (0, 1); within : relative width at which the search stops; budget : replicates at most."""

    share: float
    within: float = 0.25
    budget: int = 10_000


class Tried(NamedTuple):
    """Compartments simulated at one value. phase : "survey", "end", "closing in" or "crossing K";
    undecided ones count as not meeting it."""

    value: float
    trials: int
    met: int
    phase: str


@dataclass(frozen=True)
class Crossing:
    """A value at which the share passes the target. rises : with the value; value, low, high : values."""

    rises: bool
    value: float
    low: float
    high: float


@dataclass(frozen=True)
class Finding:
    """What came of a search.

    status : FOUND, ALREADY_MET, NOT_REACHABLE, NOT_MONOTONE or UNDECIDED; rises : whether the share rises with the value,
    None where neither shows; answer : value with its 95 % interval, NaN where there is none; share : at the answer or, without
    one, at `at`; root : the fit behind it; tried : all of it; crossings; replicates : simulated; rounds; reason : a sentence.
    """

    status: str
    rises: bool | None
    answer: Interval
    share: Interval
    at: float
    root: Root | None
    tried: tuple[Tried, ...]
    crossings: tuple[Crossing, ...]
    replicates: int
    rounds: int
    reason: str = ""
