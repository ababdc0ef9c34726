"""Every method gives the bits of the slow simulator, whatever the packing, the width, the chunks and what is recorded."""

from __future__ import annotations

import os
import subprocess
import sys

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from driblet.engines import exact
from driblet.engines.contract import (
    BUFFER_FULL,
    COUNT_OVERFLOW,
    NOTHING_CAN_FIRE,
    RUNNING,
    STOP_CONDITION,
    TIME_REACHED,
    new_samples,
    new_state,
)
from driblet.engines.exact import METHODS, ExactEngine, choose_method, fewest_lanes
from driblet.engines.recorders import new_log, recorders_for
from tests.unit.engine_cases import (
    Pack,
    first_above_threshold,
    flat,
    histogram,
    random_network,
    same_bits,
    simulate,
    windows,
)

SIZES = [2, 9, 40, 64, 65, 150, 520]  # one, two and three levels of sums
GRID = np.linspace(0.0, 1.0, 7)


def pack(channels: int, seed: int = 1, replicates: int = 11, **more: bool) -> Pack:
    """About a hundred events a replicate."""
    one = Pack.of(seed, channels, replicates, GRID, **more)
    one.recording = False
    state, _, _ = one.run("scalar")
    events = max(1.0, state.firings.sum() / replicates)
    one.times = GRID * min(1.0, 120.0 / events)
    one.recording = True
    return one


@pytest.mark.parametrize("channels", SIZES)
def test_every_method_gives_the_bits_of_the_slow_simulator(channels: int) -> None:
    one = pack(channels)
    scalar, lanes = one.run("scalar"), one.run("lanes")
    assert same_bits(scalar, lanes)
    state, samples, recorders = scalar
    stopped = state.reason == STOP_CONDITION
    assert not 9 <= channels <= 150 or 0 < stopped.sum() < len(stopped), "some stop and some do not"
    for r in range(len(one.counts)):
        whole = simulate(one, r)
        stop = first_above_threshold(one, r, whole)
        slow = whole.until(stop)
        np.testing.assert_array_equal(state.counts[r, :-1], slow.states[-1])
        for g, t in enumerate(samples.time):
            at = sum(moment <= t for moment in slow.moments) - 1
            np.testing.assert_array_equal(samples.counts[r, g], slow.states[at])
            fired = np.bincount(slow.channels[:at], minlength=channels)
            np.testing.assert_array_equal(samples.firings[r, g], fired)
        assert stopped[r] == (stop < np.inf)
        assert state.clock[r] == slow.end
        np.testing.assert_array_equal(recorders.averages.integral[r], windows(one, slow, recorders))
        np.testing.assert_array_equal(recorders.occupancy.seconds[r], histogram(one, slow, recorders))


@pytest.mark.parametrize("stopping", [True, False])
@pytest.mark.parametrize("settling", [True, False])
def test_settled_or_not_and_stopped_or_not_the_bits_are_those_of_the_slow_simulator(
    settling: bool, stopping: bool
) -> None:
    one = pack(40, seed=6)
    one.most_summed_all, one.stopping = 0 if settling else 1000, stopping
    scalar, lanes = one.run("scalar"), one.run("lanes")
    assert same_bits(scalar, lanes)
    state, _, recorders = scalar
    assert len(recorders.averages.settle_start) == (41 if settling else 0)
    for r in range(len(one.counts)):
        whole = simulate(one, r)
        slow = whole.until(first_above_threshold(one, r, whole)) if stopping else whole
        np.testing.assert_array_equal(state.counts[r, :-1], slow.states[-1])
        np.testing.assert_array_equal(recorders.averages.integral[r], windows(one, slow, recorders))


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 90), st.sampled_from(METHODS))
def test_settled_integrals_are_those_of_adding_to_all(seed: int, channels: int, method: str) -> None:
    found = []
    for most in (0, 1000):
        one = Pack.of(seed, channels, 9, np.linspace(0, 0.05, 3), stopping=seed % 2 == 0)
        one.most_summed_all = most
        found.append(one.run(method, 4000)[2].averages)
    np.testing.assert_allclose(found[0].integral, found[1].integral, rtol=1e-9, atol=1e-12)
    np.testing.assert_array_equal(found[0].firings, found[1].firings)


