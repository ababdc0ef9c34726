"""Requirements as arrays, which judging.py and lane_judging.py fill; no kernels here, so that readers need none."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

THROUGHOUT, AT_END, ONCE = range(3)
SIGN, RATIO, LOG_UP, LOG_DOWN, LOG_MIXED = range(5)
AND, OR = -1, -2
UNDECIDED, FAILED, MET = -1, 0, 1

# columns of Requirements.table, .span, .leaf and .record
FIRST_LEAF, END_LEAF, FIRST_CODE, END_CODE, WHEN, WINDOWS = range(6)
START, END, WINDOW = range(3)
KIND, STRICT, POLYNOMIAL, OTHER = range(4)
TRUTH, SINCE, NEXT_WINDOW, TIME_MET, FIRST_MET, FIRST_FAILURE, JUDGED_UNTIL, OUTCOME = range(8)


class Requirements(NamedTuple):
    """Q requirements of R replicates, the `moments` ones that judge every state first, then those that judge averages.

    moments, moment_leaves : how many judge every state, and their leaves; stops : whether a replicate may end when all are
    decided
    affected_start, affected : CSR over channels, which requirements a firing can change
    table : int64, (Q, 6), leaves and program codes of each, WHEN, and how many WINDOWS fill its span (the last takes the rest)
    span : (Q, 3), s, START, END, and WINDOW averaged over
    leaf : int64, (L, 4), KIND, STRICT, POLYNOMIAL, and the OTHER one of a ratio or logarithm
    term_start : (P + 1,) over polynomials; factor_start : (T + 1,) over terms; factor_species, factor_offset : (F,)
    program : leaves from 0 up within the requirement, AND, OR
    coefficient : (R, T)
    leaf_value, leaf_sum : (R, L), of averages: of the moment, and integrated over the window so far
    leaf_truth : (R, L), 1 or 0; record : (R, Q, 8), what is known; times in s, NaN for what did not happen
    integrated_to, next_edge : (R,), s, of averages; halt : (R,), s, when all were decided, inf before.
    """

    moments: int
    moment_leaves: int
    stops: bool
    affected_start: NDArray[np.int64]
    affected: NDArray[np.int64]
    table: NDArray[np.int64]
    span: NDArray[np.float64]
    leaf: NDArray[np.int64]
    term_start: NDArray[np.int64]
    factor_start: NDArray[np.int64]
    factor_species: NDArray[np.int64]
    factor_offset: NDArray[np.float64]
    program: NDArray[np.int64]
    coefficient: NDArray[np.float64]
    leaf_value: NDArray[np.float64]
    leaf_sum: NDArray[np.float64]
    leaf_truth: NDArray[np.float64]
    record: NDArray[np.float64]
    integrated_to: NDArray[np.float64]
    next_edge: NDArray[np.float64]
    halt: NDArray[np.float64]


def no_requirements(replicates: int, channels: int) -> Requirements:
    """Requirements that are off."""
    none, start, nothing = np.zeros(0, dtype=np.int64), np.zeros(1, dtype=np.int64), np.zeros((replicates, 0))
    return Requirements(
        moments=0,
        moment_leaves=0,
        stops=False,
        affected_start=np.zeros(channels + 1, dtype=np.int64),
        affected=none,
        table=np.zeros((0, 6), dtype=np.int64),
        span=np.zeros((0, 3)),
        leaf=np.zeros((0, 4), dtype=np.int64),
        term_start=start,
        factor_start=start,
        factor_species=none,
        factor_offset=np.zeros(0),
        program=none,
        coefficient=nothing,
        leaf_value=nothing,
        leaf_sum=nothing,
        leaf_truth=nothing,
        record=np.zeros((replicates, 0, 8)),
        integrated_to=np.zeros(replicates),
        next_edge=np.full(replicates, np.inf),
        halt=np.full(replicates, np.inf),
    )
