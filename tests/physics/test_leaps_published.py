"""Published problems of tau-leaping (leap_problems.py): leaps against the exact engine, all tests together at 5 % after Holm.

Twins leap explicitly, by the rates at the start of each step: steps that are too long show in the first problem, and those of
three relaxation times blow up in the second.
"""

from __future__ import annotations

import numpy as np
import pytest

import driblet
from driblet.network import Network
from driblet_analysis.compare import FALSE_ALARM_RATE, Difference, differences, quantities
from tests.physics.leap_problems import decaying_dimerising, stiff_dimerising, stiff_isomerisations
from tests.unit.leap_cases import leaps_that_need_not_pay

PROBLEMS = {
    "decaying-dimerising": (decaying_dimerising, 10.0),
    "stiff": (stiff_dimerising, 0.2),
    "isomerisations": (lambda: stiff_isomerisations(1e4, 2000), 0.05),
}


def simulated(
    system: driblet.System, duration: float, replicates: int, engine: str, key: int, **how: float
) -> driblet.Run:
    with leaps_that_need_not_pay():
        run = driblet.run(
            system, replicates=replicates, duration=duration, sample_every=duration / 10, engine=engine, key=key, seed=3,
            record="trajectories", statistics=False, leap_tolerance=how.get("tolerance"),
        )  # fmt: skip
    assert run.provenance.get("engine_taken", "exact") == engine
    return run


def smallest_p(rows: tuple[Difference, ...]) -> float:
    return min(row.smallest_p for row in rows)


def against_exact(name: str, replicates: int, tolerance: float) -> tuple[float, driblet.Run]:
    make, duration = PROBLEMS[name]
    exact = simulated(make(), duration, replicates, "exact", 0)
    leaped = simulated(make(), duration, replicates, "leap", 1, tolerance=tolerance)
    assert abs(leaped.events.mean() / exact.events.mean() - 1) < 0.01
    return smallest_p(differences(quantities(exact), quantities(leaped), exact.time_s)), leaped


@pytest.mark.parametrize("name", PROBLEMS)
def test_means_variances_and_distributions(name: str) -> None:
    """300 compartments at ten times: 90 tests."""
    p, _ = against_exact(name, 300, 0.03)
    assert p > FALSE_ALARM_RATE


@pytest.mark.long
@pytest.mark.parametrize("tolerance", [0.01, 0.03, 0.1])
@pytest.mark.parametrize("name", PROBLEMS)
def test_three_thousand_compartments(name: str, tolerance: float) -> None:
    """At a tolerance of .1 too nothing showed: what is bounded is the change of a rate, and its middle is what is taken."""
    p, _ = against_exact(name, 3000, tolerance)
    assert p > FALSE_ALARM_RATE


def explicit(system: driblet.System, duration: float, steps: int, replicates: int) -> np.ndarray:
    """Counts at ten times by equal explicit steps, clipped at zero; shape=(replicates, 11, species)."""
    network = Network.of(system)
    rates = network.rates(np.array([1.0]))[0]
    change = np.zeros((len(network.channels), len(network.species)))
    for j, channel in enumerate(network.channels):
        for i, amount in channel.change:
            change[j, i] = amount
    rng = np.random.default_rng(2)
    start = [s.copies if s.copies is not None else s.mean_copies(1.0) for s in system.free_species]
    n = np.tile(np.array(start, dtype=float), (replicates, 1))
    out = [n]
    for step in range(1, steps + 1):
        w = np.clip(network.propensities(n, rates), 0.0, 1e12)
        n = np.clip(n + rng.poisson(w * duration / steps) @ change, 0.0, None)
        if step % (steps // 10) == 0:
            out.append(n)
    return np.stack(out, axis=1)


def twin(name: str, steps: int) -> float:
    make, duration = PROBLEMS[name]
    exact = simulated(make(), duration, 300, "exact", 0)
    wrong = explicit(make(), duration, steps, 300)
    own = {f"total({s})": wrong[:, :, i] for i, s in enumerate(exact.species)}
    return smallest_p(differences(quantities(exact), own, exact.time_s))


def test_twin_explicit_steps_that_are_long() -> None:
    """As many steps as the engine takes at a tolerance of .03, but of equal length and explicit."""
    assert twin("decaying-dimerising", 500) < 1e-6


def test_twin_explicit_steps_beyond_their_bound() -> None:
    """lambda is some 8,000 + 1,000 /s: 600 steps of 0.2 s are three relaxation times each."""
    assert twin("stiff", 600) < 1e-6


def test_explicit_steps_short_enough_pass() -> None:
    assert twin("stiff", 60_000) > FALSE_ALARM_RATE
