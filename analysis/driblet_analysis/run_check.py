"""Is a run consistent with these energies, and how small an error would it have shown?

Firings are held against integrated propensities, driven or not; where the system has an equilibrium, occupancies are held
against its exact law. p values carry Holm's correction over all tests together. See firing_check and occupancy_check.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from driblet.drive import emergent_affinities, is_driven
from driblet.engines.contract import STOP_CONDITION
from driblet.errors import CannotAnswerError, one_problem
from driblet.lumping import LUMPED, treated
from driblet.network import Network
from driblet.results import Run
from driblet.statistics import holm, jackknife
from driblet.system import System
from driblet.system.build import describe_cycle
from driblet_analysis.check_rows import CheckResult, CheckRow, EnergyRow, RatioRow
from driblet_analysis.firing_check import (
    detectable_error,
    kinetic_tests,
    measured_energies,
    never_fired,
    sum_firings,
)
from driblet_analysis.occupancy_check import (
    FEWEST_REPLICATES,
    laws_of,
    occupancy_tests,
    refuse_drift,
    refuse_without_equilibrium,
    relaxed_window,
    window_means,
)

FALSE_ALARM_RATE = 0.05  # chance that a correct run is called inconsistent
_CHECK_KEY = 2**32 - 1  # spawn key of the check's own random numbers
Array = NDArray[np.float64]


def check_run(run: Run, against: System | None = None) -> CheckResult:
    """Test a run against the energies of its own system, or of `against`: the same species, reactions and volumes.

    Never raises for data that cannot answer; the verdict says so. Raises InputError where `against` is another system.
    """
    system = run.system if against is None else comparable(run, against)
    sums = run.sums
    if sums is None:
        return CheckResult("cannot answer", "the run holds no sums of firings and occupancies; run the system again")
    if (run.end_reason == STOP_CONDITION).any():
        return CheckResult(
            "cannot answer",
            "compartments ended as soon as their requirements were decided, which picks what is averaged; run again "
            "without --stop-when-decided",
        )
    network = Network.of(system)
    omega = run.volume_L * system.compartment.omega / system.compartment.volume_L
    leaps = run.engine == "leap"
    monomial_time = sums.monomial_time.sum(axis=1)
    firings = sum_firings(sums.window_firings[:, -1], monomial_time, network.rates(omega), leaps)
    kinetic = kinetic_tests(system, network, firings)
    energies = measured_energies(system, network, firings)
    tests = [*kinetic, *energies.tests]
    notes = [f"{name} never fired: nothing can be said of it" for name in never_fired(system, network, firings)]
    if leaps:
        notes.append(
            "the run leaped: gross firings and integrals are estimates, their variance that between compartments"
        )
    ratios: tuple[RatioRow, ...] = ()
    window = None
    law_missing = _drive(system)
    try:
        if law_missing is None:
            refuse_without_equilibrium(system)
            _refuse_few(run)
            seed = np.random.SeedSequence(int(run.provenance["seed"]), spawn_key=(_CHECK_KEY,))
            laws = laws_of(run, system, int(seed.generate_state(1)[0]) % 2**31)
            first = relaxed_window(run, system, laws)
            refuse_drift(run, network, first)
            averages = window_means(sums.count_time, sums.edge_s, first)
            tests += occupancy_tests(run, network, laws, averages, np.random.default_rng(seed))
            ratios = _ratios(system, network, averages, laws.mean, run)
            window = (float(sums.edge_s[first]), float(sums.edge_s[-1]))
    except CannotAnswerError as error:
        done = _corrected(tests)
        rows = _with_detectable(energies.rows, len(done))
        if done and min(row.p for row in done) < FALSE_ALARM_RATE:
            return CheckResult("inconsistent", _reason(done), done, (), rows)
        return CheckResult("cannot answer", str(error), done, (), rows, tuple(notes))
    corrected = _corrected(tests)
    if not corrected:
        return CheckResult("cannot answer", law_missing or "nothing happened in this run: there is nothing to test")
    verdict = "inconsistent" if min(row.p for row in corrected) < FALSE_ALARM_RATE else "consistent"
    reason = _reason(corrected)
    if law_missing is not None:
        reason = f"{law_missing}; of its firings: {reason}"
    rows = _with_detectable(energies.rows, len(corrected))
    return CheckResult(verdict, reason, corrected, ratios, rows, tuple(notes), window)


def comparable(run: Run, against: System) -> System:
    """`against` if it differs from the run's system in energies and rate constants alone. Raises InputError."""
    own = run.system
    lumped = {name: how for name, how in own.treatments if how == LUMPED}
    if lumped and {e.name for e in against.enzymes} >= lumped.keys():
        against = treated(against, lumped)
    if [s.name for s in own.species] != [s.name for s in against.species] or [s.held for s in own.species] != [
        s.held for s in against.species
    ]:
        raise one_problem(against.source, "species", "differ from those of the run; --against takes the same system")
    if [str(r.equation) for r in own.reactions] != [str(r.equation) for r in against.reactions]:
        raise one_problem(against.source, "reactions", "differ from those of the run; --against takes the same system")
    if not math.isclose(own.compartment.volume_L, against.compartment.volume_L, rel_tol=1e-9):
        raise one_problem(
            against.source, "compartments", "differ from that of the run; --against takes the same system"
        )
    if own.held_concentrations() != against.held_concentrations():
        raise one_problem(against.source, "species", "are held at other values than in the run")
    return against


