"""The search of a sizing on shares that are known exactly: the answer, what it costs, and the verdicts without one."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np
import pytest
from scipy import stats

from driblet_analysis.sizing_parts import (
    ALREADY_MET,
    FOUND,
    NOT_MONOTONE,
    NOT_REACHABLE,
    UNDECIDED,
    Ask,
    Finding,
    Job,
    Outcome,
    Scale,
    Settings,
)
from driblet_analysis.sizing_search import search

Share = Callable[[float], float]
ONE_INSIDE = Scale(0.5, 20.0, log=True)


def one_inside(mean: float) -> float:
    """Chance of at least one molecule under Poisson loading; 0.95 at -ln 0.05 = 2.996."""
    return 1.0 - math.exp(-mean)


def survives(rate: float) -> float:
    """Chance that a molecule that decays at `rate` is there after unit time; 0.9 at -ln 0.9."""
    return math.exp(-rate)


def both_left(bias: float) -> float:
    """Chance that in A <=> B at equilibrium, K = bias, at most 2 of 8 molecules are A: binomial, enumerated."""
    return float(stats.binom.cdf(2, 8, 1.0 / (1.0 + bias)))


def compartments(share: Share, seed: int) -> Ask:
    """Compartments each with its own threshold, the same one at every value, as common random numbers give."""

    def ask(jobs: Sequence[Job]) -> list[Outcome]:
        return [
            (np.random.default_rng([seed, job.stream]).random(job.replicates) < share(job.value)).astype(np.int8)
            for job in jobs
        ]

    return ask


def closed_forms() -> list[tuple[Share, Scale, float, float, float]]:
    """(share, scale, asked, exact answer, width asked for)."""
    bias = float(next(b for b in np.linspace(1.0, 20.0, 190001) if both_left(b) >= 0.9))
    return [
        (one_inside, ONE_INSIDE, 0.95, -math.log(0.05), 0.1),
        (survives, Scale(0.005, 3.0, log=True), 0.9, -math.log(0.9), 0.15),
        (both_left, Scale(0.5, 50.0, log=True), 0.9, bias, 0.12),
    ]


def binomial_width(share: Share, exact: float, asked: float, replicates: int) -> float:
    """Width of a 95 % interval of the answer were all compartments spent at it and the slope there known."""
    step = 1e-4 * exact
    slope = abs(share(exact + step) - share(exact - step)) / (2 * step)
    return 2 * 1.96 * math.sqrt(asked * (1 - asked) / replicates) / slope


@pytest.mark.parametrize("case", range(3))
def test_answers_of_closed_forms(case: int) -> None:
    """10 of each: 95 % intervals miss 4 or more of 10 with a chance of 1e-3."""
    share, scale, asked, exact, within = closed_forms()[case]
    found = [search(scale, Settings(asked, within, 40_000), compartments(share, seed)) for seed in range(10)]
    assert {f.status for f in found} == {FOUND}
    assert sum(f.answer.low <= exact <= f.answer.high for f in found) >= 7
    assert all(f.answer.high - f.answer.low <= 1.15 * within * f.answer.value for f in found)
    assert {f.rises for f in found} == {share is not survives}


def test_answers_of_another_share_are_not_covered() -> None:
    """The twin: compartments that hold 1.5 times as much as they are said to."""
    found = [
        search(ONE_INSIDE, Settings(0.95), compartments(lambda mean: one_inside(1.5 * mean), seed))
        for seed in range(10)
    ]
    assert sum(f.answer.low <= -math.log(0.05) <= f.answer.high for f in found) <= 2


@pytest.mark.long
@pytest.mark.parametrize("case", range(3))
def test_hundred_sizings_of_closed_forms(case: int) -> None:
    """At least 90 of 100 intervals hold the answer (of 95 % intervals fewer do with a chance of 0.03); their mean width is
    at most 1.25 times the binomial one; a grid of 20 values as narrow at the answer takes five times as many."""
    share, scale, asked, exact, within = closed_forms()[case]
    found = [search(scale, Settings(asked, within, 60_000), compartments(share, seed)) for seed in range(1000, 1100)]
    assert {f.status for f in found} == {FOUND}
    covered = sum(f.answer.low <= exact <= f.answer.high for f in found)
    width = np.array([f.answer.high - f.answer.low for f in found])
    ideal = np.array([binomial_width(share, exact, asked, f.replicates) for f in found])
    # a value of the grid needs as many compartments as make the binomial width that of the answer
    grid = 20 * np.array([f.replicates for f in found]) * (ideal / width) ** 2
    used = np.array([f.replicates for f in found])
    print(
        f"covered {covered}, width {np.mean(width / ideal):.3f}, of a grid {np.mean(used / grid):.3f}, used {used.mean():.0f}"
    )
    assert covered >= 90
    assert np.mean(width / ideal) <= 1.25
    assert np.mean(used / grid) <= 0.2


def hump(value: float) -> float:
    return 0.3 + 0.69 * math.exp(-(math.log(value / 3.0) ** 2) / 0.5)


VERDICTS: list[tuple[str, Share]] = [
    (NOT_REACHABLE, lambda v: 0.85 * one_inside(v)),
    (NOT_REACHABLE, lambda v: 0.0),
    (ALREADY_MET, lambda v: 0.97 + 0.0295 * one_inside(v)),
    (ALREADY_MET, lambda v: 1.0),
    (NOT_MONOTONE, hump),
    (NOT_MONOTONE, lambda v: 1.29 - hump(v)),
]


def verdict(status: str, share: Share, seed: int) -> Finding:
    found = search(
        ONE_INSIDE, Settings(0.9 if status == NOT_MONOTONE else 0.95, 0.25, 30_000), compartments(share, seed)
    )
    assert found.status == status, (seed, found.status, found.reason)
    return found


@pytest.mark.parametrize(("status", "share"), VERDICTS)
def test_verdicts_without_an_answer(status: str, share: Share) -> None:
    for seed in range(20):
        found = verdict(status, share, seed)
        if status == NOT_REACHABLE:
            assert found.share.high < 0.95
        elif status == ALREADY_MET:
            assert found.share.low > 0.93
            assert found.rises is not False
        else:
            assert len(found.crossings) == 2
            assert found.crossings[0].rises != found.crossings[1].rises
            assert found.crossings[0].high < found.crossings[1].low


def test_crossings_of_a_hump_are_where_they_are() -> None:
    """0.3 + 0.69 exp(-ln(v/3)^2 / 0.5) = 0.9 at v = 3 exp(+-sqrt(0.5 ln(0.69/0.6)))."""
    offset = math.sqrt(0.5 * math.log(0.69 / 0.6))
    exact = [3.0 * math.exp(-offset), 3.0 * math.exp(offset)]
    inside = [
        c.low <= v <= c.high
        for seed in range(10)
        for c, v in zip(verdict(NOT_MONOTONE, hump, seed).crossings, exact, strict=True)
    ]
    assert sum(inside) >= 15  # of 20; 95 % intervals do worse with a chance of 3e-4


def test_a_spent_budget_is_said_so() -> None:
    found = search(ONE_INSIDE, Settings(0.95, 0.01, 1500), compartments(one_inside, 3))
    assert found.status == UNDECIDED
    assert "1,500" in found.reason
    assert found.replicates <= 1500
    assert found.answer.low < -math.log(0.05) < found.answer.high


def test_whole_values_have_a_whole_answer() -> None:
    """Of n copies each present with chance 0.4, at least one is there with 0.95 from n = 6 on (1 - 0.6^6 = 0.953)."""
    scale = Scale(1.0, 30.0, log=True, whole=True)
    found = search(scale, Settings(0.95, 0.25, 60_000), compartments(lambda n: 1 - 0.6**n, 5))
    assert found.status == FOUND
    assert all(v.is_integer() for v in found.answer)
    assert found.answer.low <= 6 <= found.answer.high
    assert all(t.value.is_integer() for t in found.tried)


def test_a_linear_scale_serves_temperatures() -> None:
    """A logistic share of 0.9 at 30 + 3 ln 9 degrees."""
    share = lambda x: 1.0 / (1.0 + math.exp(-(x - 30.0) / 3.0))  # noqa: E731
    found = search(Scale(10.0, 60.0, log=False), Settings(0.9, 0.1), compartments(share, 2))
    assert found.status == FOUND
    assert found.answer.low <= 30 + 3 * math.log(9) <= found.answer.high


def test_a_share_that_jumps_is_bracketed() -> None:
    found = search(ONE_INSIDE, Settings(0.95), compartments(lambda v: float(v > 4.321), 1))
    assert found.status == FOUND
    assert found.answer.low <= 4.3211
    assert found.answer.high >= 4.3209


def test_the_survey_uses_the_same_compartments_and_the_rounds_new_ones() -> None:
    seen: list[Job] = []
    plain = compartments(one_inside, 4)

    def ask(jobs: Sequence[Job]) -> list[Outcome]:
        seen.extend(jobs)
        return plain(jobs)

    first = search(ONE_INSIDE, Settings(0.95), ask)
    survey = [job for job in seen if job.stream == 0]
    assert len({job.value for job in survey}) == 9
    later = [job.stream for job in seen if job.stream]
    assert len(later) == len(set(later))
    assert sum(job.replicates for job in seen) == first.replicates
    assert search(ONE_INSIDE, Settings(0.95), plain) == first  # the same questions, the same answer
