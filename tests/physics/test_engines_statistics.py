"""The kernels against laws they were not made from, by chi-square over 18 seeds.

The exact engine's methods give the same bits, so what is tested here is the one arithmetic they share, where it can go
wrong without a bit differing: sums in one, two and three levels against exact stationary laws and exact waiting times.
False alarms: each test adds 18 chi-square values of independent seeds and refuses above the 1 - 1e-4 quantile; the seven
of either method together raise a false alarm in one of 1,400 reseedings.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from driblet.engines.contract import RUNNING, new_samples, new_state
from driblet.engines.exact import METHODS, ExactEngine
from driblet.network import Channel, Network

SEEDS = 18
FALSE_ALARM = 1e-4


def chi_square(observed: np.ndarray, expected: np.ndarray) -> tuple[float, int]:
    """Statistic and degrees of freedom, cells below 5 expected put together."""
    order = np.argsort(-expected)
    observed, expected = observed[order].astype(float), expected[order]
    large = int((expected >= 5.0).sum())
    if large < len(expected):
        observed = np.append(observed[:large], observed[large:].sum())
        expected = np.append(expected[:large], expected[large:].sum())
    if expected[-1] < 5.0:
        observed = np.append(observed[:-2], observed[-2:].sum())
        expected = np.append(expected[:-2], expected[-2:].sum())
    return float(((observed - expected) ** 2 / expected).sum()), len(expected) - 1


def refused(pairs: list[tuple[float, int]]) -> bool:
    statistic, freedom = np.sum(pairs, axis=0)
    return bool(stats.chi2.sf(statistic, freedom) < FALSE_ALARM)


def run(network: Network, rates: np.ndarray, counts: np.ndarray, end_s: float, seed: int, method: str) -> np.ndarray:
    """Firings at the end and counts, concatenated; shape=(replicates, channels + species)."""
    replicates, channels = len(counts), len(network.channels)
    stream = np.random.SeedSequence([77, seed]).generate_state(4 * replicates, np.uint64).reshape(replicates, 4)
    state = new_state(counts, stream, channels)
    samples = new_samples(np.array([end_s]), replicates, len(network.species), channels)
    engine = ExactEngine(network.arrays, len(network.species), method)
    while (state.reason == RUNNING).any():
        engine.advance(np.tile(rates, (replicates, 1)), state, samples, 1 << 20)
    return np.hstack([samples.firings[:, -1], samples.counts[:, -1]])


def sources(channels: int) -> tuple[Network, np.ndarray]:
    """Independent Poisson streams of very different rates."""
    network = Network(
        tuple(f"s{j}" for j in range(channels)),
        tuple(f"r{j}" for j in range(channels)),
        tuple(Channel(j, 1, (), ((j, 1),), 1.0, 0) for j in range(channels)),
    )
    return network, np.random.default_rng(channels).lognormal(0.0, 1.5, channels)


def firings_against_rates(channels: int, method: str, skew: float = 0.0) -> bool:
    """Whether firings of constant channels are refused as Poisson in proportion to the rates; `skew` breaks the rates."""
    network, rates = sources(channels)
    end = 6000.0 / rates.sum()
    wrong = rates * (1.0 + skew * np.where(np.arange(channels) % 8 == 7, 1.0, 0.0))
    pairs = []
    for seed in range(SEEDS):
        fired = run(network, rates, np.zeros((8, channels)), end, seed, method)[:, :channels].sum(axis=0)
        expected = 8 * wrong * end
        pairs.append((float(((fired - expected) ** 2 / expected)[expected > 5].sum()), int((expected > 5).sum())))
    return refused(pairs)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("channels", [20, 100, 600])
def test_channels_fire_in_proportion_on_every_level_of_sums(channels: int, method: str) -> None:
    assert not firings_against_rates(channels, method)


def test_one_channel_of_a_group_favoured_is_caught() -> None:
    """The broken twin: every eighth channel expected to fire 10 % more often."""
    assert firings_against_rates(100, "scalar", skew=0.1)


def ring(states: int) -> tuple[Network, np.ndarray]:
    """One molecule hopping on a ring both ways: 2 channels a state, with a known stationary law."""
    rng = np.random.default_rng(states)
    energy = rng.uniform(0.0, 2.0, states)
    found, rates = [], []
    for i in range(states):
        j = (i + 1) % states
        for a, b in ((i, j), (j, i)):
            found.append(Channel(i, 1 if a == i else -1, ((a, 1),), ((a, -1), (b, 1)), 1.0, 1))
            rates.append(float(np.exp(energy[a])))
    names = tuple(f"s{i}" for i in range(states))
    return Network(names, tuple(f"r{i}" for i in range(states)), tuple(found)), np.array(rates)


def occupancy_against_law(states: int, method: str, factor: float = 1.0) -> bool:
    """Whether end states of replicates started from the law are refused; `factor` breaks one rate."""
    network, rates = ring(states)
    law = 1.0 / rates[::2]
    law /= law.sum()
    rates = rates.copy()
    rates[0] *= factor
    pairs = []
    for seed in range(SEEDS):
        rng = np.random.default_rng([5, seed])
        counts = rng.multinomial(40, law, size=100).astype(float)
        ends = run(network, rates, counts, 3.0, seed, method)[:, 2 * states :].sum(axis=0)
        pairs.append(chi_square(ends, 4000 * law))
    return refused(pairs)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("states", [10, 60])
def test_the_stationary_law_is_kept(states: int, method: str) -> None:
    """Independent molecules: multinomial (binomial for each state), 20 and 120 channels."""
    assert not occupancy_against_law(states, method)


def test_a_rate_off_by_a_half_is_caught() -> None:
    """The broken twin."""
    assert occupancy_against_law(10, "scalar", factor=1.5)


def first_waits(end_s: float, seed: int, method: str) -> np.ndarray:
    """Events of a stream of rate 1 within a time, 400 replicates."""
    network, _ = sources(1)
    return run(network, np.array([1.0]), np.zeros((400, 1)), end_s, seed, method)[:, 0]


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("end_s", [0.1, 3.0])
def test_waiting_times_are_exponential(end_s: float, method: str) -> None:
    """Numbers of events in a time are Poisson: at 0.1 the chance of none, at 3 the sums of several waits."""
    pairs = []
    for seed in range(SEEDS):
        fired = first_waits(end_s, seed, method)
        law = stats.poisson(end_s).pmf(np.arange(40))
        pairs.append(chi_square(np.bincount(fired, minlength=40)[:40], 400 * law))
    assert not refused(pairs)


def test_waits_a_tenth_too_short_are_caught() -> None:
    """The broken twin."""
    pairs = []
    for seed in range(SEEDS):
        law = stats.poisson(3.0 * 0.9).pmf(np.arange(40))
        pairs.append(chi_square(np.bincount(first_waits(3.0, seed, "scalar"), minlength=40)[:40], 400 * law))
    assert refused(pairs)
