"""The engine contract: nothing but a replicate's own rows decides its bits; the slow oracle agrees event by event."""

from __future__ import annotations

import hashlib
import math
import os
import subprocess
import sys
from collections.abc import Mapping

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import driblet
from driblet import ensemble, packs
from driblet.engines.contract import (
    COUNT_OVERFLOW,
    NOTHING_CAN_FIRE,
    RUNNING,
    TIME_REACHED,
    EnsembleState,
    Samples,
    new_samples,
    new_state,
)
from driblet.engines.exact import advance, select
from driblet.loading import prepare
from driblet.network import Network
from tests.reference import Step, Trajectory, simulate
from tests.texts import MIXED, SMALL, changed

TIMES = np.linspace(0.0, 4.0, 9)


class Case:
    """A system prepared for the engine, which can be advanced in any chunks and any packing."""

    def __init__(self, text: str, replicates: int = 6, seed: int = 11) -> None:
        self.system = driblet.loads(text)
        self.network = Network.of(self.system)
        self.start = prepare(self.system, seed, range(replicates))
        self.rates = self.network.rates(self.start.omega)

    def run(
        self, times: np.ndarray = TIMES, budget: int = 1 << 20, rows: list[int] | None = None
    ) -> tuple[EnsembleState, Samples]:
        rows = list(range(len(self.rates))) if rows is None else rows
        channels = len(self.network.channels)
        state = new_state(self.start.counts[rows], self.start.stream[rows], channels)
        samples = new_samples(times, len(rows), len(self.network.species), channels)
        calls = 0
        while (state.reason == RUNNING).any():
            fired = advance(self.network.arrays, np.ascontiguousarray(self.rates[rows]), state, samples, budget)
            assert fired >= 0
            calls += 1
            assert calls < 10_000_000
        return state, samples

    def steps(self, r: int) -> list[Step]:
        names = self.network.species
        return [
            Step(
                {names[i]: k for i, k in channel.reactants},
                {names[i]: d for i, d in channel.change},
                float(self.rates[r, j]),
            )
            for j, channel in enumerate(self.network.channels)
        ]

    def oracle(self, r: int, times: np.ndarray = TIMES) -> Trajectory:
        counts = {n: int(c) for n, c in zip(self.network.species, self.start.counts[r], strict=True)}
        return simulate(self.steps(r), counts, times.tolist(), self.start.stream[r].tolist())

    def table(self, trajectory: Trajectory) -> np.ndarray:
        return np.array([[state[n] for n in self.network.species] for state in trajectory.counts])


@pytest.fixture(scope="module")
def mixed() -> Case:
    return Case(MIXED)


def equal(one: tuple[EnsembleState, Samples], other: tuple[EnsembleState, Samples]) -> bool:
    pairs = [*zip(one[0], other[0], strict=True), *zip(one[1], other[1], strict=True)]
    return all(np.array_equal(a, b) for a, b in pairs)


def test_the_case_is_worth_testing(mixed: Case) -> None:
    state, samples = mixed.run()
    assert (state.reason == TIME_REACHED).all()
    assert state.firings.sum() > 2000
    assert (state.firings.sum(axis=0) > 0).all(), "every kind of channel fires"
    assert len({tuple(row) for row in samples.counts[:, -1].tolist()}) == 6


@pytest.mark.parametrize("budget", [1, 2, 7, 100, 4096])
def test_chunks_never_change_a_bit(mixed: Case, budget: int) -> None:
    assert equal(mixed.run(), mixed.run(budget=budget))


@pytest.mark.parametrize("rows", [[0], [5], [3, 1], [5, 4, 3, 2, 1, 0], [2, 2, 2]])
def test_packing_never_changes_a_bit(mixed: Case, rows: list[int]) -> None:
    state, samples = mixed.run()
    some_state, some_samples = mixed.run(rows=rows, budget=50)
    for k, r in enumerate(rows):
        np.testing.assert_array_equal(some_samples.counts[k], samples.counts[r])
        np.testing.assert_array_equal(some_samples.firings[k], samples.firings[r])
        np.testing.assert_array_equal(some_state.stream[k], state.stream[r])


