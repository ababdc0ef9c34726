"""Sums of propensities and the channel they give, with draws fed by hand; the clock after very many events."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from driblet.engines.contract import RUNNING, new_samples, new_state
from driblet.engines.exact import METHODS, ExactEngine
from driblet.engines.scalar import find_channel, refresh_sums, sum_all
from driblet.engines.sums import TOP, refresh_plan, sum_rows, within
from driblet.network import Channel, Network
from tests.unit.engine_cases import choose, random_network

JUST_BELOW_ONE = 1.0 - 2.0**-52  # the largest selection uniform


def of_constants(rates: list[float]) -> tuple[Network, np.ndarray]:
    """Channels that each make their own species at a constant rate: propensities as given."""
    m = len(rates)
    channels = tuple(Channel(j, 1, (), ((j, 1),), 1.0, 0) for j in range(m))
    return Network(tuple(f"s{j}" for j in range(m)), tuple(f"r{j}" for j in range(m)), channels), np.array(rates)


def found(rates: list[float], u: float) -> tuple[float, int]:
    """Total and channel by the compiled functions."""
    network, constants = of_constants(rates)
    rows = sum_rows(len(rates))
    value, cumulative = np.empty(rows.end), np.empty(rows.end)
    sum_all(network.arrays, rows, constants, np.ones(len(rates) + 1), value, cumulative)
    total = cumulative[rows.end - 1]
    return float(total), int(find_channel(rows, cumulative, u * total))


@pytest.mark.parametrize("channels", [0, 1, 63, 64, 65, 72, 73, 511, 512, 513, 600, 4096, 4097, 20_000])
def test_rows_hold_every_channel_once(channels: int) -> None:
    rows = sum_rows(channels)
    used = np.concatenate([rows.leaf, rows.upper])
    assert len(set(used.tolist())) == len(used)
    assert rows.top < rows.end <= rows.top + 1 + TOP
    zero_rows = set(range(rows.end)) - set(used.tolist())
    assert all(r % 9 == 0 for r in zero_rows), "only the first row of a group stays zero"
    assert len(rows.base) == (channels > 64) + (channels > 512) + (channels > 4096)


edge = st.sampled_from([0.0, 0.5, JUST_BELOW_ONE]) | st.floats(0, JUST_BELOW_ONE)


@settings(max_examples=300, deadline=None)
@given(st.integers(1, 700), st.integers(0, 10**6), st.floats(0, 1), edge)
def test_a_channel_that_cannot_fire_is_never_found(channels: int, seed: int, idle: float, u: float) -> None:
    rng = np.random.default_rng(seed)
    rates = np.where(rng.random(channels) < idle, 0.0, 10.0 ** rng.uniform(-40, 40, channels))
    rates[rng.integers(channels)] = 1.0
    total, channel = found(rates.tolist(), u)
    assert (total, channel) == choose(rates.tolist(), u)
    assert rates[channel] > 0


@pytest.mark.parametrize("u", [0.0, JUST_BELOW_ONE])
@pytest.mark.parametrize("channels", [1, 8, 64, 65, 100, 513, 700])
def test_the_only_channel_is_found_wherever_it_stands(channels: int, u: float) -> None:
    for at in {0, 1, 7, 8, channels // 2, channels - 1} & set(range(channels)):
        rates = [0.0] * channels
        rates[at] = 0.3
        assert found(rates, u) == (0.3, at)


def test_nothing_can_fire() -> None:
    assert found([0.0] * 100, 0.0)[0] == 0.0


def test_a_share_that_rounding_swallows_goes_to_its_neighbour() -> None:
    """Within a group of total 1 the target may be rounded up to 1; the last channel that can fire takes it."""
    assert within(1.0, 0.0, 1.0) == np.nextafter(1.0, 0.0)
    assert within(3.0, 2.0, 0.5) == np.nextafter(0.5, 0.0)
    assert within(3.0, 2.0, 4.0) == 1.0
    rates = [0.1] * 72
    rates[71] = 0.0
    assert found(rates, JUST_BELOW_ONE)[1] == 70


def test_channels_are_found_in_proportion() -> None:
    """Evenly spread u over 3 levels: each channel gets its share to within one point."""
    rng = np.random.default_rng(3)
    rates = np.where(rng.random(530) < 0.2, 0.0, rng.uniform(0.1, 3.0, 530))
    network, constants = of_constants(rates.tolist())
    rows = sum_rows(530)
    value, cumulative = np.empty(rows.end), np.empty(rows.end)
    sum_all(network.arrays, rows, constants, np.ones(531), value, cumulative)
    total = cumulative[rows.end - 1]
    points = 40_000
    chosen = [int(find_channel(rows, cumulative, (k + 0.5) / points * total)) for k in range(points)]
    assert np.all(np.diff(chosen) >= 0)
    assert np.abs(np.bincount(chosen, minlength=530) - rates / rates.sum() * points).max() <= 1.0 + 1e-9


@pytest.mark.parametrize("channels", [10, 64, 65, 200, 600])
def test_sums_never_drift(channels: int) -> None:
    """After ten thousand firings, sums refreshed where they are stale equal sums built anew, to the last bit."""
    network, rates = random_network(7, channels)
    arrays = network.arrays
    rows = sum_rows(channels)
    plan = refresh_plan(arrays, rows)
    rng = np.random.default_rng(1)
    counts = np.append(rng.integers(0, 30, len(network.species)), 1).astype(float)
    value, cumulative = np.empty(rows.end), np.empty(rows.end)
    fresh_value, fresh = np.empty(rows.end), np.empty(rows.end)
    sum_all(arrays, rows, rates, counts, value, cumulative)
    for k in range(10_000):
        if not cumulative[rows.end - 1] > 0:  # frozen: start over
            counts[:-1] = 20.0
            sum_all(arrays, rows, rates, counts, value, cumulative)
        j = int(find_channel(rows, cumulative, rng.random() * cumulative[rows.end - 1]))
        for i, amount in network.channels[j].change:
            counts[i] += amount
        for d in arrays.depend_channel[arrays.depend_start[j] : arrays.depend_start[j + 1]]:
            a = rates[d]
            for i, offset in zip(arrays.reactant[d], arrays.offset[d], strict=True):
                a *= counts[i] - offset
            value[rows.leaf[d]] = a
        refresh_sums(rows, plan, np.uint64(j), value, cumulative)
        if k % 500 == 0:
            sum_all(arrays, rows, rates, counts, fresh_value, fresh)
            np.testing.assert_array_equal(cumulative, fresh)


def test_sums_that_are_not_refreshed_are_caught() -> None:
    """The broken twin: a plan that forgets one stale group."""
    network, rates = random_network(7, 200)
    rows = sum_rows(200)
    plan = refresh_plan(network.arrays, rows)
    counts = np.append(np.full(len(network.species), 20.0), 1.0)
    value, cumulative = np.empty(rows.end), np.empty(rows.end)
    sum_all(network.arrays, rows, rates, counts, value, cumulative)
    j = int(np.argmax(np.diff(plan.start)))
    value[plan.row[plan.start[j]]] += 1.0
    before = cumulative[rows.end - 1]
    broken = plan._replace(start=np.where(np.arange(201) > j, plan.start - np.diff(plan.start)[j], plan.start))
    refresh_sums(rows, broken, np.uint64(j), value, cumulative)
    assert cumulative[rows.end - 1] == before
    refresh_sums(rows, plan, np.uint64(j), value, cumulative)
    assert cumulative[rows.end - 1] > before


@pytest.mark.parametrize("method", METHODS)
def test_the_clock_still_resolves_waits_after_1e10_events(method: str) -> None:
    """A clock that stands at 1e10 mean waits gains the same time from the same draws as one at zero, to 1e-6 a wait."""
    network, rates = of_constants([1.0])
    stream = np.random.SeedSequence(5).generate_state(32, np.uint64).reshape(8, 4)
    clocks = []
    for start in (0.0, 1e10):
        state = new_state(np.zeros((8, 1)), stream, 1)
        state.clock[:] = start
        samples = new_samples(np.array([start + 2000.0]), 8, 1, 1)
        engine = ExactEngine(network.arrays, 1, method)
        while (state.reason == RUNNING).any():
            engine.advance(np.tile(rates, (8, 1)), state, samples, 1 << 20)
        clocks.append(state.firings[:, 0].copy())
    assert clocks[0].sum() > 15_000
    np.testing.assert_array_equal(clocks[0], clocks[1])
