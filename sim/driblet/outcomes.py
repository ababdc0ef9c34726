"""What came of requirements: per compartment as a run file keeps it, and as shares of compartments.

Where the condition was looked at after every event the outcome is exact. Between leaps, or between the points of a sampling
grid, a short failure goes unseen, so that the share that holds throughout is an upper bound; and so does a short success,
so that the share that succeeds once is a lower one.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.store import PerReplicate
from driblet.survival import Interval, trials_to_tell, wilson

if TYPE_CHECKING:
    from driblet.results import Run

Array = NDArray[np.float64]
EVENT, LEAP, GRID = "event", "leap", "grid"  # where the truth of a requirement was looked at
LOOKED_AT = {EVENT: "every event", LEAP: "leap ends", GRID: "samples"}
_FOLDER = "requirements"


@dataclass(frozen=True)
class Outcomes:
    """What came of Q requirements in R replicates; every array of shape (R, Q).

    met : int8, 1 met, 0 not, -1 undecided because the record ended first; first_failure_s, first_met_s : when the condition
    first failed and first held within its span, NaN where it never did (of averages: the end of the stretch); time_met_s :
    for how long it held; judged_until_s : up to when it was watched.
    """

    met: NDArray[np.int8]
    first_failure_s: Array
    first_met_s: Array
    time_met_s: Array
    judged_until_s: Array

    @classmethod
    def empty(cls, replicates: int, requirements: int) -> Outcomes:
        """Nothing known yet."""
        shape = (replicates, requirements)
        return cls(np.full(shape, -1, dtype=np.int8), *(np.full(shape, np.nan) for _ in range(4)))

    @classmethod
    def arrays(cls, requirements: int) -> tuple[PerReplicate, ...]:
        """What a run file keeps of them; nothing where there are no requirements."""
        if not requirements:
            return ()
        return tuple(
            PerReplicate(
                f"{_FOLDER}/{field.name}",
                (requirements,),
                np.int8 if field.name == "met" else np.float64,
                "s" if field.name.endswith("_s") else "1",
            )
            for field in fields(cls)
        )

    def values(self) -> dict[str, NDArray[Any]]:
        """The arrays by their path in a run file; none where there are no requirements."""
        if not self.met.shape[1]:
            return {}
        return {f"{_FOLDER}/{field.name}": getattr(self, field.name) for field in fields(self)}

    @classmethod
    def read(cls, array: Mapping[str, NDArray[Any]] | Any) -> Outcomes:
        """From a function or mapping that gives the array at a path."""
        get = array.__getitem__ if isinstance(array, Mapping) else array
        return cls(*(get(f"{_FOLDER}/{field.name}") for field in fields(cls)))


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
