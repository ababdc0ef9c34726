"""How far an approximate run may be off, in standard deviations between compartments, stated with every such run.

In a large compartment noise vanishes and what is left of an approximation is its error in the mean. Three courses of the mean
load are held against each other: the rate equations of the steps (every molecule free or bound), those of the network as it is
simulated (enzymes lumped), and leaps in a compartment many times as large. Their differences are divided by the spread of a
few compartments simulated as the run is. Errors that come from noise itself are not in it: `driblet compare` sees those.
"""

from __future__ import annotations

import itertools
import json
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.engine_choice import EngineChoice, leap_engine, leap_rates
from driblet.engines.contract import RUNNING, new_samples, new_state
from driblet.loading import additions_of, prepare
from driblet.lumping import lumped_enzymes
from driblet.network import Network
from driblet.readouts import copies_in
from driblet.segments import begin, keep, segments
from driblet.system import RunSettings, System
from driblet.system.expressions import Reference
from driblet.volume import at_volume

TIMES = 8
COMPARTMENTS = 16  # for the spread between them
MOST_COPIES = 1e13  # in the large compartment
MOST_SPECIES = 300  # beyond which the rate equations take too long
_BUDGET, _CALL = 40_000_000, 1 << 20
Array = NDArray[np.float64]


@dataclass(frozen=True)
class ErrorEstimate:
    """The largest errors. Each is (in standard deviations, as a share of the mean, quantity, time in s), or None where the
    approximation is not made or its error could not be had; why : the reason for the latter.
    """

    lumping: tuple[float, float, str, float] | None
    leaps: tuple[float, float, str, float] | None
    why: str = ""

    def provenance(self) -> dict[str, str]:
        """What a run file keeps."""
        return {"error_estimate": json.dumps({"lumping": self.lumping, "leaps": self.leaps, "why": self.why})}

    @classmethod
    def read(cls, provenance: dict[str, Any]) -> ErrorEstimate | None:
        """The estimate of a run file, None for an exact run."""
        if "error_estimate" not in provenance:
            return None
        kept = json.loads(str(provenance["error_estimate"]))
        lumping, leaps = (tuple(kept[k]) if kept[k] else None for k in ("lumping", "leaps"))
        return cls(lumping, leaps, kept["why"])


def error_estimate(
    stated: System, system: System, network: Network, settings: RunSettings, choice: EngineChoice, key: int = 0
) -> ErrorEstimate | None:
    """The estimate for a run; None for an exact one. stated : the system with its enzymes step by step, as the file has it;
    system, network : as simulated."""
    lumped = bool(lumped_enzymes(system))
    if not lumped and not choice.leaps:
        return None
    if len(stated.species) > MOST_SPECIES:
        return ErrorEstimate(None, None, f"more than {MOST_SPECIES} species: not estimated")
    names = [s.name for s in stated.free_species if s.enzyme is None]
    time_s = np.linspace(0.0, settings.duration_s, TIMES + 1)
    try:
        course = _totals(system, names, _course(system, network, time_s))
        spread, reached = _spread(system, network, settings, choice, time_s, names, key)
        lumping = leaps = None
        if lumped:
            steps = _totals(stated, names, _course(stated, Network.of(stated), time_s))
            lumping = _largest(names, time_s[:reached], course[:reached] - steps[:reached], spread, steps)
        if choice.leaps:
            large = _totals(system, names, _large(system, choice, time_s))
            leaps = _largest(names, time_s[:reached], large[:reached] - course[:reached], spread, course)
    except ArithmeticError as error:
        return ErrorEstimate(None, None, str(error))
    return ErrorEstimate(lumping, leaps)


def _totals(system: System, names: list[str], counts: Array) -> Array:
    """Free and bound molecules of each species, shape=(..., names); counts : (..., free species)."""
    column = {s.name: i for i, s in enumerate(system.free_species)}
    return np.stack(
        [
            sum(number * counts[..., column[part]] for part, number in copies_in(system, Reference("total", name)))
            for name in names
        ],
        axis=-1,
    )


