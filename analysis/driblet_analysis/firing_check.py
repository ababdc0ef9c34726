"""Firings against integrated propensities: it holds driven or not, stationary or not, and it measures each energy.

With X the time integral of a channel's propensity under the stated energies, its firings F less X is a martingale of
variance X, so z = (F - X)/sqrt(X) is standard normal whatever the system does (Gillespie, J. Chem. Phys. 113:297, 2000, for
the Poisson counts of channels; Andersen, Borgan, Gill & Keiding, Statistical Models Based on Counting Processes, 1993). For
a reversible pair -RT ln[(F/X+)/(B/X-)] is by how much the energy in the counts differs from the stated one, with standard
error RT sqrt(1/F + 1/B). (F against B alone could not fail: their difference is bounded by the molecules.)
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

from driblet.drive import runnable
from driblet.energetics.cycles import cycles
from driblet.network import BACKWARD, FORWARD, Network
from driblet.statistics import normal_p
from driblet.system import System
from driblet.system.build import describe_cycle, stoichiometric_matrix
from driblet_analysis.check_rows import CheckRow, EnergyRow

Array = NDArray[np.float64]
POWER = 0.9  # with which the detectable error would have been exposed
FEWEST_FIRINGS = 10  # of each direction, for a standard error that means something


@dataclass(frozen=True)
class Firings:
    """Firings and integrated propensities of each channel, summed over replicates.

    Attributes: fired : shape=(channels,); expected : shape=(channels,), under the energies tested; replicates; excess :
    shape=(channels,), by how much the variance of firings less expectation is more than the expectation; 1 for events.
    """

    fired: Array
    expected: Array
    replicates: int
    excess: Array


def sum_firings(fired: NDArray[np.int64], monomial_time: Array, rates: Array, leaps: bool = False) -> Firings:
    """Sum over replicates. fired, rates, monomial_time : shape=(replicates, channels); rates as Network.rates.

    leaps : the firings are those of leaps, whose variance is not their expectation (turnovers of an enzyme come in bursts,
    integrals are those of end states): it is taken from the spread between replicates where that is more.
    """
    expected = rates[:, : fired.shape[1]] * monomial_time
    mean = expected.mean(axis=0)
    excess = np.ones(fired.shape[1])
    if leaps and len(fired) > 1:
        spread = (fired - expected).var(axis=0, ddof=1)
        excess = np.maximum(1.0, spread / np.where(mean > 0, mean, np.inf))
    return Firings(fired.sum(axis=0).astype(float), expected.sum(axis=0), len(fired), excess)


def kinetic_tests(system: System, network: Network, firings: Firings) -> list[CheckRow]:
    """For each reaction: do forward and backward firings together number what the propensities say?"""
    rows = []
    for r, reaction in enumerate(system.reactions):
        channels = [j for j, c in enumerate(network.channels) if c.reaction == r]
        fired, expected = firings.fired[channels].sum(), firings.expected[channels].sum()
        if expected <= 0:
            if fired > 0:
                rows.append(CheckRow(f"{reaction.name}: firings", "it cannot fire", math.inf, 0.0, firings.replicates))
            continue
        z = (fired - expected) / math.sqrt(float((firings.expected[channels] * firings.excess[channels]).sum()))
        p = float(normal_p(np.array([z]))[0]) if expected >= FEWEST_FIRINGS else _poisson_p(fired, expected)
        hypothesis = "firings number the time integral of the propensities"
        rows.append(CheckRow(f"{reaction.name}: firings", hypothesis, z, p, firings.replicates))
    return rows


def _poisson_p(fired: float, expected: float) -> float:
    """Two-sided p of a Poisson count, for expectations too small for the normal law."""
    from scipy.special import pdtr, pdtrc

    return float(min(1.0, 2.0 * min(pdtr(fired, expected), pdtrc(fired - 1, expected) if fired > 0 else 1.0)))


@dataclass(frozen=True)
class Energies:
    """Energies measured by firings, relative to the stated ones.

    Attributes: rows : one per reversible reaction; tests : of each energy and of each cycle's closure.
    """

    rows: tuple[EnergyRow, ...]
    tests: tuple[CheckRow, ...]


def measured_energies(system: System, network: Network, firings: Firings) -> Energies:
    """The error of each dG0' that the firings show, singly and under closed cycles."""
    RT = system.conditions.RT_kJ_per_mol
    forward, backward = network.channel_index(FORWARD), network.channel_index(BACKWARD)
    index = [r for r, reaction in enumerate(system.reactions) if reaction.dG0_kJ_per_mol is not None]
    if not index:
        return Energies((), ())
    shift, error = np.full(len(index), np.nan), np.full(len(index), np.inf)
    for k, r in enumerate(index):
        F, B = firings.fired[forward[r]], firings.fired[backward[r]]
        if min(F, B) < FEWEST_FIRINGS:
            continue
        X_plus, X_minus = firings.expected[forward[r]], firings.expected[backward[r]]
        shift[k] = -RT * math.log((F / X_plus) / (B / X_minus))
        error[k] = RT * math.sqrt(firings.excess[forward[r]] / F + firings.excess[backward[r]] / B)
    reactions = [system.reactions[r] for r in index]
    stoichiometry = stoichiometric_matrix([s.name for s in system.species], reactions)
    closed, closed_error = closed_estimates(cycles(stoichiometry).astype(float), shift, error)
    tests = []
    for k, reaction in enumerate(reactions):
        if np.isfinite(closed_error[k]):
            z = closed[k] / closed_error[k]
            hypothesis = "the energy that the firings show is the stated one"
            tests.append(
                CheckRow(
                    f"{reaction.name}: energy", hypothesis, z, float(normal_p(np.array([z]))[0]), firings.replicates
                )
            )
    tests += _closure_tests(cycles(stoichiometry), [r.name for r in reactions], shift, error, firings.replicates)
    rows = tuple(
        EnergyRow(
            reaction.name,
            float(reaction.dG0_kJ_per_mol),  # type: ignore[arg-type]
            None if np.isnan(shift[k]) else float(reaction.dG0_kJ_per_mol) + float(shift[k]),  # type: ignore[arg-type]
            None if np.isnan(shift[k]) else float(error[k]),
            None if not np.isfinite(closed_error[k]) else float(closed_error[k]),
            _number_error(RT, firings.fired[forward[index[k]]], firings.fired[backward[index[k]]]),
        )
        for k, reaction in enumerate(reactions)
    )
    return Energies(rows, tuple(tests))