def test_recording_never_changes_a_bit(mixed: Case) -> None:
    """A grid a hundred times finer, or of the end alone, sees the same trajectory."""
    _, coarse = mixed.run()
    _, fine = mixed.run(np.linspace(0, 4, 801))
    np.testing.assert_array_equal(fine.counts[:, ::100], coarse.counts)
    np.testing.assert_array_equal(fine.firings[:, ::100], coarse.firings)
    _, end = mixed.run(np.array([4.0]))
    np.testing.assert_array_equal(end.counts[:, 0], coarse.counts[:, -1])


def test_a_longer_run_begins_as_a_shorter_one(mixed: Case) -> None:
    _, short = mixed.run(TIMES[:5])
    _, long = mixed.run()
    np.testing.assert_array_equal(long.counts[:, :5], short.counts)


def test_counts_are_the_start_and_the_firings(mixed: Case) -> None:
    _, samples = mixed.run()
    change = np.zeros((len(mixed.network.channels), 5), dtype=np.int64)
    for j, channel in enumerate(mixed.network.channels):
        for i, amount in channel.change:
            change[j, i] = amount
    expected = mixed.start.counts[:, None, :].astype(np.int64) + samples.firings @ change
    np.testing.assert_array_equal(samples.counts, expected)
    assert (samples.counts >= 0).all()
    assert (np.diff(samples.firings, axis=1) >= 0).all()


def test_the_oracle_gives_the_same_trajectory(mixed: Case) -> None:
    state, samples = mixed.run()
    for r in range(6):
        slow = mixed.oracle(r)
        np.testing.assert_array_equal(samples.counts[r], mixed.table(slow))
        np.testing.assert_array_equal(samples.firings[r], slow.firings)
        assert state.firings[r].sum() == len(slow.events)


def test_the_oracle_agrees_event_by_event(mixed: Case) -> None:
    """On a grid of the oracle's own event times, and of the doubles just before them: each event is there at its time to
    the last bit, not a moment earlier, and it is the same channel."""
    slow = mixed.oracle(2)
    moments = np.array([t for t, _ in slow.events])
    assert len(moments) > 300
    assert (np.diff(moments) > 0).all()
    grid = np.append(np.ravel(np.column_stack([np.nextafter(moments, 0), moments])), 4.0)
    _, samples = mixed.run(grid, rows=[2])
    fired = np.diff(samples.firings[0], axis=0, prepend=0)
    assert not fired[0:-1:2].any(), "nothing fires before its time"
    np.testing.assert_array_equal(np.argmax(fired[1:-1:2], axis=1), [channel for _, channel in slow.events])
    assert (fired[1:-1:2].sum(axis=1) == 1).all()


def test_an_oracle_that_counts_pairs_wrongly_is_caught(mixed: Case) -> None:
    """The broken twin: n^2 for n(n - 1) in one channel gives another trajectory."""

    def squares(step: Step, counts: Mapping[str, int]) -> float:
        return step.rate * math.prod(float(counts[name]) ** k for name, k in step.reactants.items())

    counts = {n: int(c) for n, c in zip(mixed.network.species, mixed.start.counts[2], strict=True)}
    slow = simulate(mixed.steps(2), counts, TIMES.tolist(), mixed.start.stream[2].tolist(), squares)
    assert not np.array_equal(slow.firings, mixed.run()[1].firings[2])


