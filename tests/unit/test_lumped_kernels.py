"""Rational factors in the kernels: the same bits by every method, and the propensities that the network states."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

import driblet
from driblet.engines.contract import RUNNING, new_samples, new_state
from driblet.engines.exact import ExactEngine
from driblet.engines.recorders import new_log, recorders_for, settle_plan
from driblet.loading import prepare
from driblet.lumping import treated
from driblet.network import Network
from driblet.sums import SumsPlan

TEXT = """
[conditions]
temperature = "30 degC"
[compartments.v]
volume = { median = "2 aL", cv = CV }
[species]
A = "2 mM"
B = "1 mM"
P = "0.2 mM"
Q = "0 mM"
C = "0.5 mM"
I = { amount = "0.1 mM", held = true }
[reactions.r]
equation = "A + B <=> P + Q"
K = 5
[reactions.s]
equation = "2 C <=> A + B"
K = 2
[reactions.leak]
equation = "P <=> A"
K = 0.5
forward = "2 /s"
[enzymes.e]
amount = "6 copies"
catalyses = "r"
mechanism = "random bi bi"
kcat = "100 /s"
KM = { A = "0.4 mM", B = "0.3 mM" }
inhibitors.I = "0.2 mM"
[enzymes.f]
amount = "4 copies"
catalyses = "s"
mechanism = "ordered bi bi"
kcat = "60 /s"
KM = { C = "0.4 mM" }
[run]
loading = "poisson"
"""
TIMES = np.linspace(0.0, 2.0, 9)


def lumped(cv: float) -> driblet.System:
    system = driblet.loads(TEXT.replace("CV", str(cv)))
    return treated(system, {e.name: "lumped" for e in system.enzymes})


def advance(
    system: driblet.System, method: str, budget: int, lanes: int = 64, replicates: int = 23, most_summed_all: int = 200
) -> list[np.ndarray]:
    network = Network.of(system)
    start = prepare(system, 4, range(replicates))
    engine = ExactEngine(network.arrays, len(network.species), method, lanes)
    state = new_state(start.counts, start.stream, len(network.channels))
    samples = new_samples(TIMES, replicates, len(network.species), len(network.channels))
    plan = SumsPlan.of(system, network, TIMES[-1], None)
    assert plan.paced is not None
    plan = replace(plan, settle=settle_plan(network.arrays, plan.factor, plan.paced, most_summed_all))
    recorders = plan.recorders(state, 0.0, TIMES[-1])
    rates = network.rates(start.omega)
    while (state.reason == RUNNING).any():
        engine.advance(rates, state, samples, budget, recorders)
    return [*state, *samples, *(array for recorder in recorders if recorder is not None for array in recorder)]


@pytest.mark.parametrize("cv", [0, 0.2])
@pytest.mark.parametrize(
    ("method", "budget", "lanes"), [("scalar", 700, 64), ("lanes", 1 << 20, 64), ("lanes", 900, 16)]
)
def test_width_chunks_and_method_never_change_a_bit(cv: float, method: str, budget: int, lanes: int) -> None:
    system = lumped(cv)
    wanted = advance(system, "scalar", 1 << 20)
    assert (wanted[4].sum(axis=0) > 0).all()  # every channel fires
    assert all(a.tobytes() == b.tobytes() for a, b in zip(wanted, advance(system, method, budget, lanes), strict=True))


@pytest.mark.parametrize("method", ["scalar", "lanes"])
def test_settled_integrals_of_factors_are_those_of_adding_to_all(method: str) -> None:
    system = lumped(0.2)
    every, settled = (advance(system, method, 900, most_summed_all=most) for most in (200, 0))
    other = advance(system, "scalar", 1 << 20, most_summed_all=0)
    assert all(a.tobytes() == b.tobytes() for a, b in zip(settled, other, strict=True))
    integral = [next(a for a in arrays if a.ndim == 3 and a.dtype == float) for arrays in (every, settled)]
    assert integral[0].size
    assert (integral[0] > 0).any()
    np.testing.assert_allclose(integral[1], integral[0], rtol=1e-9, atol=1e-12)


def test_waits_and_integrals_are_those_of_the_stated_propensities() -> None:
    """The event log played back: integrals of a channel's monomial and factor, summed by numpy."""
    system = lumped(0.2)
    network = Network.of(system)
    start = prepare(system, 4, range(1))
    rates = network.rates(start.omega)
    engine = ExactEngine(network.arrays, len(network.species), "scalar")
    state = new_state(start.counts, start.stream, len(network.channels))
    samples = new_samples(TIMES, 1, len(network.species), len(network.channels))
    plan = SumsPlan.of(system, network, TIMES[-1], None)
    made = plan.recorders(state, 0.0, TIMES[-1])
    recorders = recorders_for(state, made.averages, log=new_log(1, 100_000))
    engine.advance(rates, state, samples, 1 << 20, recorders)
    assert state.reason[0] != RUNNING
    used = int(recorders.log.used[0])
    channels = recorders.log.channel[0, :used]
    change = np.zeros((len(network.channels), len(network.species)))
    for j, channel in enumerate(network.channels):
        for i, amount in channel.change:
            change[j, i] = amount
    states = np.vstack([start.counts, start.counts + np.cumsum(change[channels], axis=0)])
    spans = np.diff(np.concatenate([[0.0], recorders.log.time[0, :used], [TIMES[-1]]]))
    w = network.propensities(states, rates)
    integral = (
        made.averages.integral[0].sum(axis=0)[plan.row[: len(network.channels)]] * rates[0, : len(network.channels)]
    )
    np.testing.assert_allclose(integral, spans @ w, rtol=1e-10)
    assert used > 500


def test_twin_a_factor_taken_for_one_is_caught() -> None:
    network = Network.of(lumped(0))
    rates = network.rates(np.array([1e6]))
    n = np.array([[1000.0, 600.0, 100.0, 40.0, 300.0, 6.0, 4.0]])
    ratio = network.propensities(n, rates) / np.where(network.factors(n, rates) > 0, network.factors(n, rates), 1.0)
    assert not np.allclose(ratio, network.propensities(n, rates), rtol=0.1)


def test_a_network_without_factors_has_no_coefficients() -> None:
    network = Network.of(driblet.loads(TEXT.replace("CV", "0")))
    assert not network.factored
    assert network.rates(np.array([1e6])).shape == (1, len(network.channels))
    assert not network.arrays.node_parent.size
