"""Single events of the exact engine: waiting times are exponential, the choice of channel is multinomial.

One event a call (budget 1), so that each state left, wait and channel can be seen. Two reactions on three isomers and a
dimer, states and total propensities change from event to event. False-alarm rate 1e-3 a test, fixed seed.
"""

from typing import NamedTuple

import numpy as np
import pytest
from scipy import stats

from driblet.engines.contract import new_samples, new_state
from driblet.engines.exact import advance
from driblet.network import Network
from tests.physics.support import FALSE_ALARM, squares_for_falling_factorials, system

EVENTS = 20_000
ONE = system(
    {"A": '"4 copies"', "B": '"0 copies"', "C": '"0 copies"'},
    {
        "turn": 'equation = "A <=> B", K = 2, forward = "1 /s"',
        "pair": 'equation = "2 B <=> C", K = "0.5 /M", forward = "0.7 /M/s"',
        "meet": 'equation = "A + B <=> C", K = "1 /M", forward = "0.4 /M/s"',
    },
)


class Events(NamedTuple):
    """state : counts before each event, (E, species); propensity : (E, channels); wait : s, (E,); channel : (E,)."""

    state: np.ndarray
    propensity: np.ndarray
    wait: np.ndarray
    channel: np.ndarray


def events(network: Network, seed: int = 3) -> Events:
    rates = network.rates(np.array([1.0]))
    stream = np.random.SeedSequence(seed).generate_state(4, np.uint64)[None]
    state = new_state(np.array([[4.0, 0.0, 0.0]]), stream, len(network.channels))
    samples = new_samples(np.array([1e12]), 1, 3, len(network.channels))
    before, clock, firings = [], [0.0], [np.zeros(len(network.channels), dtype=np.int64)]
    for _ in range(EVENTS):
        before.append(state.counts[0, :-1].copy())
        assert advance(network.arrays, rates, state, samples, 1) == 1
        clock.append(state.clock[0])
        firings.append(state.firings[0].copy())
    states = np.array(before)
    fired = np.diff(firings, axis=0)
    assert (fired.sum(axis=1) == 1).all()
    return Events(states, network.propensities(states, rates[0]), np.diff(clock), fired.argmax(axis=1))


@pytest.fixture(scope="module")
def seen() -> Events:
    return events(Network.of(ONE))


def p_of_waits(seen: Events, scale: float = 1.0) -> float:
    return float(stats.kstest(seen.wait * seen.propensity.sum(axis=1) * scale, "expon").pvalue)


def p_of_channels(seen: Events) -> float:
    """Chi-square of the channels chosen, state by state, summed over the states left at least 50 times."""
    statistic, freedom = 0.0, 0
    states, which = np.unique(seen.state, axis=0, return_inverse=True)
    for k in range(len(states)):
        here = np.flatnonzero(which == k)
        w = seen.propensity[here[0]]
        possible = w * len(here) / w.sum() >= 5
        if len(here) < 50 or possible.sum() < 2:
            continue
        count = np.bincount(seen.channel[here], minlength=len(w))
        assert (count[w == 0] == 0).all(), "a channel of propensity zero fired"
        kept = count[possible]
        expected = w[possible] / w[possible].sum() * kept.sum()
        statistic += float(((kept - expected) ** 2 / expected).sum())
        freedom += len(kept) - 1
    assert freedom > 15
    return float(stats.chi2.sf(statistic, freedom))


def test_waiting_times_are_exponential(seen: Events) -> None:
    assert p_of_waits(seen) > FALSE_ALARM


def test_channel_choice_is_multinomial(seen: Events) -> None:
    assert p_of_channels(seen) > FALSE_ALARM


def test_a_wait_tells_nothing_about_the_next_nor_about_the_channel(seen: Events) -> None:
    u = np.exp(-seen.wait * seen.propensity.sum(axis=1))
    assert stats.pearsonr(u[:-1], u[1:]).pvalue > FALSE_ALARM
    forward = seen.channel % 2 == 0
    share = seen.propensity[:, ::2].sum(axis=1) / seen.propensity.sum(axis=1)
    assert stats.pearsonr(u, forward - share).pvalue > FALSE_ALARM


def test_twin_waits_of_a_clock_five_per_cent_slow(seen: Events) -> None:
    assert p_of_waits(seen, 1.05) < FALSE_ALARM


def test_twin_squares_for_falling_factorials(monkeypatch: pytest.MonkeyPatch) -> None:
    """The broken network pairs 2 B too often: both its waits and its choices must be seen."""
    squares_for_falling_factorials(monkeypatch)
    one = system(
        {"A": '"4 copies"', "B": '"0 copies"', "C": '"0 copies"'},
        {
            "turn": 'equation = "A <=> B", K = 2, forward = "1 /s"',
            "flip": 'equation = "2 B <=> B + A", K = "0.5", forward = "0.7 /M/s"',
        },
    )
    broken = events(Network.of(one))
    assert p_of_waits(broken) < FALSE_ALARM
    with pytest.raises(AssertionError, match="propensity zero"):
        p_of_channels(broken)