def test_a_firing_that_settles_too_little_is_caught() -> None:
    """The broken twin: a plan that forgets what one species is used in."""
    one = pack(40, seed=6)
    one.stopping, one.most_summed_all = False, 0
    right = one.run("scalar")[2].averages
    i = one.network.channels[0].change[0][0]
    forgetful = [q for q, used in enumerate(right.factor.tolist()) if i in used]
    state = new_state(one.counts, one.stream, 40)
    samples = new_samples(one.times, len(one.counts), len(one.network.species), 40)
    recorders = one.recorders(state, range(len(one.counts)))
    settle = right.settle.copy()
    settle[np.isin(settle, forgetful)] = next(q for q in range(len(right.factor)) if q not in forgetful)
    recorders = recorders._replace(averages=recorders.averages._replace(settle=settle))
    engine = ExactEngine(one.network.arrays, len(one.network.species), "scalar")
    while (state.reason == RUNNING).any():
        engine.advance(one.rates, state, samples, 1 << 20, recorders)
    assert not np.allclose(recorders.averages.integral, right.integral, rtol=1e-3)


@pytest.mark.parametrize("channels", [5, 40, 150, 220])
@pytest.mark.parametrize(("method", "lanes"), [("scalar", 64), ("lanes", 8), ("lanes", 16), ("lanes", 128), (None, 64)])
@pytest.mark.parametrize("budget", [1, 61, 1 << 20])
def test_width_chunks_and_method_never_change_a_bit(channels: int, method: str | None, lanes: int, budget: int) -> None:
    one = pack(channels, seed=3, replicates=19)
    assert same_bits(one.run("scalar"), one.run(method, budget, lanes=lanes))


@pytest.mark.parametrize("replicates", [1, 7, 8, 9, 63, 64, 65, 129, 200])
@pytest.mark.parametrize("own_rates", [True, False])
def test_any_number_of_replicates(replicates: int, own_rates: bool) -> None:
    """Rates of their own and in common take different loops; refilled and moved lanes keep their own."""
    one = pack(14, seed=5, replicates=replicates, own_rates=own_rates)
    assert same_bits(one.run("scalar"), one.run("lanes", 1000))
    assert same_bits(one.run("scalar"), one.run(None))


@pytest.mark.parametrize("method", METHODS)
def test_company_never_changes_a_bit(method: str) -> None:
    one = pack(30, seed=8, replicates=24)
    whole = one.run("scalar")
    for rows in ([5], [7, 3], list(range(23, -1, -1)), [1, 1, 1, 2, 2, 9, 9, 9, 9]):
        part = one.run(method, 500, rows)
        for a, b in zip(flat(part), flat(whole), strict=True):
            if a.shape[:1] == (len(rows),) and b.shape[:1] == (24,):
                np.testing.assert_array_equal(a, b[rows])


@pytest.mark.parametrize("method", METHODS)
def test_recording_never_changes_a_bit(method: str) -> None:
    one = pack(40, seed=9)
    recorded, _, _ = one.run(method)
    one.recording = False
    plain, _, _ = one.run(method)
    free = recorded.reason != STOP_CONDITION
    assert free.sum() > 3
    for a, b in zip(recorded, plain, strict=True):
        np.testing.assert_array_equal(a[free], b[free])


def test_windows_add_up() -> None:
    """Two windows make the one that spans both; cumulative firings stand at every edge."""
    one = pack(40, seed=4)
    state, samples, recorders = one.run("lanes")
    whole = (state.reason != STOP_CONDITION).nonzero()[0]
    n = len(one.network.species)
    mean = recorders.averages.integral[:, :, :n].sum(axis=1)
    for r in whole:
        slow = simulate(one, int(r))
        low, high = recorders.averages.edge[0], recorders.averages.edge[-1]
        exact = np.zeros(n)
        for k, counts in enumerate(slow.states):
            later = slow.moments[k + 1] if k + 1 < len(slow.moments) else slow.end
            exact += np.array(counts) * max(0.0, min(later, high) - max(slow.moments[k], low))
        np.testing.assert_allclose(mean[r], exact, rtol=1e-12, atol=1e-12)
        np.testing.assert_array_equal(recorders.averages.firings[r, -1], samples.firings[r, -1])


