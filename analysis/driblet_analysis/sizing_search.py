"""Where to try next: the sequential search for the value at which a requirement is met in the asked share of compartments.

1. Survey: the same compartments (common random numbers) at values spread between the limits. What rises and falls shows in
   the same compartments changing sides, which is much sharper than two independent shares.
2. Ends: whether the share is reached at the better limit, and whether it is not at the other; new compartments until exact
   bounds say so.
3. Closing in: rounds of new compartments at two values close around the present root, since one seen before would say little
   new there. Each compartment counts once in the fit: those of the survey a part at each of its values.
Once the interval of the root is nearly narrow enough, a last round that no longer depends on what was found takes it there
(stopping at the first narrow interval would favour intervals that are narrow by chance). It also stops when the budget of
compartments is spent.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from scipy.special import ndtr, ndtri

from driblet.survival import Interval
from driblet_analysis.sizing_model import (
    MISFIT,
    Root,
    Trials,
    clopper_pearson,
    fewest_to_show,
    fit_root,
    isotonic_bracket,
    mcnemar,
)
from driblet_analysis.sizing_parts import (
    ALREADY_MET,
    FOUND,
    NOT_MONOTONE,
    NOT_REACHABLE,
    UNDECIDED,
    Ask,
    Crossing,
    Finding,
    Job,
    Outcome,
    Scale,
    Settings,
    Tried,
)

SURVEY_VALUES, SURVEY_REPLICATES, SECOND_LOOK = 9, 40, 100
STOPPED = (
    0.96  # level of the profile interval that covers 95 % of answers once the search stops by its width (measured)
)
SURE = 0.99  # level of the bounds behind a verdict about a limit: looked at several times
_ALARM, _SUSPICION = 1e-3, 0.02  # of taking a monotone share for one that rises and falls, and of looking again
_NEARLY, _LAST = 1.3, 0.7  # width, relative to the one asked for, before the last round, and what that one adds
_FLANK = 0.3  # how far from the target, in normal deviates, the values of a round lie
_LEAST_ROUND, _LARGEST_ROUND = 100, 2000
_NONE = Interval(math.nan, math.nan, math.nan)


class _SpentError(Exception):
    """The budget is spent."""


@dataclass
class _Search:
    scale: Scale
    settings: Settings
    ask: Ask
    jobs: list[tuple[Job, Outcome, str]] = field(default_factory=list)
    stream: int = 0
    rounds: int = 0

    @property
    def spent(self) -> int:
        return sum(job.replicates for job, _, _ in self.jobs)

    def simulate(self, jobs: Sequence[Job], phase: str) -> list[Outcome]:
        """Have jobs done. Raises _SpentError when they go beyond the budget."""
        if self.spent + sum(job.replicates for job in jobs) > self.settings.budget:
            raise _SpentError
        found = self.ask(jobs)
        self.jobs += [(job, outcome, phase) for job, outcome in zip(jobs, found, strict=True)]
        return found

    def new_stream(self) -> int:
        self.stream += 1
        return self.stream

    def tried(self, *phases: str) -> list[Tried]:
        """What was tried in some phases, or in all, added up by value and phase, in the order of values."""
        total: dict[tuple[float, str], list[int]] = {}
        for job, outcome, phase in self.jobs:
            if not phases or phase in phases:
                row = total.setdefault((job.value, phase), [0, 0])
                row[0] += len(outcome)
                row[1] += int((outcome == 1).sum())
        return [Tried(value, n, k, phase) for (value, phase), (n, k) in sorted(total.items())]

    def data(self, *phases: str) -> Trials:
        return Trials.of([(self.scale.u(t.value), t.trials, t.met) for t in self.tried(*phases)])

    def weighted(self, phase: str, limits: tuple[float, float]) -> Trials:
        """The trials of a phase, and those of the survey between `limits`, each compartment counting once in all."""
        near = _between(self.data("survey"), limits)
        survey = [(u, n / len(near.u), k / len(near.u)) for u, n, k in zip(*near, strict=True)]
        return Trials.of([*survey, *zip(*self.data(phase), strict=True)])

    def share(self, value: float, level: float = SURE) -> tuple[Interval, int]:
        """The share at one value with its exact limits, and trials; survey and ends together are different compartments."""
        rows = [t for t in self.tried("survey", "end") if t.value == value]
        n, k = sum(t.trials for t in rows), sum(t.met for t in rows)
        return clopper_pearson(k, n, level), n

    def side(self, value: float) -> int:
        """1 where the share is shown to be the asked one or more, -1 where it is shown to be less, else 0."""
        share, _ = self.share(value)
        return 1 if share.low >= self.settings.share else -1 if share.high < self.settings.share else 0

    def settle(self, values: Sequence[float], most: int) -> None:
        """Add compartments at values until each has shown its side, or has `most` of them."""
        while True:
            open_ = [(v, self.share(v)[1]) for v in values if not self.side(v)]
            open_ = [(v, n) for v, n in open_ if n < most]
            if not open_:
                return
            enough = fewest_to_show(self.settings.share, SURE)
            stream = self.new_stream()
            wanted = [Job(v, stream, min(most - n, max(n, enough - n))) for v, n in open_]
            self.simulate(wanted, "end")


def search(scale: Scale, settings: Settings, ask: Ask) -> Finding:
    """Find the least or greatest value that meets a requirement in the asked share of compartments.

    ask : gets jobs and returns int8 outcomes of each, 1 met, 0 not, -1 undecided; the same job must give the same outcomes.
    """
    self = _Search(scale, settings, ask)
    try:
        return _search(self)
    except _SpentError:
        return _undecided(self)


def _search(self: _Search) -> Finding:
    scale, share = self.scale, self.settings.share
    values = sorted({scale.value(u) for u in np.linspace(*scale.limits, SURVEY_VALUES)})
    survey = self.simulate([Job(v, 0, SURVEY_REPLICATES) for v in values], "survey")
    rise, fall = _turns(survey, _SUSPICION)
    if rise and fall:
        more = self.simulate([Job(v, self.stream + 1, SECOND_LOOK) for v in values], "survey")
        self.new_stream()
        survey = [np.concatenate(pair) for pair in zip(survey, more, strict=True)]
        rise, fall = _turns(survey, _ALARM)
    if rise and fall:
        found = _not_monotone(self, values)
        if found is not None:
            return found
    sign = _direction(self, values, survey)
    most = self.settings.budget // 4
    if sign == 0 or (rise and fall):
        ends = [values[0], values[-1]]
        self.settle(ends, most)
        sides = [self.side(v) for v in ends]
        if sides == [-1, -1]:
            return _unreachable(self, values, None)
        if sides == [1, 1]:
            return _met_already(self, values[0], None)
        if 0 in sides:
            return _undecided(self)
        sign = 1 if sides[1] > 0 else -1
    worse, better = (values[0], values[-1]) if sign > 0 else (values[-1], values[0])
    self.settle([better], most)
    if self.side(better) < 0:
        return _unreachable(self, values, sign > 0)
    if self.share(worse)[0].value >= share or not self.side(worse):
        self.settle([worse], most)
        if self.side(worse) > 0:
            return _met_already(self, worse, sign > 0)
    root = _close_in(self, sign, scale.limits, self.settings.within, "closing in")
    return _found(self, root, sign > 0)


def _turns(survey: Sequence[Outcome], alarm: float) -> tuple[bool, bool]:
    """Whether the share rises somewhere and falls somewhere, shown by the same compartments, with a chance `alarm` of
    seeing either where neither is (Bonferroni)."""
    pairs = list(itertools.combinations(range(len(survey)), 2))
    bound = alarm / max(1, 2 * len(pairs))
    rise = any(mcnemar(survey[j], survey[i]) < bound for i, j in pairs)
    fall = any(mcnemar(survey[i], survey[j]) < bound for i, j in pairs)
    return rise, fall


def _direction(self: _Search, values: Sequence[float], survey: Sequence[Outcome]) -> int:
    """1 where the share rises with the value, -1 where it falls, 0 where the survey does not tell."""
    position = np.array([self.scale.u(v) for v in values])
    met = np.array([outcome == 1 for outcome in survey], dtype=float)
    trend = (position - position.mean()) @ met  # of each compartment
    spread = trend.std(ddof=1) / math.sqrt(len(trend))
    least = 1e-9 * float(np.abs(position - position.mean()).sum())  # all alike but for rounding
    return int(np.sign(trend.mean())) if abs(trend.mean()) > max(3.0 * spread, least) else 0


def _close_in(self: _Search, sign: int, limits: tuple[float, float], within: float, phase: str) -> Root:
    """Rounds close around the root until its interval is narrow enough. Raises _SpentError."""
    scale, target = self.scale, self.settings.share
    part = 0.4 if target >= 0.5 else 0.6  # more where a trial says less: towards shares of none or all
    root = fit_root(_between(self.data("survey"), limits), target, sign, scale.limits)
    spent = 0
    last = False
    while True:
        size = round(_LAST * spent) if last else _round_size(root, spent, within, scale, target)
        below, above = _flanks(_design(self, root, phase, sign, limits), sign, limits, scale)
        split = [(below, round(size * part)), (above, size - round(size * part))]
        self.simulate([Job(value, self.new_stream(), n) for value, n in split], phase)
        self.rounds += 1
        first, spent = not spent, spent + size
        root = _estimate(self.weighted(phase, limits), target, sign, scale)
        if last and _narrow(root, scale, within):
            return root
        last = not first and _narrow(root, scale, _NEARLY * within)


def _estimate(data: Trials, target: float, sign: int, scale: Scale) -> Root:
    """The root from the rounds: by the laws, or between exact bounds where none of them fits even close by."""
    root = fit_root(data, target, sign, scale.limits, STOPPED)
    if root.misfit_p < MISFIT / 5:
        return replace(root, theta=isotonic_bracket(data, target, sign), law="")
    return root


def _design(self: _Search, root: Root, phase: str, sign: int, limits: tuple[float, float]) -> Root:
    """The root that places the next round: the estimate, or while that is open on a side, one that takes every trial in
    full, though those of the survey are the same compartments."""
    if limits[0] <= root.theta.low and root.theta.high <= limits[1]:
        return root
    everything = _between(self.data("survey", "end", phase), limits)
    pooled = fit_root(everything, root.target, sign, limits)
    if limits[0] <= pooled.theta.low and pooled.theta.high <= limits[1]:
        return pooled
    bracket = isotonic_bracket(everything, root.target, sign)
    low, high = max(bracket.low, limits[0]), min(bracket.high, limits[1])
    middle = min(max(bracket.value, low), high)
    return replace(pooled, theta=Interval(middle, low, high), slope=sign * 8.0 / max(high - low, 1e-9))


def _between(data: Trials, limits: tuple[float, float]) -> Trials:
    slack = 1e-5 * abs(limits[1] - limits[0])
    return data.only((data.u >= limits[0] - slack) & (data.u <= limits[1] + slack))


def _narrow(root: Root, scale: Scale, within: float) -> bool:
    """Whether the answer is known well enough: its interval narrow and between the limits, or one whole value."""
    low, high = scale.limits
    if not (low <= root.theta.low and root.theta.high <= high):
        return False
    if scale.whole and math.ceil(_raw(scale, root.theta.low)) == math.ceil(_raw(scale, root.theta.high)):
        return True
    return scale.relative_width(root.theta) <= within


def _raw(scale: Scale, u: float) -> float:
    return math.exp(u) if scale.log else u


def _round_size(root: Root, spent: int, within: float, scale: Scale, target: float) -> int:
    """As many as there were, or as many as the width still asks for where that is less."""
    first = max(_LEAST_ROUND, math.ceil(8 / min(target, 1 - target)))
    if not spent:
        return min(first, _LARGEST_ROUND)
    width = scale.relative_width(root.theta)
    missing = spent * ((width / within) ** 2 - 1.0) if math.isfinite(width) else spent
    return int(min(max(missing, _LEAST_ROUND), max(spent, first), _LARGEST_ROUND))


def _flanks(root: Root, sign: int, limits: tuple[float, float], scale: Scale) -> tuple[float, float]:
    """The two values of a round: where the curve lies _FLANK normal deviates below and above the target."""
    z = float(ndtri(root.target))
    shares = [float(ndtr(z - _FLANK)), float(ndtr(z + _FLANK))]
    low, high = limits
    # one that has no slope yet is a step: the interval says where it can be
    spread = 0.25 * (min(root.theta.high, high) - max(root.theta.low, low))
    places = []
    for share, side in zip(shares, (-sign, sign), strict=True):
        u = root.position(share)
        if abs(u - root.theta.value) < 0.1 * spread:
            u = root.theta.value + side * 0.1 * spread
        places.append(min(max(u, low), high))
    below, above = (scale.value(u) for u in places)
    if scale.whole and below == above:
        step = sign if below + sign <= scale.high and below + sign >= scale.low else -sign
        below, above = (below, below + step) if step == sign else (below + step, below)
    elif below == above:
        inner = scale.value(places[0] + (0.02 if places[0] <= (low + high) / 2 else -0.02) * (high - low))
        below, above = sorted((below, inner), reverse=sign < 0)
    return below, above


def _not_monotone(self: _Search, values: Sequence[float]) -> Finding | None:
    """Where a share that rises and falls passes the target more than once; None where it does so once or never."""
    self.settle(values, max(400, 4 * fewest_to_show(self.settings.share, SURE)))
    known = [(v, self.side(v)) for v in values if self.side(v)]
    changes = [(a, b) for a, b in itertools.pairwise(known) if a[1] != b[1]]
    if len(changes) < 2:
        return None
    crossings = [_crossing(self, a, b, side, f"crossing {k}") for k, ((a, _), (b, side)) in enumerate(changes, 1)]
    tried, spent = tuple(self.tried()), self.spent
    return Finding(NOT_MONOTONE, None, _NONE, _NONE, math.nan, None, tried, tuple(crossings), spent, self.rounds)


def _crossing(self: _Search, low: float, high: float, sign: int, phase: str) -> Crossing:
    """One crossing closed in on, to three times the width; between its two values where the budget does not allow it."""
    limits = (self.scale.u(low), self.scale.u(high))
    try:
        root = _close_in(self, sign, limits, 3 * self.settings.within, phase)
        answer = _answer(self.scale, root, sign > 0)
        return Crossing(sign > 0, *(min(max(x, low), high) for x in answer))
    except _SpentError:
        return Crossing(sign > 0, self.scale.value(sum(limits) / 2), low, high)


def _answer(scale: Scale, root: Root, rises: bool) -> Interval:
    """The root in values; where values are whole, the least (or greatest) that has the share."""
    ends = [_raw(scale, u) for u in root.theta]
    if scale.whole:
        ends = [float(math.ceil(x - 1e-9) if rises else math.floor(x + 1e-9)) for x in ends]
    return Interval(*(x if math.isinf(x) else min(max(x, scale.low), scale.high) for x in ends))


def _found(self: _Search, root: Root, rises: bool) -> Finding:
    answer = _answer(self.scale, root, rises)
    return Finding(
        FOUND, rises, answer, root.share, answer.value, root, tuple(self.tried()), (), self.spent, self.rounds
    )


def _unreachable(self: _Search, values: Sequence[float], rises: bool | None) -> Finding:
    best = max(values, key=lambda v: (self.share(v)[0].value, v if rises is not False else -v))
    if self.side(best) >= 0:  # a value inside may have the share where no limit has
        self.settle([best], self.settings.budget // 4)
        if self.side(best) >= 0:
            return _undecided(self, "a value between the limits may have the share though neither limit has")
    share, _ = self.share(best, 0.95)
    return Finding(NOT_REACHABLE, rises, _NONE, share, best, None, tuple(self.tried()), (), self.spent, self.rounds)


def _met_already(self: _Search, limit: float, rises: bool | None) -> Finding:
    share, _ = self.share(limit, 0.95)
    return Finding(ALREADY_MET, rises, _NONE, share, limit, None, tuple(self.tried()), (), self.spent, self.rounds)


def _undecided(self: _Search, reason: str = "") -> Finding:
    """What is known when the budget is spent: the interval so far where there is one."""
    reason = reason or f"the budget of {self.settings.budget:,} compartments was spent before the answer was certain"
    answer, share, root, rises = _NONE, _NONE, None, None
    rows = self.tried("closing in")
    if len(rows) >= 2:
        sign = _last_sign(self)
        root = _estimate(self.weighted("closing in", self.scale.limits), self.settings.share, sign, self.scale)
        answer, share, rises = _answer(self.scale, root, sign > 0), root.share, sign > 0
    return Finding(
        UNDECIDED, rises, answer, share, answer.value, root, tuple(self.tried()), (), self.spent, self.rounds, reason
    )


def _last_sign(self: _Search) -> int:
    rows = self.tried("survey")
    position = np.array([self.scale.u(t.value) for t in rows])
    share = np.array([t.met / t.trials for t in rows])
    return 1 if float((position - position.mean()) @ share) >= 0 else -1
