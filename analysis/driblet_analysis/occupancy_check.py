"""Occupancies against the exact equilibrium law, each replicate on its own class.

Each replicate gives one vector of time averages, tested over replicates by Hotelling's T-squared, and one end state,
tested by its randomised probability integral transform. Where a class has too many states to enumerate its law is sampled
by energies alone (references/metropolis.py).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from driblet.drive import is_driven, runnable
from driblet.energetics.cycles import dependencies
from driblet.errors import CannotAnswerError
from driblet.network import Network
from driblet.results import Run
from driblet.statistics import holm, hotelling, randomised_pit, student_t, uniformity
from driblet.system import System
from driblet_analysis.check_rows import CheckRow
from driblet_analysis.references.count_equilibrium import CountLaw, count_law, equilibrium_weights
from driblet_analysis.references.rate_equations import relaxation_time

FEWEST_REPLICATES = 20
DRIFT_LEVEL = 0.01  # of the test that calls a run not yet stationary
_RELAXATION_MARGIN = 1.5  # small compartments relax at their own pace, not quite that of the rate equations
_MOVE_BUDGET = 30_000_000  # Metropolis moves over all replicates: a few seconds
_SAMPLES = (40, 2000)
_SHARED_SAMPLES = 100  # for each of many replicates of one class
Array = NDArray[np.float64]


@dataclass(frozen=True)
class Laws:
    """The law of each replicate, exact or sampled.

    Attributes: exact : CountLaw of each replicate, empty where sampled; sampled : int64 states (samples, species) of each.
    """

    exact: tuple[CountLaw, ...]
    sampled: tuple[NDArray[np.int64], ...]

    @cached_property
    def mean(self) -> Array:
        """Mean counts, shape=(replicates, species)."""
        if self.exact:
            return np.array([law.mean() for law in self.exact])
        return np.array([states.mean(axis=0) for states in self.sampled])

    @cached_property
    def variance(self) -> Array:
        """Variances of counts, shape=(replicates, species)."""
        if self.exact:
            known = {id(law): np.diag(law.covariance()) for law in {id(law): law for law in self.exact}.values()}
            return np.array([known[id(law)] for law in self.exact])
        return np.array([states.var(axis=0) for states in self.sampled])

    def transform(self, values: NDArray[np.int64], species: int, uniform: Array) -> Array:
        """Randomised probability integral transform of one count of each replicate, shape=(replicates,)."""
        below, at = np.empty(len(values)), np.empty(len(values))
        for row, value in enumerate(values):
            if self.exact:
                n, p = self.exact[row].marginal(species)
                below[row], at[row] = p[n < value].sum(), p[n == value].sum()
            else:
                drawn = self.sampled[row][:, species]
                below[row] = (drawn < value).sum() / (len(drawn) + 1)
                at[row] = ((drawn == value).sum() + 1) / (len(drawn) + 1)
        return randomised_pit(below, at, uniform)


def laws_of(run: Run, system: System, seed: int) -> Laws:
    """The equilibrium law of each replicate's class. Raises CannotAnswerError for a system without one."""
    initial = run.class_counts()
    omega = run.volume_L * system.compartment.omega / system.compartment.volume_L
    exact = []
    for counts, w in zip(initial, omega, strict=True):
        law = count_law(system, counts, float(w))
        if law is None:
            return Laws((), _sampled(system, initial, omega, seed))
        exact.append(law)
    return Laws(tuple(exact), ())


