"""What a run file keeps of leaps: how many, how many single events beside them, and how long the longest was."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.run_file import PerReplicate

# name in the group `leaping`, its column in the kernel's `work`, dtype, unit
_KEPT: tuple[tuple[str, int, Any, str], ...] = (
    ("leaps", 0, np.int64, "1"),
    ("implicit_leaps", 1, np.int64, "1"),
    ("exact_events", 2, np.int64, "1"),
    ("critical_events", 3, np.int64, "1"),
    ("rejected_leaps", 4, np.int64, "1"),
    ("uncorrelated_turnovers", 5, np.int64, "1"),
    ("longest_leap", 6, np.float64, "s"),
    ("longest_leap_in_relaxation_times", 7, np.float64, "1"),
)


def leap_arrays() -> tuple[PerReplicate, ...]:
    """The arrays as the run file declares them."""
    return tuple(PerReplicate(f"leaping/{name}", (), dtype, unit) for name, _, dtype, unit in _KEPT)


def leap_values(work: NDArray[np.float64]) -> dict[str, NDArray[Any]]:
    """Their values by path. work : (R, WORK) of engines/leaps.py."""
    return {f"leaping/{name}": work[:, column].astype(dtype) for name, column, dtype, _ in _KEPT}