def _course(system: System, network: Network, time_s: Array) -> Array:
    """Copies of the mean load by the rate equations, shape=(times, species). Raises ArithmeticError."""
    from scipy.integrate import solve_ivp

    omega = system.compartment.omega
    size = 1e3  # of a larger compartment, in which one molecule more or less does not matter
    rates = network.rates(np.array([omega * size]))[0]
    change = np.zeros((len(network.channels), len(network.species)))
    for j, channel in enumerate(network.channels):
        for i, amount in channel.change:
            change[j, i] = amount
    copies = np.array([s.mean_copies(omega) for s in system.free_species]) * size
    scale = max(1.0, float(copies.max(initial=0.0)))

    def slope(_: float, y: Array) -> Array:
        return np.asarray(np.maximum(network.propensities(np.maximum(y, 0.0), rates), 0.0) @ change)

    out = np.zeros((len(time_s), len(copies)))
    stops = sorted({a.at_s for a in system.additions if a.at_s < time_s[-1]} | {0.0, float(time_s[-1])})
    for begins, ends in itertools.pairwise(stops):
        for addition in system.additions:
            if addition.at_s == begins and begins > 0.0:
                copies[network.species.index(addition.species)] += addition.mean_copies(omega) * size
        inside = (time_s >= begins) & (time_s <= ends)
        at = np.unique(np.concatenate([time_s[inside], [ends]]))
        found = solve_ivp(
            slope, (begins, ends), copies, method="LSODA", t_eval=at, rtol=1e-8, atol=1e-9 * scale, max_step=np.inf
        )
        if not found.success:
            raise ArithmeticError(f"the rate equations could not be integrated: {found.message}")
        out[inside] = found.y.T[np.searchsorted(at, time_s[inside])] / size
        copies = np.maximum(found.y[:, -1], 0.0)
    return out


def _large(system: System, choice: EngineChoice, time_s: Array) -> Array:
    """Leaps in a compartment so large that noise is small, scaled back, shape=(times, species)."""
    omega = system.compartment.omega
    most = max(s.mean_copies(omega) for s in system.free_species)
    size = min(1e6, MOST_COPIES / max(1.0, most))
    large = at_volume(system, system.compartment.volume_L * size)
    counts, reached = _leap(large, Network.of(large), choice, time_s, [0], 0, 0)
    if reached < len(time_s):
        raise ArithmeticError("leaps in a large compartment take too long: their error is not estimated")
    return np.asarray(counts[0] / size)


def _spread(
    system: System,
    network: Network,
    settings: RunSettings,
    choice: EngineChoice,
    time_s: Array,
    names: list[str],
    key: int,
) -> tuple[Array, int]:
    """Standard deviations between some compartments, shape=(times reached, names), and how many times were reached."""
    counts, reached = _leap(system, network, choice, time_s, list(range(COMPARTMENTS)), settings.seed, key)
    if reached < 2:
        raise ArithmeticError("a few compartments take too long beforehand: the error is not estimated")
    return _totals(system, names, counts)[:, :reached].std(axis=0, ddof=1), reached


def _leap(
    system: System, network: Network, choice: EngineChoice, time_s: Array, replicates: list[int], seed: int, key: int
) -> tuple[Array, int]:
    """Counts of some replicates, shape=(replicates, times, species), and how many times all of them reached."""
    engine, table = leap_engine(system, network, choice.tolerance, choice.stiffness)
    start = prepare(system, seed, replicates, key)
    state = new_state(start.counts, start.stream, len(network.channels))
    samples = new_samples(time_s, len(replicates), len(network.species), len(network.channels))
    added = additions_of(system, seed, replicates, start.omega, key)
    columns = [network.species.index(a.species) for a in system.additions]
    rates = leap_rates(network, table, start.omega)
    calls = _BUDGET // _CALL
    for segment in segments(system, time_s):
        part = begin(segment, state, samples, added, columns)
        while calls > 0 and (state.reason == RUNNING).any():
            engine.advance(rates, state, part, _CALL)
            calls -= 1
        if (state.reason == RUNNING).any():
            if part is samples:  # replicates run one after the other: those that have not begun spoil the rest
                done = state.reason != RUNNING
                if done.sum() > 2:
                    return samples.counts[done].astype(float), len(time_s)
            return samples.counts.astype(float), 0
        keep(segment, part, samples)
    return samples.counts.astype(float), len(time_s)


def _largest(
    names: list[str], time_s: Array, away: Array, spread: Array, course: Array
) -> tuple[float, float, str, float] | None:
    """Of errors, shape=(times, names), the largest in standard deviations; where nothing varies, one molecule is one."""
    if len(time_s) < 2 or not names:
        return None
    size = np.abs(away[1:]) / np.maximum(spread[1:], 1.0)
    k, i = np.unravel_index(int(np.argmax(size)), size.shape)
    mean = abs(float(course[k + 1, i]))
    share = abs(float(away[k + 1, i])) / mean if mean else 0.0
    return float(size[k, i]), share, names[int(i)], float(time_s[k + 1])
