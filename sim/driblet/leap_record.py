"""What a run file keeps of leaps: how many, how many single events beside them, and how long the longest was."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.engines.leap_arrays import (
    CRITICAL_EVENTS,
    EVENTS,
    IMPLICIT,
    LEAPS,
    LONGEST,
    REJECTED,
    STIFFEST,
    UNCORRECTED,
)
from driblet.run_file import PerReplicate

# name in the group `leaping`, its column of `work`, dtype, unit
_KEPT: tuple[tuple[str, int, Any, str], ...] = (
    ("leaps", LEAPS, np.int64, "1"),
    ("implicit_leaps", IMPLICIT, np.int64, "1"),
    ("exact_events", EVENTS, np.int64, "1"),
    ("critical_events", CRITICAL_EVENTS, np.int64, "1"),
    ("rejected_leaps", REJECTED, np.int64, "1"),
    ("uncorrelated_turnovers", UNCORRECTED, np.int64, "1"),
    ("longest_leap", LONGEST, np.float64, "s"),
    ("longest_leap_in_relaxation_times", STIFFEST, np.float64, "1"),
)


def leap_arrays() -> tuple[PerReplicate, ...]:
    """The arrays as the run file declares them."""
    return tuple(PerReplicate(f"leaping/{name}", (), dtype, unit) for name, _, dtype, unit in _KEPT)


def leap_values(work: NDArray[np.float64]) -> dict[str, NDArray[Any]]:
    """Their values by path. work : (R, WORK) of engines/leap_arrays.py."""
    return {f"leaping/{name}": work[:, column].astype(dtype) for name, column, dtype, _ in _KEPT}
