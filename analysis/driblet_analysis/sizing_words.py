"""A sizing in words a user can act on, and as facts for JSON: one text for the screen, the page and scripts."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

from driblet.commands.requirement_rows import percent
from driblet.commands.screen import CAUTION, duration, number
from driblet.errors import CannotAnswerError
from driblet.outcomes import EVENT
from driblet.shares import bound, when_text
from driblet.survival import Interval, wilson
from driblet_analysis.lifetime import Trait, lifetimes
from driblet_analysis.sizing import Sizing
from driblet_analysis.sizing_parts import ALREADY_MET, FOUND, NOT_MONOTONE, NOT_REACHABLE, Crossing
from driblet_analysis.sizing_question import Load, loads_of


@dataclass(frozen=True)
class Words:
    """What is told. headline : the answer; details : sentences; loads : at the answer; traits : of failing compartments;
    fresh : share in the new compartments, or None; failing : what is known of those that fail, ""."""

    headline: str
    details: tuple[str, ...]
    loads: tuple[Load, ...]
    traits: tuple[Trait, ...]
    fresh: Interval | None
    compartments: int
    failing: str
    caution: str = CAUTION


def quantity(result: Sizing, value: float) -> str:
    """A value with its unit."""
    return f"{number(value, 3)} {result.question.unit}".strip()


def between(result: Sizing, interval: Interval) -> str:
    """A value with its interval and unit."""
    text = f"{number(interval.value, 3)} ({number(interval.low, 3)} to {number(interval.high, 3)})"
    return f"{text} {result.question.unit}".strip()


def extreme(result: Sizing) -> str:
    """Whether the least or the greatest value is told."""
    return "greatest" if result.finding.rises is False else "least"


def words_of(result: Sizing) -> Words:
    """Everything that is told of a sizing."""
    question = result.question
    asked = f"{percent(question.settings.share)} %"
    loads: tuple[Load, ...] = ()
    traits: tuple[Trait, ...] = ()
    fresh, compartments, failing, looked_at = None, 0, "", ""
    if result.at is not None:
        loads = tuple(loads_of(question.system_at(result.at)))
        with result.fresh() as ensemble:
            met = ensemble.outcomes.met[:, 0]
            fresh, compartments = wilson(int((met == 1).sum()), len(met)), len(met)
            looked_at = ensemble.requirement_resolution[question.requirement]
            failing, traits = _failing(ensemble)
    return Words(
        _headline(result, asked), tuple(_details(result, looked_at)), loads, traits, fresh, compartments, failing
    )


def _failing(ensemble: Any) -> tuple[str, tuple[Trait, ...]]:
    try:
        one = lifetimes(ensemble).each[0]
    except CannotAnswerError:
        return "", ()
    if not one.share.failing:
        return "none of the new compartments failed", ()
    text = f"{one.share.failing} of {len(ensemble.replicate)} new compartments failed"
    if one.survival is not None and one.requirement.when == "throughout" and len(one.survival.time):
        first = one.survival.time
        text += f", the first after {duration(float(first[0]))} and the last after {duration(float(first[-1]))}"
    if not one.traits:
        text += f"; nothing told about what they had in common: {one.traits_missing}"
    return text, one.traits


def _headline(result: Sizing, asked: str) -> str:
    finding, path, name = result.finding, result.question.path, result.question.requirement
    limits = f"{quantity(result, result.question.scale.low)} and {quantity(result, result.question.scale.high)}"
    if finding.status == FOUND:
        sure = finding.answer.low if finding.rises is False else finding.answer.high
        return (
            f"{path} = {quantity(result, finding.answer.value)} is the {extreme(result)} with which {name} is met in {asked} of "
            f"compartments; 95 % interval {number(finding.answer.low, 3)} to {number(finding.answer.high, 3)} "
            f"{result.question.unit}".rstrip()
            + f". To be on the safe side take {quantity(result, sure)}."
        )
    if finding.status == ALREADY_MET:
        share = f"{percent(finding.share.value)} % (at least {percent(finding.share.low)} %)"
        if finding.rises is None:
            return (
                f"{name} is already met in {asked} of compartments at both limits, {limits}: {share} at the lower one."
            )
        return (
            f"{name} is already met in {asked} of compartments at the limit, {path} = {quantity(result, finding.at)}: {share}. "
            f"The {extreme(result)} value that would do lies beyond."
        )
    if finding.status == NOT_REACHABLE:
        return (
            f"Not reachable: for no value tried between {limits} is {name} met in {asked} of compartments. The best is "
            f"{percent(finding.share.value)} % (at most {percent(finding.share.high)} %) at {quantity(result, finding.at)}."
        )
    if finding.status == NOT_MONOTONE:
        lines = "; ".join(_crossing(result, one) for one in finding.crossings)
        return f"Not monotone: between {limits} the share passes {asked} more than once: {lines}."
    text = f"Undecided: {finding.reason}."
    if not math.isnan(finding.answer.value):
        low, high = finding.answer.low, finding.answer.high
        text += (
            f" So far: {quantity(result, finding.answer.value)}, 95 % interval {number(low, 3)} to {number(high, 3)}."
        )
    return text + " --resume with a larger --budget goes on from here."


def _crossing(result: Sizing, one: Crossing) -> str:
    direction = "rises" if one.rises else "falls"
    return f"it {direction} past it at {between(result, Interval(one.value, one.low, one.high))}"


def _details(result: Sizing, looked_at: str) -> list[str]:
    finding, question = result.finding, result.question
    requirement = question.system_at(question.scale.high).requirements[0]
    when = when_text(requirement.when, requirement.averaged_over_s)
    start, end = requirement.span_s(question.system.settings.duration_s)
    lines = [
        f"{question.requirement}: {requirement.must.text}, {when}, from {number(start)} to {number(end)} s of the run."
    ]
    survey = len({t.value for t in finding.tried if t.phase == "survey"})
    rounds = f", then {finding.rounds} rounds of new ones close to the answer" if finding.rounds else ""
    lines.append(
        f"It rests on {finding.replicates:,} simulated compartments: the same ones at {survey} values between the limits{rounds}."
    )
    if finding.status == FOUND and finding.root is not None:
        if finding.root.law:
            lines.append(
                f"Assumed: near the answer the share follows one of four smooth curves (best: {finding.root.law}), and between "
                "the values tried it neither falls nor rises unseen. The interval counts not knowing which curve."
            )
        else:
            lines.append(
                "No smooth curve fits the shares near the answer; the interval is of exact bounds at single values."
            )
        lines.append(
            f"The search stops once the interval is {percent(question.settings.within)} % of the value or narrower."
        )
    unseen = {"upper bound": "failures", "lower bound": "successes"}.get(bound(requirement.when, looked_at or EVENT))
    if unseen:
        lines.append(
            f"The condition was not looked at after every event: {unseen} in between go unseen, and are not counted."
        )
    lines.append("Only what the system file says is in it: constants, loading and sizes are taken as true.")
    return lines


def as_facts(result: Sizing, words: Words) -> dict[str, Any]:
    """The same as plain values for JSON."""
    finding, question = result.finding, result.question
    share = finding.share
    return {
        "value": finding.answer.value,
        "low": finding.answer.low,
        "high": finding.answer.high,
        "unit": question.unit or "1",
        "share": share.value,
        "share_low": share.low,
        "share_high": share.high,
        "status": finding.status,
        "asked": question.settings.share,
        "kind": None if finding.rises is None else extreme(result),
        "at": finding.at,
        "vary": question.path,
        "between": [question.scale.low, question.scale.high],
        "requirement": question.requirement,
        "within": question.settings.within,
        "budget": question.settings.budget,
        "compartments": finding.replicates,
        "rounds": finding.rounds,
        "law": finding.root.law if finding.root else None,
        "crossings": [
            {"direction": "rises" if c.rises else "falls", "value": c.value, "low": c.low, "high": c.high}
            for c in finding.crossings
        ],
        "curve": [{"value": t.value, "compartments": t.trials, "met": t.met, "phase": t.phase} for t in finding.tried],
        "new_compartments": None
        if words.fresh is None
        else {
            "compartments": words.compartments,
            "share": words.fresh.value,
            "low": words.fresh.low,
            "high": words.fresh.high,
        },
        "loads": [load._asdict() for load in words.loads],
        "failing_in_common": [trait._asdict() for trait in words.traits],
        "text": words.headline,
    }
