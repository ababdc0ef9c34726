"""What came of requirements in each compartment, as a run file keeps it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.run_file import PerReplicate

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