def closed_estimates(cycle_basis: Array, shift: Array, error: Array) -> tuple[Array, Array]:
    """Errors of energies estimated under the condition that they close every cycle.

    cycle_basis : shape=(cycles, reactions); shift, error : shape=(reactions,), single estimates and standard errors, inf
    where a reaction shows nothing by itself. Returns estimates and standard errors, inf where even the others do not tell.
    """
    n = len(shift)
    information = np.where(np.isfinite(error), 1.0 / error**2, 0.0)
    if len(cycle_basis):
        _, singular, right = np.linalg.svd(cycle_basis)
        rank = int((singular > 1e-9 * singular[0]).sum())
        directions = right[rank:].T  # columns span the energy directions that keep cycles closed
    else:
        directions = np.eye(n)
    estimate, spread = np.full(n, np.nan), np.full(n, np.inf)
    if directions.shape[1] == 0:
        return estimate, spread
    matrix = directions.T @ (information[:, None] * directions)
    values, vectors = np.linalg.eigh(matrix)
    seen = values > 1e-12 * max(float(values.max()), 1e-300)
    basis = directions @ vectors  # energy change per unit of each eigendirection
    loads = directions.T @ (information * np.where(information > 0, np.nan_to_num(shift), 0.0))
    along = np.where(seen, (vectors.T @ loads) / np.where(seen, values, 1.0), 0.0)
    for r in range(n):
        if np.any(np.abs(basis[r, ~seen]) > 1e-9):
            continue  # part of this energy lies in a direction that the run is blind to
        variance = float(np.sum(basis[r, seen] ** 2 / values[seen]))
        if variance > 0:
            estimate[r], spread[r] = float(basis[r] @ along), math.sqrt(variance)
    return estimate, spread


def _closure_tests(
    basis: NDArray[np.int64], names: list[str], shift: Array, error: Array, replicates: int
) -> list[CheckRow]:
    """Do the energies that firings show close each cycle? An engine with inconsistent reverse rates fails here."""
    rows = []
    for vector in basis:
        used = vector != 0
        if not np.isfinite(error[used]).all():
            continue
        z = float(vector[used] @ shift[used]) / math.sqrt(float(np.sum((vector[used] * error[used]) ** 2)))
        name = f"cycle {describe_cycle(vector, names)}: closure"
        hypothesis = "the energies that the firings show sum to zero along the cycle"
        rows.append(CheckRow(name, hypothesis, z, float(normal_p(np.array([z]))[0]), replicates))
    return rows


def _number_error(RT: float, F: float, B: float) -> float | None:
    """An error e of the energy makes the backward firings wrong by B e/RT, against a spread sqrt(F + B) of all firings."""
    return RT * math.sqrt(F + B) / B if B >= FEWEST_FIRINGS else None


def detectable_error(standard_errors: Sequence[float], tests: int, false_alarm_rate: float) -> float:
    """Smallest error of an energy that one of `tests` Holm-corrected tests would have exposed with 90 % power, kJ/mol.

    standard_errors : of the independent tests that see this energy: its measurement, and the number of its firings.
    With one test this is (z_(1-alpha/2m) + z_0.9) times the standard error.
    """
    threshold = float(ndtri(1.0 - false_alarm_rate / (2 * tests)))

    def missed(error: float) -> float:
        away = error / np.asarray(standard_errors)
        return float(np.prod(ndtr(threshold - away) - ndtr(-threshold - away)))

    low, high = 0.0, (threshold + float(ndtri(POWER))) * min(standard_errors)
    while high - low > 1e-6 * high:  # bisection: the root finders of scipy take longer to import than the check takes
        middle = 0.5 * (low + high)
        low, high = (middle, high) if missed(middle) > 1.0 - POWER else (low, middle)
    return high


def never_fired(system: System, network: Network, firings: Firings) -> list[str]:
    """Names of reactions that could run and never did, in either direction."""
    can_run = runnable(system)
    return [
        reaction.name
        for r, reaction in enumerate(system.reactions)
        if can_run[r] and not sum(firings.fired[j] for j, c in enumerate(network.channels) if c.reaction == r)
    ]