def random_text(seed: int) -> str:
    """A random network of up to nine reversible reactions over six species; energies from random potentials, so they close."""
    rng = np.random.default_rng(seed)
    names = list("ABCDEF")
    g = dict(zip(names, rng.uniform(-8, 8, 6), strict=True))
    text = '[conditions]\ntemperature = "25 degC"\n[compartments.c]\nvolume = "10 aL"\n[species]\n'
    text += "".join(f'{n} = "{rng.integers(0, 20)} copies"\n' for n in names)
    for k in range(9):
        left, right = ([str(n) for n in rng.choice(names, rng.integers(0, 4))] for _ in range(2))
        if sorted(left) == sorted(right):
            continue
        order = len(left)
        unit = {0: "M/s", 1: "/s", 2: "/M/s", 3: "/M^2/s"}[order]
        rate = 10 ** rng.uniform(-1, 1) * (1.7e-7) ** (1 - order)  # 1.7e-7 M is one copy in 10 aL
        energy = sum(g[n] for n in right) - sum(g[n] for n in left)
        energy -= 2.479 * np.log(1.7e-7) * (len(left) - len(right)) * -1
        text += f'[reactions.r{k}]\nequation = "{" + ".join(left) or "nothing"} <=> {" + ".join(right) or "nothing"}"\n'
        text += f'energy = "{energy:.12f} kJ/mol"\nforward = "{rate:.6e} {unit}"\n'
    return text + '[run]\nduration = "1 s"\n'


@pytest.mark.parametrize("seed", range(12))
def test_the_oracle_agrees_on_random_networks(seed: int) -> None:
    case = Case(random_text(seed), replicates=2, seed=seed)
    times = np.linspace(0, 0.3, 7)
    state, samples = case.run(times, budget=33)
    for r in range(2):
        slow = case.oracle(r, times)
        np.testing.assert_array_equal(samples.counts[r], case.table(slow))
        np.testing.assert_array_equal(samples.firings[r], slow.firings)
        assert (state.reason[r] == NOTHING_CAN_FIRE) == slow.frozen


def test_when_nothing_can_fire_the_state_is_held_to_the_end() -> None:
    text = changed(SMALL, ('A = "10 copies"', 'A = "0 copies"'))
    state, samples = Case(text, replicates=2).run()
    assert (state.reason == NOTHING_CAN_FIRE).all()
    assert not samples.counts.any()
    assert not state.firings.any()
    assert (state.next_sample == len(TIMES)).all()


def test_a_system_that_runs_out_stops_there() -> None:
    text = changed(
        SMALL,
        ('equation = "A <=> B"\nK = 2\nforward = "1 /s"', 'equation = "A -> B"\none_way = "test"\nforward = "50 /s"'),
    )
    state, samples = Case(text, replicates=4).run()
    assert (state.reason == NOTHING_CAN_FIRE).all()
    assert (samples.counts[:, -1] == [0, 10]).all()
    assert (state.firings == 10).all()


def test_idle_channels_first_and_last_are_never_chosen() -> None:
    """Channels whose propensity is zero, on both sides of the only one that fires."""
    text = changed(
        SMALL,
        ('B = "0 copies"', 'B = "0 copies"\nC = "0 copies"'),
        (
            '[reactions.turn]\nequation = "A <=> B"\nK = 2\nforward = "1 /s"',
            '[reactions.first]\nequation = "C -> nothing"\none_way = "t"\nforward = "1e6 /s"\n'
            '[reactions.turn]\nequation = "A -> B"\none_way = "t"\nforward = "1 /s"\n'
            '[reactions.last]\nequation = "2 C -> nothing"\none_way = "t"\nforward = "1e9 /M/s"',
        ),
    )
    state, _ = Case(text, replicates=20).run()
    assert not state.firings[:, [0, 2]].any()
    assert (state.firings[:, 1] > 0).all()


propensities = st.lists(st.just(0.0) | st.floats(1e-290, 1e200), min_size=1, max_size=12).filter(any)


@given(propensities, st.sampled_from([0.0, 0.5, 1 - 2.0**-52]) | st.floats(0, 1 - 2.0**-52))
def test_select_never_falls_off_and_never_picks_an_idle_channel(single: list[float], u: float) -> None:
    cumulative = np.cumsum(single)
    chosen = int(select(cumulative, u * cumulative[-1]))
    assert 0 <= chosen < len(single)
    share = cumulative[chosen] - (cumulative[chosen - 1] if chosen else 0.0)
    assert share > 0
    assert (cumulative[chosen - 1] if chosen else 0.0) <= u * cumulative[-1] < cumulative[chosen]


