"""How long requirements hold and in how many compartments, which failed first, and what failing compartments had in common.

The compartment is the sampling unit. Lifetimes count from the start of a requirement's span; a compartment that still holds
when it was last watched is censored there (Kaplan-Meier). What sets failing compartments apart is ranked by the
rank-biserial effect; p values carry Holm's correction, and a rank that stands out in a design is no proof of a cause.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.errors import CannotAnswerError
from driblet.outcomes import Outcomes
from driblet.results import Run
from driblet.shares import ShareRow, shares
from driblet.statistics import holm
from driblet.survival import Interval, Survival, contrast, kaplan_meier, wilson
from driblet.system.model import Requirement

FAILED_BY = (0.05, 0.1, 0.5, 0.9)  # shares of compartments whose time of failure is told
FEWEST_IN_A_GROUP = 5  # below, a rank test has nothing to stand on
Array = NDArray[np.float64]


class Quantile(NamedTuple):
    """When `share` of the compartments has failed (or, for "once", succeeded), s; inf where that was not reached."""

    share: float
    time_s: Interval


class Trait(NamedTuple):
    """What a compartment started with, failing against meeting ones.

    quantity, unit; failing, meeting : medians; effect : rank-biserial, above zero where failing ones had more;
    p : two-sided, corrected.
    """

    quantity: str
    unit: str
    failing: float
    meeting: float
    effect: float
    p: float


@dataclass(frozen=True)
class Lifetime:
    """One requirement over the compartments of a run.

    share : the row of the share; requirement : as stated; survival : share that has not failed (for "once": not succeeded)
    by a time, s from the start of the span; None for "at end" and "on average", which have no such moment. failed_first : in
    how many compartments it was the first to fail; traits : largest effect first; traits_missing : why there are none.
    """

    share: ShareRow
    requirement: Requirement
    span_s: tuple[float, float]
    survival: Survival | None
    quantiles: tuple[Quantile, ...]
    failed_first: int
    traits: tuple[Trait, ...]
    traits_missing: str


@dataclass(frozen=True)
class Lifetimes:
    """Every requirement of a run, and the share of compartments that meets them all."""

    each: tuple[Lifetime, ...]
    all_met: Interval
    compartments: int

    @property
    def reached(self) -> bool:
        """Whether no stated share is missed."""
        return all(one.share.met is not False for one in self.each)


def lifetimes(run: Run) -> Lifetimes:
    """Everything `driblet lifetime` tells. Raises CannotAnswerError for a run without requirements or compartments."""
    system = run.system
    if not system.requirements:
        raise CannotAnswerError(
            f"{run.name}: its system states no requirement, so there is nothing to tell; add [requirements.NAME] and run again"
        )
    outcomes = run.outcomes
    if not len(outcomes.met):
        raise CannotAnswerError(f"{run.name}: holds no finished compartment; go on with --resume")
    started = _start(run)
    first = _failed_first(system.requirements, outcomes)
    duration = float(run.time_s[-1])
    each = tuple(
        _lifetime(row, requirement, outcomes, q, duration, int(first[q]), started)
        for q, (row, requirement) in enumerate(zip(shares(run), system.requirements, strict=True))
    )
    every = int((outcomes.met == 1).all(axis=1).sum())
    return Lifetimes(each, wilson(every, len(outcomes.met)), len(outcomes.met))


def _lifetime(
    row: ShareRow,
    requirement: Requirement,
    outcomes: Outcomes,
    q: int,
    duration_s: float,
    first: int,
    started: list[tuple[str, str, Array]],
) -> Lifetime:
    span = requirement.span_s(duration_s)
    curve = None
    if requirement.when in ("throughout", "once"):
        moment = (outcomes.first_failure_s if requirement.when == "throughout" else outcomes.first_met_s)[:, q]
        seen = ~np.isnan(moment)
        watched = np.maximum(np.where(seen, moment, outcomes.judged_until_s[:, q]) - span[0], 0.0)
        curve = kaplan_meier(watched, seen)
    quantiles = () if curve is None else tuple(Quantile(s, curve.quantile(s)) for s in FAILED_BY)
    traits, why = _traits(outcomes.met[:, q], started)
    return Lifetime(row, requirement, span, curve, quantiles, first, traits, why)


def _failed_first(requirements: tuple[Requirement, ...], outcomes: Outcomes) -> NDArray[np.int64]:
    """In how many compartments each requirement was the first to fail; ones that fail at the same moment share it."""
    moment = np.where(outcomes.met == 0, outcomes.first_failure_s, np.inf)
    for q, requirement in enumerate(requirements):
        if requirement.when != "throughout":  # it fails where its span ends without it
            moment[:, q] = np.where(outcomes.met[:, q] == 0, outcomes.judged_until_s[:, q], np.inf)
    earliest = moment.min(axis=1, keepdims=True)
    return np.asarray(((moment == earliest) & np.isfinite(moment)).sum(axis=0))


def _start(run: Run) -> list[tuple[str, str, Array]]:
    """(quantity, unit, value in each compartment) of all that differs between compartments at time zero."""
    system = run.system
    counts = run.initial_counts().astype(float)
    rows: list[tuple[str, str, Array]] = []
    if np.ptp(run.volume_L):
        if system.compartment.by_diameter:
            inner = 2e9 * (3e-3 * run.volume_L / (4 * np.pi)) ** (1 / 3)
            rows.append(("diameter", "nm", inner + 2e9 * system.compartment.wall_m))
        else:
            rows.append(("volume", "fL", run.volume_L * 1e15))
    enzymes = {enzyme.name: np.zeros(len(counts)) for enzyme in system.enzymes}
    for i, species in enumerate(system.free_species):
        if species.enzyme is not None:
            enzymes[species.enzyme] += counts[:, i]
        else:
            rows.append((species.label, "copies", counts[:, i]))
    rows += [(name, "copies", copies) for name, copies in enzymes.items()]
    return [row for row in rows if np.ptp(row[2])]


def _traits(met: NDArray[np.int8], started: list[tuple[str, str, Array]]) -> tuple[tuple[Trait, ...], str]:
    failing, meeting = met == 0, met == 1
    if not started:
        return (), "all compartments started alike"
    if min(failing.sum(), meeting.sum()) < FEWEST_IN_A_GROUP:
        few = "failing" if failing.sum() < meeting.sum() else "meeting"
        n = int(min(failing.sum(), meeting.sum()))
        return (), f"{n} {few} compartments are too few to compare; {FEWEST_IN_A_GROUP} would do"
    found = [(name, unit, values, contrast(values[failing], values[meeting])) for name, unit, values in started]
    corrected = holm(np.array([c.p for *_, c in found]))
    traits = [
        Trait(name, unit, float(np.median(values[failing])), float(np.median(values[meeting])), c.effect, float(p))
        for (name, unit, values, c), p in zip(found, corrected, strict=True)
    ]
    return tuple(sorted(traits, key=lambda t: -abs(t.effect))), ""


def as_facts(result: Lifetimes) -> dict[str, Any]:
    """The same as plain values for JSON; times in s."""
    return {
        "compartments": result.compartments,
        "requirements": [_facts(one) for one in result.each],
        "all_met": result.all_met._asdict(),
        "reached": result.reached,
    }


def _facts(one: Lifetime) -> dict[str, Any]:
    row, curve = one.share, one.survival
    return {
        "name": row.name,
        "must": row.must,
        "when": one.requirement.when,
        "averaged_over_s": one.requirement.averaged_over_s,
        "during_s": list(one.span_s),
        "asked": row.asked,
        "share": row.share.value,
        "low": row.share.low,
        "high": row.share.high,
        "met": row.met,
        "certain": row.certain,
        "compartments_to_be_certain": row.needed,
        "failing": row.failing,
        "undecided": row.undecided,
        "looked_at": row.looked_at,
        "bound": row.bound or None,
        "failed_first": one.failed_first,
        "quantiles": [
            {"share": q.share, "time_s": q.time_s.value, "low_s": q.time_s.low, "high_s": q.time_s.high}
            for q in one.quantiles
        ],
        "survival": None
        if curve is None
        else {
            "time_s": curve.time.tolist(),
            "at_risk": curve.at_risk.tolist(),
            "survival": curve.survival.tolist(),
            "low": curve.low.tolist(),
            "high": curve.high.tolist(),
        },
        "in_common": [trait._asdict() for trait in one.traits],
        "in_common_missing": one.traits_missing or None,
    }
