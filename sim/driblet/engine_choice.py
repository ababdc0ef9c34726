"""Which engine simulates a run, and why: what was asked for, what a pilot compartment shows, what leaps cannot do."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from driblet.errors import one_problem
from driblet.lumping import is_lumped
from driblet.network import Network
from driblet.run_settings import sample_times
from driblet.system import RunSettings, System

if TYPE_CHECKING:
    from driblet.engines.leap import LeapEngine
    from driblet.turnover_arrays import TurnoverTable

EXACT, LEAP, AUTO = "exact", "leap", "auto"
LONGEST_LEAP = 5.0  # relaxation times; variances at equilibrium then hold within 3 %
LONGEST_LEAP_IN_TIME = 1.0  # where the course of fluctuations matters, as for lifetimes
WORTH = 2.0  # times less work from which "auto" leaps
_PILOT_BUDGET = 8_000_000
_PILOT_CALL = 1 << 20


@dataclass(frozen=True)
class EngineChoice:
    """The engine of a run.

    Attributes: asked : "exact", "leap" or "auto"; taken : "exact" or "leap"; why : one sentence, "" for an exact run that was
    asked for; tolerance, stiffness : of leaps; facts : what the pilot compartment showed, for JSON.
    """

    asked: str
    taken: str
    why: str
    tolerance: float
    stiffness: float
    facts: dict[str, float]

    @property
    def leaps(self) -> bool:
        """Whether the run leaps."""
        return self.taken == LEAP

    def provenance(self) -> dict[str, Any]:
        """What a run file keeps of it."""
        if self.asked == EXACT:
            return {}
        kept: dict[str, Any] = {"engine_taken": self.taken, "engine_why": self.why}
        if self.leaps:
            kept |= {"leap_tolerance": self.tolerance, "leap_stiffness": self.stiffness}
        return kept | {"engine_pilot": json.dumps(self.facts, sort_keys=True)}


def stiffness_for(system: System) -> float:
    """The longest leap, in relaxation times: shorter where requirements ask for the course of fluctuations."""
    return LONGEST_LEAP_IN_TIME if system.requirements else LONGEST_LEAP


def leap_engine(
    system: System, network: Network, tolerance: float, stiffness: float
) -> tuple[LeapEngine, TurnoverTable]:
    """The engine laid out for a network, and the table whose coefficients complete its rates."""
    from driblet.engines.leap import LeapEngine
    from driblet.engines.leap_arrays import pairs_of
    from driblet.turnover_arrays import TurnoverTable

    reaction = np.array([c.reaction for c in network.channels], dtype=np.int64)
    direction = np.array([c.direction for c in network.channels], dtype=np.int64)
    pairs = pairs_of(network.arrays, reaction, direction, len(network.species))
    table = TurnoverTable.of(system, network)
    return LeapEngine(network.arrays, pairs, len(network.species), table.arrays, tolerance, stiffness), table


def leap_rates(network: Network, table: TurnoverTable, omega: NDArray[np.float64]) -> NDArray[np.float64]:
    """Rates of replicates with the coefficients of turnover at the end of each row."""
    return np.ascontiguousarray(np.hstack([network.rates(omega), table.coefficients(omega)]))


def choose_engine(
    system: System, network: Network, settings: RunSettings, key: int = 0, anyway: bool = False
) -> EngineChoice:
    """The engine for `settings`. `system` is as it is simulated, enzymes lumped or not; anyway : "leap" leaps whatever it costs.

    Raises InputError where leaps are asked for and cannot do what else is asked.
    """
    asked, tolerance, stiffness = settings.engine, settings.leap_tolerance, stiffness_for(system)
    if asked == EXACT:
        return EngineChoice(asked, EXACT, "", tolerance, stiffness, {})
    if settings.record == "events":
        if asked == LEAP:
            text = 'a leap has no single events to record: take engine = "exact", or record = "trajectories"'
            raise one_problem(system.source or "run", "run.record", text)
        return EngineChoice(asked, EXACT, "exact: single events are recorded", tolerance, stiffness, {})
    if not network.channels:
        return EngineChoice(asked, EXACT, "exact: nothing can react", tolerance, stiffness, {})
    facts = pilot(system, network, settings, tolerance, stiffness, key)
    why, pays = _judged(facts, asked, system)
    if anyway and asked == LEAP and not pays:
        why, pays = f"leaps, asked for whatever they cost ({why})", True
    return EngineChoice(asked, LEAP if pays else EXACT, why, tolerance, stiffness, facts)


def pilot(
    system: System, network: Network, settings: RunSettings, tolerance: float, stiffness: float, key: int
) -> dict[str, float]:
    """Leap through the first compartment once, or as far as a second of work goes, and say what that took.

    simulated_s; firings, leaps, exact_events, rejected; stiffest : longest leap in relaxation times; pairs.
    """
    from driblet.engines.contract import RUNNING, new_samples, new_state
    from driblet.engines.leap_arrays import CRITICAL_EVENTS, EVENTS, LEAPS, REJECTED, STIFFEST
    from driblet.loading import additions_of, prepare
    from driblet.segments import begin, segments

    engine, table = leap_engine(system, network, tolerance, stiffness)
    start = prepare(system, settings.seed, [0], key)
    state = new_state(start.counts, start.stream, len(network.channels))
    time_s = sample_times(settings)
    samples = new_samples(time_s, 1, len(network.species), len(network.channels))
    added = additions_of(system, settings.seed, [0], start.omega, key)
    columns = [network.species.index(a.species) for a in system.additions]
    rates, work = leap_rates(network, table, start.omega), engine.new_work(1)
    calls = _PILOT_BUDGET // _PILOT_CALL
    for segment in segments(system, time_s):
        part = begin(segment, state, samples, added, columns)
        while calls > 0 and (state.reason == RUNNING).any():
            engine.advance(rates, state, part, _PILOT_CALL, None, work)
            calls -= 1
        if (state.reason == RUNNING).any():
            break  # the next segment would set its clock on
    return {
        "simulated_s": float(state.clock[0]),
        "firings": float(state.firings.sum()),
        "leaps": float(work[0, LEAPS]),
        "exact_events": float(work[0, EVENTS] + work[0, CRITICAL_EVENTS]),
        "rejected": float(work[0, REJECTED]),
        "stiffest": float(work[0, STIFFEST]),
        "pairs": float(len(engine.pairs.forward)),
        "channels": float(len(network.channels)),
        "channels_with_factors": float(len(network.factored)),
    }


def core_seconds(facts: dict[str, float]) -> tuple[float, float]:
    """About what the pilot's stretch takes a core by exact events in lanes, and by leaps, s. Measured once
    (tests/benchmarks/leaps.py); only the ratio decides anything."""
    channels, factored = facts["channels"], facts["channels_with_factors"]
    event_in_lanes = min(4.0 + 0.25 * channels + 5.5 * factored, 150.0)
    event_alone = 220.0 + 1.3 * channels + 30.0 * factored
    one_leap = 900.0 + 110.0 * channels + 130.0 * factored
    leaping = (facts["leaps"] + facts["rejected"]) * one_leap + facts["exact_events"] * event_alone
    return 1e-9 * facts["firings"] * event_in_lanes, 1e-9 * leaping


def _judged(facts: dict[str, float], asked: str, system: System) -> tuple[str, bool]:
    """One sentence, and whether to leap."""
    exact, leaping = core_seconds(facts)
    span = f"{facts['simulated_s']:,.4g} s of one compartment"
    if not facts["firings"]:
        return f"exact: nothing fired in {span}", False
    if not facts["leaps"]:
        return f"exact: in {span} no leap would have held 10 of its {facts['firings']:,.0f} events", False
    times = exact / leaping
    took = (
        f"{span} took {facts['leaps']:,.0f} leaps and {facts['exact_events']:,.0f} single events for "
        f"{facts['firings']:,.0f} firings"
    )
    if times >= (1.0 if asked == LEAP else WORTH):
        return f"leaps: {took}", True
    if times >= 1.0:
        return f"exact: {took}, which saves too little", False
    return f"exact: {took}, which is {1.0 / times:,.2g} times the work of exact events{_remedy(system)}", False


def _remedy(system: System) -> str:
    """What would make leaps longer: binding of ligands, the fastest that happens, is gone from lumped enzymes."""
    stepwise = [e.name for e in system.enzymes if e.steps and not is_lumped(system, e.name)]
    return f"; lumped, {', '.join(stepwise)} would let leaps be longer" if stepwise else ""
