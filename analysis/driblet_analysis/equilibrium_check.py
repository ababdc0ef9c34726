"""Is a run consistent with the equilibrium its energies imply? Each replicate is held against the law on its own class.

The sampling unit is the replicate: each gives one end state (tested by its randomised probability integral transform)
and one vector of time averages (tested against the exact means of its own class). p values carry Holm's correction.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.drive import emergent_affinities, is_driven
from driblet.energetics.cycles import dependencies
from driblet.errors import CannotAnswerError
from driblet.network import Network
from driblet.results import Run
from driblet.statistics import holm, jackknife, randomised_pit, student_t, uniformity
from driblet.system import System
from driblet.system.build import describe_cycle
from driblet_analysis.references.count_equilibrium import CountLaw, count_law
from driblet_analysis.references.rate_equations import relaxation_time

FALSE_ALARM_RATE = 0.05  # chance that a correct run is called inconsistent
FEWEST_REPLICATES = 20
_RELAXATION_MARGIN = 1.5  # small compartments relax at their own pace, not quite that of the rate equations
Array = NDArray[np.float64]


class CheckRow(NamedTuple):
    """One test. p is corrected for the number of tests; samples counts replicates."""

    name: str
    hypothesis: str
    statistic: float
    p: float
    samples: int


class RatioRow(NamedTuple):
    """One reaction's ratio of mean concentrations, products over reactants, in (mol/L)^order_change.

    measured +- standard_error from the run; expected : the exact finite-count value of that very quantity; K : K'.
    """

    reaction: str
    measured: float
    standard_error: float
    expected: float
    K: float
    order_change: int


@dataclass(frozen=True)
class CheckResult:
    """What a check found. verdict : "consistent", "inconsistent" or "cannot answer"; reason : one sentence."""

    verdict: str
    reason: str
    tests: tuple[CheckRow, ...] = ()
    ratios: tuple[RatioRow, ...] = ()
    window_s: tuple[float, float] | None = None


def check_equilibrium(run: Run, against: System | None = None) -> CheckResult:
    """Test a run against the exact count equilibrium of its system, or of `against`: the same with other energies.

    Never raises for data that cannot answer; the verdict says so.
    """
    system = against or run.system
    try:
        laws, first = _prepare(run, system)
        return _test(run, system, laws, first)
    except CannotAnswerError as error:
        return CheckResult("cannot answer", str(error))


def _prepare(run: Run, system: System) -> tuple[list[CountLaw], int]:
    """The law of each replicate and the first sample after relaxation. Raises CannotAnswerError."""
    driven = is_driven(system)
    if driven:
        vector, affinity = max(emergent_affinities(system), key=lambda pair: abs(pair[1]))
        cycle = describe_cycle(vector, [r.name for r in system.reactions])
        raise CannotAnswerError(
            f"driven: no equilibrium to hold it against (each turn of the cycle {cycle} spends {abs(affinity):.4g} kJ/mol)"
        )
    if driven is None:
        names = ", ".join(r.name for r in system.reactions if r.one_way)
        raise CannotAnswerError(f"one-way reactions ({names}) have no equilibrium; give them an energy and <=>")
    if len(run.replicate) < FEWEST_REPLICATES:
        raise CannotAnswerError(
            f"{len(run.replicate)} compartments are too few for a test over compartments; at least {FEWEST_REPLICATES} are needed"
        )
    initial = run.initial_counts()
    omega = run.volume_L * system.compartment.omega / system.compartment.volume_L
    laws = []
    for n, w in zip(initial, omega, strict=True):
        law = count_law(system, n, float(w))
        if law is None:
            raise CannotAnswerError("the states of this system are too many to enumerate; fewer molecules would do")
        laws.append(law)
    return laws, _first_relaxed_sample(run, system, laws)


def _first_relaxed_sample(run: Run, system: System, laws: list[CountLaw]) -> int:
    """Index of the sample from which on the start is forgotten, to a tenth of the statistical error."""
    duration = float(run.time_s[-1])
    slowest = relaxation_time(system)
    if slowest is None:
        raise CannotAnswerError("no reaction can run from this load, so there is nothing to test")
    means = np.array([law.mean() for law in laws])
    spread = np.sqrt(np.mean([np.diag(law.covariance()) for law in laws], axis=0) / len(laws))
    distance = np.abs((run.initial_counts() - means).mean(axis=0))
    moved = spread > 0
    ratio = float(np.max(distance[moved] / spread[moved], initial=1.0)) if moved.any() else 1.0
    needed = _RELAXATION_MARGIN * slowest * max(1.0, math.log(10.0 * max(ratio, 1.0)))
    if needed > 0.5 * duration:
        raise CannotAnswerError(
            f"too short: the slowest relaxation takes {slowest:.3g} s and the run {duration:.3g} s; "
            f'run about {2 * needed / duration:.1f} times longer (--duration "{2 * needed:.2g} s")'
        )
    return int(np.searchsorted(run.time_s, 0.5 * duration))


def independent_species(network: Network) -> list[int]:
    """Species whose counts determine all others on a class: a maximal independent set, in the order of the file."""
    matrix = network.stoichiometry
    dependent = {int(np.flatnonzero(row)[-1]) for row in dependencies(matrix)}
    return [i for i in range(matrix.shape[0]) if i not in dependent]


def _test(run: Run, system: System, laws: list[CountLaw], first: int) -> CheckResult:
    network = Network.of(system)
    means = np.array([law.mean() for law in laws])
    averages = run.counts[:, first:].mean(axis=1)
    final = run.counts[:, -1]
    uniform = np.random.default_rng(np.random.SeedSequence(int(run.provenance["seed"]), spawn_key=(2**32 - 1,)))
    rows: list[CheckRow] = []
    for i in independent_species(network):
        name = run.species[i]
        varies = np.array([law.covariance()[i, i] > 0 for law in laws])
        if not varies.any():
            if np.any(averages[:, i] != means[:, i]):
                rows.append(CheckRow(f"{name}: fixed", f"{name} keeps its count", math.inf, 0.0, len(laws)))
            continue
        rows.append(_average_test(name, (averages - means)[varies, i]))
        transform = _transform(final[varies, i], [law for law, v in zip(laws, varies, strict=True) if v], i, uniform)
        rows.append(_uniformity_test(name, transform))
    if not rows:
        raise CannotAnswerError("no count varies in this system, so there is nothing to test")
    corrected = holm(np.array([row.p for row in rows]))
    tests = tuple(row._replace(p=float(p)) for row, p in zip(rows, corrected, strict=True))
    worst = min(tests, key=lambda row: row.p)
    failed = worst.p < FALSE_ALARM_RATE
    reason = (
        f"{worst.name} departs from the exact law (p = {worst.p:.2g}): these counts do not follow from these energies"
        if failed
        else f"no departure from the exact law in {len(tests)} tests over {len(laws)} compartments "
        f"(smallest corrected p = {worst.p:.2g})"
    )
    window = (float(run.time_s[first]), float(run.time_s[-1]))
    ratios = _ratios(system, network, averages, means, run)
    return CheckResult("inconsistent" if failed else "consistent", reason, tests, ratios, window)


def _average_test(name: str, difference: Array) -> CheckRow:
    """Student's t over replicates of time average minus exact mean."""
    label, hypothesis = (
        f"{name}: time average",
        f"its mean over compartments is the exact one, {name} by {name}'s class",
    )
    hypothesis = "the mean over compartments of (time average − exact mean of the compartment's class) is zero"
    if np.ptp(difference) == 0:
        exact = bool(difference[0] == 0)
        return CheckRow(label, hypothesis, 0.0 if exact else math.inf, 1.0 if exact else 0.0, len(difference))
    t, p = student_t(difference)
    return CheckRow(label, hypothesis, t, p, len(difference))


