"""What a caller or a file asks of a run, held to the rules, and the recording grid that follows."""

from __future__ import annotations

from collections.abc import Mapping
from numbers import Integral, Real

import numpy as np
from numpy.typing import NDArray

from driblet.errors import InputError, Problem, one_problem
from driblet.system import RunSettings
from driblet.system.tables import (
    ENGINES,
    LARGEST_SEED,
    LONGEST_TIME,
    MOST_REPLICATES,
    SHORTEST_TIME,
    TOLERANCES,
    unknown_engine,
)

DEFAULT_SAMPLES = 200
MOST_SAMPLES = 1_000_000


def sample_times(settings: RunSettings) -> NDArray[np.float64]:
    """The recording grid in s: every `sample_every` from zero, and the end.

    Raises InputError when duration is missing or the grid is too fine.
    """
    duration = settings.duration_s
    if not duration > 0:
        raise one_problem("run", "duration", 'is missing: state it, such as duration = "20 min"')
    every = settings.sample_every_s or duration / DEFAULT_SAMPLES
    if every > duration:
        raise one_problem("run", "sample_every", "is longer than the run")
    if duration / every > MOST_SAMPLES:
        raise one_problem("run", "sample_every", f"makes more than {MOST_SAMPLES} samples; choose a longer one")
    times: NDArray[np.float64] = np.arange(int(np.floor(duration / every * (1 + 1e-12))) + 1) * np.float64(every)
    if duration - times[-1] > 1e-9 * duration:
        times = np.append(times, duration)
    times[-1] = duration
    return times


def check_arguments(given: Mapping[str, object], threads: int | None) -> None:
    """Hold what a caller gave to the rules of the system file. Raises InputError with every problem."""
    problems = []
    for key, low, high in (("replicates", 1, MOST_REPLICATES), ("seed", 0, LARGEST_SEED)):
        value = given.get(key, low)
        if isinstance(value, bool) or not isinstance(value, Integral) or not low <= int(value) <= high:
            problems.append(Problem(key, f"{value!r} will not do: a whole number from {low} to {high} is needed"))
    for key, argument in (("duration_s", "duration"), ("sample_every_s", "sample_every")):
        value = given.get(key, 1.0)
        if isinstance(value, bool) or not isinstance(value, Real) or not SHORTEST_TIME <= float(value) <= LONGEST_TIME:
            text = f"{value!r} will not do: seconds from {SHORTEST_TIME:g} to {LONGEST_TIME:g} are needed"
            problems.append(Problem(argument, text))
    if given.get("engine", "exact") not in ENGINES:
        problems.append(Problem("engine", unknown_engine(given["engine"])))
    tolerance, (least, most) = given.get("leap_tolerance", TOLERANCES[0]), TOLERANCES
    if isinstance(tolerance, bool) or not isinstance(tolerance, Real) or not least <= float(tolerance) <= most:
        text = f"{tolerance!r} will not do: a number from {least:g} to {most:g} is needed"
        problems.append(Problem("leap_tolerance", text))
    if threads is not None and (isinstance(threads, bool) or not isinstance(threads, Integral) or threads < 1):
        problems.append(Problem("threads", f"{threads!r} will not do: a whole number from 1 is needed"))
    if problems:
        raise InputError("run", problems)