def test_a_wrong_reading_of_the_windows_is_caught() -> None:
    """The broken twin: an integral that starts at zero instead of the first edge."""
    one = pack(14, seed=4)
    state, _, recorders = one.run("scalar")
    r = int((state.reason != STOP_CONDITION).nonzero()[0][0])
    late = recorders._replace(averages=recorders.averages._replace(edge=np.array([0.0, *recorders.averages.edge[1:]])))
    right, wrong = windows(one, simulate(one, r), recorders), windows(one, simulate(one, r), late)
    np.testing.assert_array_equal(recorders.averages.integral[r], right)
    assert not np.array_equal(right, wrong)


def test_the_event_log_is_the_trajectory_and_returns_when_full() -> None:
    one = pack(14, seed=2, replicates=3)
    one.recording = False
    state = new_state(one.counts, one.stream, 14)
    samples = new_samples(one.times, 3, len(one.network.species), 14)
    recorders = recorders_for(state, log=new_log(3, 7))
    engine = ExactEngine(one.network.arrays, len(one.network.species))
    found: list[list[tuple[float, int]]] = [[], [], []]
    full = 0
    while (state.reason == RUNNING).any():
        engine.advance(one.rates, state, samples, 1 << 20, recorders)
        full += int((state.reason == BUFFER_FULL).sum())
        for r in range(3):
            used = recorders.log.used[r]
            found[r] += zip(
                recorders.log.time[r, :used].tolist(), recorders.log.channel[r, :used].tolist(), strict=True
            )
            recorders.log.used[r] = 0
        state.reason[state.reason == BUFFER_FULL] = RUNNING
    assert full > 5
    for r in range(3):
        slow = simulate(one, r)
        assert found[r] == list(zip(slow.moments[1:], slow.channels, strict=True))
    with pytest.raises(ValueError, match="scalar method"):
        ExactEngine(one.network.arrays, len(one.network.species), "lanes").advance(
            one.rates, new_state(one.counts, one.stream, 14), samples, 1, recorders
        )


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 90), st.sampled_from(METHODS))
def test_random_networks_keep_molecules(seed: int, channels: int, method: str) -> None:
    """Counts follow from the firings, are never negative, and keep mass where no channel is open to the outside."""
    one = Pack.of(seed, channels, 9, np.linspace(0, 0.05, 3))
    one.recording = False
    state, samples, _ = one.run(method, 4000)
    change = np.zeros((channels, len(one.network.species)), dtype=np.int64)
    for j, channel in enumerate(one.network.channels):
        for i, amount in channel.change:
            change[j, i] = amount
    np.testing.assert_array_equal(samples.counts, one.counts[:, None].astype(np.int64) + samples.firings @ change)
    assert (samples.counts >= 0).all()
    assert (np.diff(samples.firings, axis=1) >= 0).all()
    np.testing.assert_array_equal(state.firings, samples.firings[:, -1])
    laws = null_space(change)
    np.testing.assert_allclose(
        (samples.counts - one.counts[:, None]) @ laws, 0.0, atol=1e-9 * (1 + samples.firings.sum())
    )


def null_space(change: np.ndarray) -> np.ndarray:
    """Weights of species that no channel changes the sum of."""
    _, s, v = np.linalg.svd(change, full_matrices=True)
    return v[int((s > 1e-9).sum()) :].T


@pytest.mark.parametrize("method", METHODS)
def test_counts_beyond_2_to_53_end_a_replicate(method: str) -> None:
    network, _ = random_network(1, 3)
    grows = network.arrays
    counts = np.full((9, len(network.species)), 2.0**53 - 1e6)
    state = new_state(counts, np.arange(36, dtype=np.uint64).reshape(9, 4) + np.uint64(1), 3)
    samples = new_samples(np.array([1e-30]), 9, len(network.species), 3)
    engine = ExactEngine(grows, len(network.species), method)
    while (state.reason == RUNNING).any():
        engine.advance(np.full((9, 3), 1.0), state, samples, 1000)
    assert (state.reason == COUNT_OVERFLOW).all()


