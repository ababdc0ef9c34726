"""What a run will take, for `driblet audit`: its course by the rate equations, its work, and the engine it runs on."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.engine_choice import AUTO, EXACT, choose_engine, core_seconds
from driblet.errors import InputError
from driblet.lumping import LUMPED
from driblet.network import Network
from driblet.run_settings import sample_times
from driblet.system import System
from driblet.treatments import with_treatments
from driblet_analysis.course import expected_course

EVENTS_PER_SECOND_AND_CORE = 3e7  # of the exact engine on a current core; for the estimate alone
WORTH_A_PILOT = 60.0  # core seconds of exact simulation from which leaps are thought of unasked
Array = NDArray[np.float64]


def course_of(system: System, network: Network, copies: Array) -> dict[str, Any] | None:
    """Expected firings of each channel over the run by the rate equations, None without a duration."""
    duration = system.settings.duration_s
    if not duration > 0:
        return None
    omega = system.compartment.omega
    starts = [0.0, *(a.at_s for a in system.additions if a.at_s < duration)]
    firings, final = np.zeros(len(network.channels)), copies
    for k, start in enumerate(starts):
        end = starts[k + 1] if k + 1 < len(starts) else duration
        if k:
            addition = system.additions[k - 1]
            final = final + np.array(
                [addition.mean_copies(omega) * (name == addition.species) for name in network.species]
            )
        if end > start:
            more, final = expected_course(network, final, omega, end - start)
            firings = firings + more
    return {"firings": firings, "final": final, "duration_s": duration}


def treated_course(system: System) -> dict[str, Any] | None:
    """The course with enzymes treated as the file asks, None where that is step by step."""
    made, choices = with_treatments(system)
    if not any(choice.taken == LUMPED for choice in choices):
        return None
    copies = np.array([s.mean_copies(made.compartment.omega) for s in made.free_species])
    return course_of(made, Network.of(made), copies)


def engine_facts(system: System, exact_seconds: float | None) -> dict[str, Any] | None:
    """Which engine a run takes and why, by a pilot compartment; None for an exact run that is quick anyway."""
    settings = system.settings
    if not settings.duration_s or (settings.engine == EXACT and (exact_seconds or 0.0) < WORTH_A_PILOT):
        return None
    asked = settings if settings.engine != EXACT else replace(settings, engine=AUTO)
    made, _ = with_treatments(system, engine=asked.engine)
    choice = choose_engine(made, Network.of(made), asked)
    seconds = None
    if choice.leaps:
        whole = settings.replicates * settings.duration_s / choice.facts["simulated_s"]
        seconds = core_seconds(choice.facts)[1] * whole
    return {
        "asked": settings.engine,
        "taken": choice.taken if settings.engine != EXACT else EXACT,
        "auto_takes": choice.taken,
        "why": choice.why,
        "tolerance": choice.tolerance,
        "longest_leap_relaxation_times": choice.stiffness,
        "pilot": choice.facts,
        "estimated_core_seconds": seconds,
    }


def run_facts(system: System, course: dict[str, Any] | None) -> dict[str, Any]:
    """The work of a run by exact events."""
    if course is None:
        return {"duration_s": None, "events_per_simulated_second": None, "estimated_core_seconds": None}
    events = float(np.sum(course["firings"]))
    try:
        samples = len(sample_times(system.settings))
    except InputError:
        samples = 0
    return {
        "duration_s": course["duration_s"],
        "replicates": system.settings.replicates,
        "samples": samples,
        "events_per_simulated_second": events / course["duration_s"],
        "estimated_core_seconds": events * system.settings.replicates / EVENTS_PER_SECOND_AND_CORE,
    }