def _uniformity_test(name: str, transform: Array) -> CheckRow:
    """Kolmogorov-Smirnov of the transformed end states against uniformity."""
    distance, p = uniformity(transform)
    hypothesis = "the end state of each compartment follows the exact law of its class"
    return CheckRow(f"{name}: distribution", hypothesis, distance, p, len(transform))


def _transform(values: NDArray[np.int64], laws: list[CountLaw], i: int, generator: np.random.Generator) -> Array:
    below, at = np.empty(len(values)), np.empty(len(values))
    for row, (value, law) in enumerate(zip(values, laws, strict=True)):
        n, p = law.marginal(i)
        below[row] = p[n < value].sum()
        at[row] = p[n == value].sum()
    return randomised_pit(below, at, generator.random(len(values)))


def _ratios(system: System, network: Network, averages: Array, means: Array, run: Run) -> tuple[RatioRow, ...]:
    """Per reaction the ratio of mean concentrations a user would measure, and the exact value of that quantity."""
    column = {name: i for i, name in enumerate(network.species)}
    held = system.held_concentrations()
    molar = system.compartment.volume_L / (system.compartment.omega * run.volume_L[:, None])
    rows = []
    for reaction in system.reactions:
        if reaction.K is None:
            continue
        change = reaction.equation.change

        def ratio(mean_M: Array, change: dict[str, int] = change) -> float:
            value = 1.0
            for name, number in change.items():
                c = held[name] if name in held else float(mean_M[column[name]])
                if c == 0 and number < 0:
                    return math.nan
                value *= c**number
            return value

        measured, error = jackknife(ratio, averages * molar)
        expected = ratio((means * molar).mean(axis=0))
        rows.append(RatioRow(reaction.name, measured, error, expected, reaction.K, reaction.equation.order_change))
    return tuple(rows)