@pytest.mark.parametrize("method", METHODS)
def test_frozen_replicates_beside_running_ones(method: str) -> None:
    one = Pack.of(1, 6, 12, np.linspace(0, 0.3, 4))
    one.recording = False
    one.counts[::2] = 0.0
    one.rates[:, [j for j, c in enumerate(one.network.channels) if not c.reactants]] = 0.0
    state, samples, _ = one.run(method)
    assert (state.reason[::2] == NOTHING_CAN_FIRE).all()
    assert TIME_REACHED in state.reason[1::2]
    assert not samples.counts[::2].any()
    assert (state.clock[state.reason != COUNT_OVERFLOW] == 0.3).all()


def test_networks_without_channels_or_species() -> None:
    network, _ = random_network(1, 1)
    for empty in (network.__class__((), (), ()), network.__class__(("a",), (), ())):
        for method in METHODS:
            n = len(empty.species)
            state = new_state(np.ones((9, n)), np.ones((9, 4), dtype=np.uint64), 0)
            samples = new_samples(np.array([0.0, 1.0]), 9, n, 0)
            ExactEngine(empty.arrays, n, method).advance(np.zeros((9, 0)), state, samples, 10)
            assert (state.reason == NOTHING_CAN_FIRE).all()
            assert (samples.counts == 1).all()


@pytest.mark.parametrize("patience", [0.0, 60.0])
def test_stragglers_keep_their_bits_where_their_kernel_is_not_compiled_yet(
    patience: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    one = pack(14, seed=5, replicates=20)
    right = one.run("scalar")
    called = []
    monkeypatch.setattr(exact, "needs_compiler", lambda: True)
    monkeypatch.setattr(exact, "PATIENCE_S", patience)
    scalar = exact.advance_scalar
    monkeypatch.setattr(exact, "advance_scalar", lambda *a: called.append(1) or scalar(*a))
    assert same_bits(one.run(None, 300), right)
    assert bool(called) == (patience == 0.0)


def test_the_choice() -> None:
    assert choose_method(14, 100) == "lanes"
    assert choose_method(14, 100, logging=True) == "scalar"
    assert choose_method(14, fewest_lanes(14)) == "lanes"
    assert choose_method(14, fewest_lanes(14) - 1) == "scalar"
    assert choose_method(300, 1000) == "lanes"
    assert choose_method(600, 1000) == "scalar"
    assert choose_method(10_000, 100) == "scalar"
    network, _ = random_network(1, 3)
    with pytest.raises(ValueError, match="'vector' is not a method; known: lanes, scalar"):
        ExactEngine(network.arrays, len(network.species), "vector")


TINY = """\
import hashlib
import numpy as np
from tests.unit.engine_cases import Pack, flat
digest = hashlib.sha256()
for channels, end in ((9, 0.02), (70, 0.002)):
    one = Pack.of(6, channels, 9, np.linspace(0, end, 3))
    for array in flat(one.run("lanes", 200, lanes=8)):
        digest.update(array.tobytes())
print(digest.hexdigest())
"""


def digest_in_a_process(**environment: str) -> str:
    done = subprocess.run(
        [sys.executable, "-c", TINY],
        capture_output=True,
        text=True,
        env={**os.environ, **environment},
        timeout=300,
        cwd=os.path.join(os.path.dirname(__file__), "..", ".."),
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


def test_the_interpreter_gives_the_same_bits() -> None:
    assert digest_in_a_process(NUMBA_DISABLE_JIT="1") == digest_in_a_process()


@pytest.mark.long
@pytest.mark.parametrize(
    "target",
    [("generic", ""), ("znver3", "+avx2,+fma,+bmi2"), ("skylake", "+avx2,+fma")],
)
def test_other_instruction_sets_give_the_same_bits(target: tuple[str, str]) -> None:
    """Compiled anew without 512-bit vectors, and without any: about a quarter of a minute each."""
    name, features = target
    assert digest_in_a_process(NUMBA_CPU_NAME=name, NUMBA_CPU_FEATURES=features) == digest_in_a_process()