def _sampled(system: System, initial: NDArray[np.int64], omega: Array, seed: int) -> tuple[NDArray[np.int64], ...]:
    network = Network.of(system)
    active = runnable(system)
    classes: dict[tuple[float, ...], list[int]] = {}
    for row, (counts, w) in enumerate(zip(initial, omega, strict=True)):
        classes.setdefault((*counts.tolist(), float(w)), []).append(row)
    # compiled code, slow to load
    from driblet_analysis.references.metropolis import BURN_SHARE, MOVES_A_STATE, metropolis

    wanted = MOVES_A_STATE * max(1, int(active.sum())) / (1.0 - BURN_SHARE)
    moves = _MOVE_BUDGET // len(classes)

    def draw(item: tuple[int, tuple[float, ...]]) -> NDArray[np.int64]:
        k, key = item
        counts, w, replicates = np.array(key[:-1]), key[-1], len(classes[key])
        present = frozenset(name for name, n in zip(network.species, counts, strict=True) if n > 0)
        ln_c, _ = equilibrium_weights(system, present)
        most = max(_SHARED_SAMPLES, _SAMPLES[1] // replicates)
        samples = replicates * int(np.clip(moves / wanted / replicates, _SAMPLES[0], most))
        made = int(min(moves, wanted * samples))
        return metropolis(network, counts, ln_c + math.log(w), active, samples, seed + k, made).states

    with ThreadPoolExecutor() as pool:
        drawn = list(pool.map(draw, enumerate(classes)))
    out: list[NDArray[np.int64]] = [drawn[0]] * len(initial)
    for states, rows in zip(drawn, classes.values(), strict=True):
        for k, row in enumerate(rows):
            # each its own: an error of sampling that all had in common would be taken for one of the run
            out[row] = states[k :: len(rows)]
    return tuple(out)


def refuse_without_equilibrium(system: System) -> None:
    """Raises CannotAnswerError for one-way reactions that can run; driven systems are told apart by the caller."""
    if is_driven(system) is None:
        names = ", ".join(system.one_way_names())
        raise CannotAnswerError(f"one-way reactions ({names}) have no equilibrium; give them an energy and <=>")


def relaxed_window(run: Run, system: System, laws: Laws) -> int:
    """The first window from which on the start is forgotten to a tenth of the statistical error.

    A stated burn-in is taken at its word. Raises CannotAnswerError for a run that is too short, with how long would do.
    """
    sums = run.sums
    assert sums is not None
    duration = float(run.time_s[-1])
    slowest = relaxation_time(system)
    if slowest is None:
        raise CannotAnswerError("no reaction can run from this load, so there is nothing to test")
    if sums.burn_in_s is not None:
        return int(np.searchsorted(sums.edge_s, sums.burn_in_s))
    spread = np.sqrt(laws.variance.mean(axis=0) / len(laws.mean))
    distance = np.abs((run.class_counts() - laws.mean).mean(axis=0))
    moved = spread > 0
    ratio = float(np.max(distance[moved] / spread[moved], initial=1.0)) if moved.any() else 1.0
    needed = _RELAXATION_MARGIN * slowest * math.log(10.0 * max(ratio, 1.0))
    begin = run.last_addition_s
    if needed > 0.5 * (duration - begin):
        raise CannotAnswerError(
            f"too short: the slowest relaxation takes {slowest:.3g} s and the run {duration:.3g} s; "
            f'run about {(begin + 2 * needed) / duration:.1f} times longer (--duration "{begin + 2 * needed:.2g} s")'
        )
    return int(np.searchsorted(sums.edge_s, (begin + needed) * (1 - 1e-12)))


def independent_species(network: Network) -> list[int]:
    """Species whose counts determine all others on a class: a maximal independent set, in the order of the file."""
    matrix = network.stoichiometry
    dependent = {int(np.flatnonzero(row)[-1]) for row in dependencies(matrix)}
    return [i for i in range(matrix.shape[0]) if i not in dependent]


def window_means(count_time: Array, edge_s: Array, first: int, last: int | None = None) -> Array:
    """Time averages over windows first..last, shape=(replicates, species)."""
    part = count_time[:, first:last].sum(axis=1)
    span = float((edge_s[-1] if last is None else edge_s[last]) - edge_s[first])
    return np.asarray(part / span)


def refuse_drift(run: Run, network: Network, first: int) -> None:
    """Raises CannotAnswerError when time averages still move between the halves of the windows used."""
    sums = run.sums
    assert sums is not None
    windows = sums.count_time.shape[1]
    middle = (first + windows) // 2
    if middle in (first, windows):
        return
    change = window_means(sums.count_time, sums.edge_s, middle) - window_means(
        sums.count_time, sums.edge_s, first, middle
    )
    moving = [i for i in independent_species(network) if np.ptp(change[:, i]) > 0]
    if not moving:
        return
    p = holm(np.array([student_t(change[:, i])[1] for i in moving]))
    if p.min() < DRIFT_LEVEL:
        worst = network.species[moving[int(np.argmin(p))]]
        raise CannotAnswerError(
            f"too short: {worst} still drifts in the part that should be stationary; run about 3 times longer"
        )


def occupancy_tests(
    run: Run, network: Network, laws: Laws, averages: Array, generator: np.random.Generator
) -> list[CheckRow]:
    """Time averages together by T-squared, and the distribution of each independent count at the end."""
    rows: list[CheckRow] = []
    difference = averages - laws.mean
    varies = laws.variance > 0
    followed = [i for i in independent_species(network) if varies[:, i].any()]
    for i in range(len(network.species)):
        if not varies[:, i].any() and np.abs(difference[:, i]).max() > 1e-6 * (1.0 + laws.mean[:, i].max()):
            rows.append(CheckRow(f"{network.species[i]}: fixed", "it keeps its count", math.inf, 0.0, len(averages)))
    if followed:
        rows.append(_together(difference[:, followed], [network.species[i] for i in followed]))
    final = run.final_counts()
    for i in followed:
        rows_used = np.flatnonzero(varies[:, i])
        uniform = generator.random(len(final))
        transform = laws.transform(final[:, i], i, uniform)[rows_used]
        distance, p = uniformity(transform)
        hypothesis = "the end state of each compartment follows the law of its class"
        rows.append(CheckRow(f"{network.species[i]}: distribution", hypothesis, distance, p, len(transform)))
    return rows


def _together(difference: Array, names: Sequence[str]) -> CheckRow:
    """T-squared over replicates of time average minus exact mean; with too few replicates the smallest corrected t."""
    hypothesis = "the mean over compartments of (time average − exact mean of the compartment's class) is zero"
    n = len(difference)
    moving = difference.std(axis=0) > 0
    if not moving.any():
        off = bool(np.abs(difference).max() > 1e-9)
        return CheckRow("time averages", hypothesis, math.inf if off else 0.0, 0.0 if off else 1.0, n)
    if n > 3 * int(moving.sum()):
        result = hotelling(difference)
        return CheckRow(f"time averages (T², {result.dimensions} counts)", hypothesis, result.statistic, result.p, n)
    single = [student_t(difference[:, k]) for k in np.flatnonzero(moving)]
    corrected = holm(np.array([p for _, p in single]))
    worst = int(np.argmin(corrected))
    name = names[int(np.flatnonzero(moving)[worst])]
    return CheckRow(f"time averages (largest t: {name})", hypothesis, single[worst][0], float(corrected[worst]), n)