@pytest.mark.parametrize(
    ("single", "u", "expected"),
    [
        ([1.0, 1.0], 0.0, 0),
        ([1.0, 1.0], 0.5, 1),
        ([1.0, 1.0], np.nextafter(0.5, 0), 0),
        ([0.0, 0.0, 1.0], 0.0, 2),
        ([1.0, 0.0, 0.0], 1 - 2.0**-52, 0),
        ([0.0, 3.0, 0.0], 1 - 2.0**-52, 1),
        ([0.1] * 10, 1 - 2.0**-52, 9),
        ([1e200, 1.0], 1 - 2.0**-52, 0),
        ([1.0, 1e-20], 1 - 2.0**-52, 0),  # the last share is lost in rounding; the first must take it
    ],
)
def test_select_by_hand(single: list[float], u: float, expected: int) -> None:
    cumulative = np.cumsum(single)
    assert int(select(cumulative, u * cumulative[-1])) == expected


def test_a_count_that_grows_past_2_to_53_ends_with_a_message() -> None:
    text = changed(
        SMALL,
        ('A = "10 copies"', 'A = "9.0071992e15 copies"'),
        (
            'equation = "A <=> B"\nK = 2\nforward = "1 /s"',
            'equation = "nothing -> A"\none_way = "t"\nforward = "1e9 M/s"',
        ),
    )
    case = Case(text, replicates=1)
    state, _ = case.run(np.array([1.0]))
    assert state.reason[0] == COUNT_OVERFLOW
    with pytest.raises(driblet.InputError, match=r"species\.A: a count passed 2\^53 in replicate 0"):
        driblet.run(driblet.loads(text), replicates=1)


@pytest.mark.parametrize("threads", [1, 2, 5])
@pytest.mark.parametrize("unit_bytes", [1, 3000, 1 << 30])
def test_threads_and_units_never_change_a_bit(threads: int, unit_bytes: int, monkeypatch: pytest.MonkeyPatch) -> None:
    system = driblet.loads(MIXED)
    plain = driblet.run(system, replicates=9, threads=1)
    monkeypatch.setattr(ensemble, "_UNIT_BYTES", unit_bytes)
    monkeypatch.setattr(packs, "_BUDGET", 97)
    other = driblet.run(system, replicates=9, threads=threads)
    assert digest(plain) == digest(other)


def digest(run: driblet.Run) -> str:
    parts = [run.counts, run.firings_forward, run.firings_backward, run.volume_L, run.events, run.end_reason]
    parts += [run.readout(name) for name in run.readout_units]
    return hashlib.sha256(b"".join(p.tobytes() for p in parts)).hexdigest()


TINY = """\
import sys, hashlib, driblet
run = driblet.run(driblet.loads(sys.stdin.read()), replicates=2, duration=0.5, threads=1)
print(hashlib.sha256(run.counts.tobytes() + run.firings_forward.tobytes() + run.volume_L.tobytes()).hexdigest())
"""


def test_the_compiler_never_changes_a_bit() -> None:
    """The same kernels as plain Python, in a process of its own."""
    run = driblet.run(driblet.loads(MIXED), replicates=2, duration=0.5)
    assert run.events.sum() > 50
    expected = hashlib.sha256(run.counts.tobytes() + run.firings_forward.tobytes() + run.volume_L.tobytes()).hexdigest()
    environment = {**os.environ, "NUMBA_DISABLE_JIT": "1"}
    command = [sys.executable, "-W", "ignore::RuntimeWarning", "-c", TINY]
    done = subprocess.run(command, input=MIXED, capture_output=True, text=True, env=environment, timeout=120)
    assert done.returncode == 0, done.stderr
    assert done.stdout.strip() == expected
