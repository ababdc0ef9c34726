"""What a sweep will cost, before it runs: events, time and disk, from the rate equations of some of its points."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import NamedTuple

import numpy as np

from driblet.engine_choice import choose_engine, core_seconds
from driblet.network import Network
from driblet.run_settings import sample_times
from driblet.system import System
from driblet.treatments import with_treatments
from driblet_analysis.audit_work import EVENTS_PER_SECOND_AND_CORE
from driblet_analysis.course import expected_course

_MOST_SAMPLED = 24
_BUDGET_SECONDS = 2.5
_OVERHEAD_SECONDS = 0.02  # of a point that has nothing to simulate
_POINT_BYTES, _COLUMN_BYTES = 300, 8
_TRAJECTORY_SHARE = 0.25  # of the raw numbers that is left after compression, for counts that change a little at a time


class Estimate(NamedTuple):
    """Work of a sweep. Attributes: points; events, core_seconds : None where no point could be estimated; bytes; sampled."""

    points: int
    events: float | None
    core_seconds: float | None
    bytes: float
    sampled: int

    @property
    def seconds_per_point(self) -> float:
        """Seconds of one core that a point takes on average; 0 when unknown."""
        return self.core_seconds / self.points if self.core_seconds and self.points else 0.0


def estimate_work(system: Callable[[int], System], points: int, keep: str, columns: int) -> Estimate:
    """Estimate the work of points 0 .. points - 1 from some of them, spread evenly. columns : numbers kept per point."""
    events: list[float] = []
    seconds: list[float] = []
    size = float(_POINT_BYTES + _COLUMN_BYTES * columns)
    started = time.monotonic()
    sizes: list[float] = []
    for number in _spread(points):
        if time.monotonic() - started > _BUDGET_SECONDS:
            break
        one = system(number)
        replicates = one.settings.replicates
        try:
            found, taken = (replicates * part for part in _work(one))
        except (ArithmeticError, ValueError, np.linalg.LinAlgError):
            continue
        events.append(found)
        seconds.append(taken + _OVERHEAD_SECONDS)
        numbers = len(one.free_species) + 2 * len(one.reactions) + len(one.readouts)
        sizes.append(8.0 * _TRAJECTORY_SHARE * replicates * len(sample_times(one.settings)) * numbers)
    if keep == "trajectories" and sizes:
        size += float(np.mean(sizes))
    if not events:
        return Estimate(points, None, None, size * points, 0)
    return Estimate(
        points, float(np.mean(events)) * points, float(np.mean(seconds)) * points, size * points, len(events)
    )


def _spread(points: int) -> list[int]:
    """Numbers of some points: all of a few, else spread over the plan in an order that covers it early."""
    if points <= _MOST_SAMPLED:
        return list(range(points))
    fractions = (np.arange(_MOST_SAMPLED) * 0.6180339887498949 + 0.5) % 1.0  # golden section: no rhythm to fall into
    return list(dict.fromkeys(int(f * points) for f in fractions))


def _work(stated: System) -> tuple[float, float]:
    """Events and core seconds of one compartment, enzymes treated and the engine chosen as a run will have them."""
    system, _ = with_treatments(stated)
    network = Network.of(system)
    choice = choose_engine(system, network, system.settings)
    if choice.leaps:
        part = system.settings.duration_s / choice.facts["simulated_s"]
        return choice.facts["firings"] * part, core_seconds(choice.facts)[1] * part
    omega = system.compartment.omega
    copies = np.array([s.mean_copies(omega) for s in system.free_species])
    firings, _ = expected_course(network, copies, omega, system.settings.duration_s)
    events = float(np.sum(firings))
    return events, events / EVENTS_PER_SECOND_AND_CORE