def _drive(system: System) -> str | None:
    """The sentence that says why a driven system has no equilibrium, None for others."""
    if not is_driven(system):
        return None
    cycle = max(emergent_affinities(system), key=lambda c: c.affinity_kJ_per_mol)
    turn = describe_cycle(cycle.reactions, [r.name for r in system.reactions])
    return (
        f"driven: no equilibrium to hold it against (each turn of the cycle {turn} spends "
        f"{cycle.affinity_kJ_per_mol:.4g} kJ/mol)"
    )


def _refuse_few(run: Run) -> None:
    if len(run.replicate) < FEWEST_REPLICATES:
        raise CannotAnswerError(
            f"{len(run.replicate)} compartments are too few for a test over compartments; at least "
            f"{FEWEST_REPLICATES} are needed"
        )


def _corrected(tests: list[CheckRow]) -> tuple[CheckRow, ...]:
    if not tests:
        return ()
    p = holm(np.array([row.p for row in tests]))
    return tuple(row._replace(p=float(value)) for row, value in zip(tests, p, strict=True))


def _reason(tests: tuple[CheckRow, ...]) -> str:
    worst = min(tests, key=lambda row: row.p)
    if worst.p < FALSE_ALARM_RATE:
        return f"{worst.name} departs (corrected p = {worst.p:.2g}): these counts do not follow from these energies"
    return (
        f"no departure in {len(tests)} tests over {worst.samples} compartments (smallest corrected p = {worst.p:.2g})"
    )


def _with_detectable(rows: tuple[EnergyRow, ...], tests: int) -> tuple[EnergyRow, ...]:
    out = []
    for row in rows:
        if row.closed_error is not None:
            errors = [row.closed_error] + ([] if row.number_error is None else [row.number_error])
            row = row._replace(detectable_kJ_per_mol=detectable_error(errors, tests, FALSE_ALARM_RATE))
        out.append(row)
    return tuple(out)


def _ratios(system: System, network: Network, averages: Array, means: Array, run: Run) -> tuple[RatioRow, ...]:
    """Per reaction the ratio of mean concentrations a user would measure, and the exact value of that quantity."""
    column = {name: i for i, name in enumerate(network.species)}
    held = system.held_concentrations()
    molar = system.compartment.volume_L / (system.compartment.omega * run.volume_L[:, None])
    rows = []
    for reaction in system.stated:
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
