"""Shares of compartments that meet requirements.

Where the condition was looked at after every event the outcome is exact. Between leaps, or between the points of a sampling
grid, a short failure goes unseen, so that the share that holds throughout is an upper bound; and so does a short success,
so that the share that succeeds once is a lower one.
"""

from __future__ import annotations

from typing import NamedTuple

from driblet.outcomes import EVENT
from driblet.results import Run
from driblet.survival import Interval, trials_to_tell, wilson


class ShareRow(NamedTuple):
    """The share of compartments that meets one requirement.

    name, must, when : as in the file; asked : the share it states, or None; share : found, with Wilson's 95 % interval;
    met : whether the share found is the asked one or more, None where none is asked for; certain : whether the interval
    leaves no doubt of it; needed : compartments that would, None where that cannot be said; failing, undecided :
    compartments; looked_at : EVENT, LEAP or GRID; bound : "", or what the share is instead of exact; why : it was not looked at
    after every event.
    """

    name: str
    must: str
    when: str
    asked: float | None
    share: Interval
    met: bool | None
    certain: bool | None
    needed: int | None
    failing: int
    undecided: int
    looked_at: str
    bound: str
    why: str = ""


def shares(run: Run) -> list[ShareRow]:
    """The share of compartments of each requirement of a run, in the order of its file."""
    outcomes = run.outcomes
    rows = []
    for q, requirement in enumerate(run.system.requirements):
        met = outcomes.met[:, q]
        undecided, failing = int((met < 0).sum()), int((met == 0).sum())
        # a compartment that was watched too briefly counts as failing: the cautious side
        share = wilson(int((met == 1).sum()), len(met))
        looked_at = run.requirement_resolution[requirement.name]
        asked = requirement.share
        reached = None if asked is None or not len(met) else bool(share.value >= asked)
        rows.append(
            ShareRow(
                requirement.name,
                requirement.must.text,
                when_text(requirement.when, requirement.averaged_over_s),
                asked,
                share,
                reached,
                None if asked is None else bool(share.low >= asked or share.high < asked),
                None if asked is None or not len(met) else trials_to_tell(share.value, asked),
                failing,
                undecided,
                looked_at,
                bound(requirement.when, looked_at),
                run.requirements_on_samples.get(requirement.name, ""),
            )
        )
    return rows


def when_text(when: str, averaged_over_s: float | None) -> str:
    """When a condition must hold, for people."""
    return when if averaged_over_s is None else f"{when}, averaged over {averaged_over_s:g} s"


def bound(when: str, looked_at: str) -> str:
    """What a share is when the condition was not looked at after every event, "" where it is exact."""
    if looked_at == EVENT:
        return ""
    return {"throughout": "upper bound", "once": "lower bound"}.get(when, "from samples")
