"""A slow, obvious simulator in plain Python: dicts, loops, unbounded integers, no numpy. The exact engine must give the
same trajectory, event for event, from the same stream.

xoshiro256++ is written from its authors' description (Blackman & Vigna, ACM Trans. Math. Softw. 47:36, 2021); the
logarithm repeats the engine's series in the same order of operations, because bits are compared.
"""

from __future__ import annotations

import struct
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field

MASK = (1 << 64) - 1


def rotate_left(x: int, k: int) -> int:
    return ((x << k) | (x >> (64 - k))) & MASK


def words(seed: Sequence[int]) -> Iterator[int]:
    """xoshiro256++ from four 64-bit words of state."""
    s = [int(w) for w in seed]
    while True:
        yield (rotate_left((s[0] + s[3]) & MASK, 23) + s[0]) & MASK
        t = (s[1] << 17) & MASK
        s[2] ^= s[0]
        s[3] ^= s[1]
        s[1] ^= s[2]
        s[0] ^= s[3]
        s[2] ^= t
        s[3] = rotate_left(s[3], 45)


def minus_log(u: float) -> float:
    """-ln u by ln u = e ln 2 + 2 artanh((m - 1)/(m + 1)), u = 2^e m with m in [1/sqrt2, sqrt2)."""
    (bits,) = struct.unpack("<q", struct.pack("<d", u))
    exponent = (bits - 0x3FE6A09E667F3BCD) >> 52
    (m,) = struct.unpack("<d", struct.pack("<q", bits - (exponent << 52)))
    z = (m - 1.0) / (m + 1.0)
    w = z * z
    series = 1.0 / 17.0
    for odd in (15.0, 13.0, 11.0, 9.0, 7.0, 5.0, 3.0, 1.0):
        series = series * w + 1.0 / odd
    return -(float(exponent) * 0.6931471805599453 + 2.0 * z * series)


@dataclass
class Trajectory:
    """What happened: on the grid, and every single event as (time, channel)."""

    counts: list[dict[str, int]] = field(default_factory=list)
    firings: list[list[int]] = field(default_factory=list)
    events: list[tuple[float, int]] = field(default_factory=list)
    frozen: bool = False


@dataclass(frozen=True)
class Step:
    """One channel: reactants and change by species name, rate per product of falling factorials, 1/s."""

    reactants: Mapping[str, int]
    change: Mapping[str, int]
    rate: float


def propensity(step: Step, counts: Mapping[str, int]) -> float:
    value = step.rate
    for name, multiplicity in step.reactants.items():
        for k in range(multiplicity):
            value *= float(counts[name] - k)
    return value


def simulate(
    steps: Sequence[Step],
    start: Mapping[str, int],
    times: Sequence[float],
    seed: Sequence[int],
    propensity: Callable[[Step, Mapping[str, int]], float] = propensity,
) -> Trajectory:
    """Gillespie's direct method: two words an event, first the waiting time, then the channel."""
    stream = words(seed)
    counts = dict(start)
    fired = [0] * len(steps)
    out = Trajectory()
    clock, at = 0.0, 0
    while at < len(times):
        single = [propensity(step, counts) for step in steps]
        total = 0.0
        for value in single:
            total += value
        later = float("inf")
        if total > 0.0:
            later = clock + minus_log(((next(stream) >> 12) + 0.5) * 2.0**-52) / total
        while at < len(times) and times[at] < later:
            out.counts.append(dict(counts))
            out.firings.append(list(fired))
            at += 1
        if at == len(times):
            out.frozen = total == 0.0
            break
        clock = later
        target = float(next(stream) >> 12) * 2.0**-52 * total
        running, chosen = 0.0, -1
        while running <= target:
            chosen += 1
            running += single[chosen]
        for name, amount in steps[chosen].change.items():
            counts[name] += amount
        fired[chosen] += 1
        out.events.append((clock, chosen))
    return out
