"""Which method of the exact engine runs a network: a measured rule, in this one place. No kernels here."""

from __future__ import annotations

import math

METHODS = ("lanes", "scalar")
LANES = 64  # eight 512-bit vectors; fewer pay too much for each loop's start, more leave the first cache


def fewest_lanes(channels: int) -> int:
    """The least number of replicates in lockstep that are faster than one after the other.

    Measured with tests/benchmarks/exact_engine.py: 3 at 2 channels, 4 at 14, 6 at 60, 9 at 120, 24 to 29 at 300; about
    500 channels are past what 64 lanes make up for.
    """
    return math.ceil(3.0 + channels / 25.0 + (channels / 80.0) ** 2)


def choose_method(channels: int, replicates: int, logging: bool = False) -> str:
    """The faster method for a network and an ensemble; an event log is kept by the scalar kernel only."""
    return "scalar" if logging or fewest_lanes(channels) > min(replicates, LANES) else "lanes"
