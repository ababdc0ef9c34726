"""How propensities are summed and a channel is found: the same arithmetic in every kernel.

Up to 64 channels are summed one after the other. More are summed in groups of 8, the groups' totals again in groups of 8,
and so on until at most 64 totals are left at the top. A firing then touches a few groups a level, so that the cost of an
event hardly grows with the number of channels; and since every sum is rebuilt from its terms and none is ever corrected
by a difference, nothing drifts over any number of events.

Sums are kept as cumulative rows. A group is a row of zero followed by its members' cumulative sums, so that the sum before
any member is in the row before it:

    level 0   | 0 a0 a0+a1 ... | 0 a8 a8+a9 ... | ...        leaves: one row a channel
    level 1   | 0 A0 A0+A1 ... | ...                         A0 = last row of group 0, and so on
    top       | 0 T0 T0+T1 ... |                             its last row is the total propensity
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from driblet.engines.compile_cache import CACHE
from driblet.engines.contract import NetworkArrays

FAN = 8
STRIDE = FAN + 1
TOP = 64
JUST_BELOW_ONE = 1.0 - 2.0**-53


class SumRows(NamedTuple):
    """Where the sums of M channels lie among P rows.

    leaf : int64, (M,), row of each channel; upper, source : int64, the rows above the leaves and those padding groups,
    lowest level first, and the row each adds to the one before it
    base : int64, (levels - 1,), first row of each level below the top, highest first
    top, end : the zero row of the top group and the number P of rows.
    """

    leaf: NDArray[np.int64]
    upper: NDArray[np.int64]
    source: NDArray[np.int64]
    base: NDArray[np.int64]
    top: int
    end: int


class Refresh(NamedTuple):
    """Which sums a firing of each channel makes stale.

    start, row : CSR over channels; from `row` to its group's end the sums are built anew, lowest level first
    top : int64, (M,), the first stale row of the top group
    group_end, group_parent : int64, by row // 9: the row after the group's last, the row that takes the group's total
    """

    start: NDArray[np.int64]
    row: NDArray[np.int64]
    top: NDArray[np.int64]
    group_end: NDArray[np.int64]
    group_parent: NDArray[np.int64]


def sum_rows(channels: int) -> SumRows:
    """Lay out the sums of `channels` propensities."""
    sizes = [channels]
    while sizes[-1] > TOP:
        sizes.append(-(-sizes[-1] // FAN))
    base = np.concatenate([[0], np.cumsum([STRIDE * size for size in sizes[1:]], dtype=np.int64)]).astype(np.int64)
    rows = []
    for level, start in enumerate(base):
        member = np.arange(sizes[level])
        rows.append(start + 1 + member + (member // FAN if level < len(sizes) - 1 else 0))
    upper, source = [], []
    for level in range(len(sizes)):
        if level:
            upper.append(rows[level])
            source.append(base[level - 1] + STRIDE * np.arange(sizes[level]) + FAN)
        if level < len(sizes) - 1:  # a group that is not full repeats its total, as if it had channels that never fire
            padding = np.arange(sizes[level], FAN * sizes[level + 1])
            upper.append(base[level] + 1 + padding + padding // FAN)
            source.append(np.zeros(len(padding), dtype=np.int64))
    join = [np.concatenate([np.zeros(0, dtype=np.int64), *parts]).astype(np.int64) for parts in (upper, source)]
    end = int(base[-1]) + 1 + sizes[-1]
    return SumRows(rows[0].astype(np.int64), join[0], join[1], base[:-1][::-1].copy(), int(base[-1]), end)


def refresh_plan(network: NetworkArrays, rows: SumRows) -> Refresh:
    """Follow each channel's dependents up the levels."""
    channels = len(rows.leaf)
    owner = np.repeat(np.arange(channels), np.diff(network.depend_start))
    stale = rows.leaf[network.depend_channel]
    groups = max(1, -(-rows.top // STRIDE))
    group_end = STRIDE * (np.arange(groups) + 1)
    group_parent = np.zeros(groups, dtype=np.int64)
    members = np.flatnonzero(rows.source)
    group_parent[rows.source[members] // STRIDE] = rows.upper[members]
    owners, stales = [], []
    while len(stale) and stale[0] < rows.top:
        first = np.ones(len(stale), dtype=bool)
        first[1:] = (owner[1:] != owner[:-1]) | (stale[1:] // STRIDE != stale[:-1] // STRIDE)
        owner, stale = owner[first], stale[first]
        owners.append(owner)
        stales.append(stale)
        stale = group_parent[stale // STRIDE]
    top = np.full(channels, rows.end, dtype=np.int64)
    np.minimum.at(top, owner, stale)
    all_owners = np.concatenate([np.zeros(0, dtype=np.int64), *owners])
    order = np.argsort(all_owners, kind="stable")
    start = np.concatenate([[0], np.cumsum(np.bincount(all_owners, minlength=channels))]).astype(np.int64)
    row = np.concatenate([np.zeros(0, dtype=np.int64), *stales])[order].astype(np.int64)
    return Refresh(start, row, top, group_end.astype(np.int64), group_parent)


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def select(cumulative, target):  # type: ignore[no-untyped-def]
    """How many of the cumulative sums do not exceed `target`, 0 <= target < the last: the member whose share holds it.

    A member of propensity zero has an empty share and is never selected.
    """
    member = np.uint64(0)
    while cumulative[member] <= target:
        member += np.uint64(1)
    return member


@njit(nogil=True, cache=CACHE, error_model="numpy", inline="always")
def within(target, before, total):  # type: ignore[no-untyped-def]
    """The target inside a group, from the target above it and the sum before the group; rounding must not carry it to the
    group's total, beyond which there is nothing."""
    inside = target - before
    most = total * JUST_BELOW_ONE
    return inside if inside < most else most
