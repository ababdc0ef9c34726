"""Random networks for the kernels, and a slow simulator in plain Python that gives the same bits: groups of sums, windows,
histograms, stops and events included, each computed in the most obvious way from the list of states."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from driblet.engines.choice import LANES
from driblet.engines.contract import RUNNING, EnsembleState, Recorders, Samples, new_samples, new_state
from driblet.engines.exact import ExactEngine
from driblet.engines.recorders import MOST_SUMMED_ALL, new_averages, new_log, new_occupancy, recorders_for, settle_plan
from driblet.engines.requirement_arrays import (
    NEXT_WINDOW,
    ONCE,
    OUTCOME,
    SIGN,
    SINCE,
    TIME_MET,
    TRUTH,
    UNDECIDED,
    Requirements,
    no_requirements,
)
from driblet.network import Channel, Network
from driblet.requirements import look_at_all
from tests.reference import minus_log, words

FAN, TOP = 8, 64


def random_network(seed: int, channels: int, species: int | None = None) -> tuple[Network, np.ndarray]:
    """A network whose every channel keeps the mass of its molecules (1 or 2 a species), and its rate constants.

    Reactant molecules up to three, the same species several times included; exchange with outside in a few channels.
    """
    rng = np.random.default_rng(seed)
    n = species or max(3, int(0.6 * channels))
    mass = rng.integers(1, 3, n)
    mass[0], mass[1] = 1, 2
    found: list[Channel] = []
    rates = []
    while len(found) < channels:
        left = [int(i) for i in rng.integers(0, n, rng.choice([1, 1, 2, 2, 3]))]
        open_end = rng.random() < 0.03
        budget = 0 if open_end else int(mass[left].sum())
        right: list[int] = []
        while budget:
            fitting = np.flatnonzero(mass <= budget)
            right.append(int(rng.choice(fitting)))
            budget -= int(mass[right[-1]])
        if open_end and rng.random() < 0.5:
            left, right = right, left
        reactants = tuple((i, left.count(i)) for i in sorted(set(left)))
        change = tuple((i, right.count(i) - left.count(i)) for i in sorted({*left, *right}))
        change = tuple((i, d) for i, d in change if d)
        if not change:
            continue
        found.append(Channel(len(found), 1, reactants, change, 1.0, len(left)))
        rates.append(float(np.exp(rng.uniform(-1.5, 1.5)) * 0.05 ** max(0, len(left) - 1)))
    names = tuple(f"s{i}" for i in range(n))
    return Network(names, tuple(f"r{j}" for j in range(channels)), tuple(found)), np.array(rates)


@dataclass
class Pack:
    """Replicates of a network that can be advanced by any method, in any chunks and packing."""

    network: Network
    counts: np.ndarray
    rates: np.ndarray
    stream: np.ndarray
    times: np.ndarray
    recording: bool = True
    stopping: bool = True
    most_summed_all: int = MOST_SUMMED_ALL

    @classmethod
    def of(
        cls,
        seed: int,
        channels: int,
        replicates: int,
        times: Sequence[float],
        *,
        own_rates: bool = True,
        load: int = 12,
        stopping: bool = True,
    ) -> Pack:
        network, rates = random_network(seed, channels)
        rng = np.random.default_rng([seed, 1])
        counts = rng.integers(0, load + 1, (replicates, len(network.species))).astype(float)
        factor = (
            np.exp(rng.uniform(-0.3, 0.3, (replicates, channels))) if own_rates else np.ones((replicates, channels))
        )
        stream = np.random.SeedSequence(seed).generate_state(4 * replicates, np.uint64).reshape(replicates, 4)
        return cls(network, counts, rates * factor, stream, np.array(times, dtype=float), stopping=stopping)

    def recorders(self, state: EnsembleState, rows: Sequence[int], log: int = 0) -> Recorders:
        if not self.recording:
            return recorders_for(state, log=new_log(len(rows), log))
        n, m, end = len(self.network.species), len(self.network.channels), float(self.times[-1])
        arrays = self.network.arrays
        own = [[i, n, n] for i in range(n)] + [[0, 1, n], [1, 1, 1]]
        factor = np.concatenate([np.array(own), arrays.reactant])
        offset = np.concatenate([np.zeros((n, 3)), [[0, 0, 0], [-1, 0, 1]], arrays.offset])
        settle = settle_plan(arrays, factor, np.zeros((0, 2), dtype=np.int64), self.most_summed_all)
        averages = new_averages(np.array([0.2, 0.45, 1.0]) * end, factor, offset, len(rows), m, settle=settle)
        occupancy = new_occupancy(
            np.arange(0, n, 2), 1 + np.arange(0, n, 2) % 3, 20, (0.3 * end, 0.9 * end), len(rows), n
        )
        requirements = self.stops(rows, end) if self.stopping else None
        if requirements is not None:
            look_at_all(requirements, np.arange(len(rows)), state.counts.T, 0.0, True)
        return recorders_for(state, averages, occupancy, new_log(len(rows), log), requirements)

    def stops(self, rows: Sequence[int], end: float) -> Requirements:
        """One requirement: that species 0 pass the threshold of its replicate once, which then stops."""
        change = [{i for i, _ in channel.change} for channel in self.network.channels]
        record = np.full((len(rows), 1, 8), np.nan)
        record[:, :, [TRUTH, SINCE, NEXT_WINDOW, TIME_MET]] = 0.0
        record[:, :, OUTCOME] = UNDECIDED
        each = np.zeros((len(rows), 1))
        return no_requirements(len(rows), len(change))._replace(
            moments=1,
            moment_leaves=1,
            stops=True,
            affected_start=np.cumsum([0, *(0 in c for c in change)]),
            affected=np.zeros(sum(0 in c for c in change), dtype=np.int64),
            table=np.array([[0, 1, 0, 1, ONCE, 1]]),
            span=np.array([[0.0, end, end]]),
            leaf=np.array([[SIGN, 1, 0, 0]]),
            term_start=np.array([0, 2]),
            factor_start=np.array([0, 0, 1]),
            factor_species=np.zeros(1, dtype=np.int64),
            factor_offset=np.zeros(1),
            program=np.zeros(1, dtype=np.int64),
            coefficient=np.array([[self.threshold(r), -1.0] for r in rows]),
            leaf_value=each.copy(),
            leaf_sum=each.copy(),
            leaf_truth=each.copy(),
            record=record,
        )

    def threshold(self, r: int) -> float:
        """What count species 0 must pass to stop replicate r; two of three never do."""
        return float(self.counts[r, 0] + 1 + r % 4) if r % 3 == 0 else 1e9

    def run(
        self, method: str | None, budget: int = 1 << 20, rows: Sequence[int] | None = None, lanes: int = LANES
    ) -> tuple[EnsembleState, Samples, Recorders]:
        rows = range(len(self.counts)) if rows is None else rows
        index = list(rows)
        state = new_state(self.counts[index], self.stream[index], len(self.network.channels))
        samples = new_samples(self.times, len(index), len(self.network.species), len(self.network.channels))
        recorders = self.recorders(state, index)
        engine = ExactEngine(self.network.arrays, len(self.network.species), method, lanes)
        rates = np.ascontiguousarray(self.rates[index])
        while (state.reason == RUNNING).any():
            fired = engine.advance(rates, state, samples, budget, recorders)
            assert fired >= 0
        return state, samples, recorders


def flat(result: tuple[EnsembleState, Samples, Recorders]) -> list[np.ndarray]:
    """All arrays of a result."""
    state, samples, recorders = result
    recorded = [np.asarray(a) for recorder in recorders if recorder is not None for a in recorder]
    return [*state, *samples, *recorded]


def same_bits(one: tuple[EnsembleState, Samples, Recorders], other: tuple[EnsembleState, Samples, Recorders]) -> bool:
    return all(a.tobytes() == b.tobytes() for a, b in zip(flat(one), flat(other), strict=True))


def choose(single: Sequence[float], u: float) -> tuple[float, int]:
    """Total propensity and chosen channel by the rule of sums.py, with lists of lists."""
    levels = [list(single)]
    while len(levels[-1]) > TOP:
        below = levels[-1]
        levels.append([total(below[k : k + FAN]) for k in range(0, len(below), FAN)])
    whole = total(levels[-1])
    target = u * whole
    if not whole > 0.0:
        return whole, -1
    member = first_above(levels[-1], target)
    begin = 0
    for depth in range(len(levels) - 2, -1, -1):
        before = total(levels[depth + 1][begin:member])
        begin = FAN * member
        group = levels[depth][begin : begin + FAN]
        target = min(target - before, total(group) * (1.0 - 2.0**-53))
        member = begin + first_above(group, target)
    return whole, member


def total(values: Sequence[float]) -> float:
    value = 0.0
    for v in values:
        value += v
    return value


def first_above(values: Sequence[float], target: float) -> int:
    running = 0.0
    for k, v in enumerate(values):
        running += v
        if running > target:
            return k
    raise AssertionError("nothing holds the target")


@dataclass
class History:
    """One replicate: state k stands from moment k to moment k + 1."""

    moments: list[float]
    states: list[list[int]]
    channels: list[int]
    end: float
    stop: float = np.inf

    def until(self, stop: float) -> History:
        """The part before `stop`, where the replicate is stopped."""
        if stop == np.inf:
            return self
        states = sum(t <= stop for t in self.moments)
        return History(self.moments[:states], self.states[:states], self.channels[: states - 1], stop, stop)


def simulate(pack: Pack, r: int) -> History:
    """The trajectory of replicate r up to the end of the grid, stop conditions ignored."""
    stream = words(pack.stream[r].tolist())
    counts = [int(x) for x in pack.counts[r]]
    end = float(pack.times[-1])
    out = History([0.0], [list(counts)], [], end)
    clock = 0.0
    while True:
        single = []
        for j, channel in enumerate(pack.network.channels):
            value = float(pack.rates[r, j])
            for i, multiplicity in channel.reactants:
                for k in range(multiplicity):
                    value *= float(counts[i] - k)
            single.append(value)
        wait, where = next(stream), next(stream)
        whole, chosen = choose(single, (where >> 12) * 2.0**-52)
        if chosen < 0:
            return out
        clock += minus_log(((wait >> 12) + 0.5) * 2.0**-52) / whole
        if clock > end:
            return out
        for i, amount in pack.network.channels[chosen].change:
            counts[i] += amount
        out.moments.append(clock)
        out.states.append(list(counts))
        out.channels.append(chosen)


def value(factor: np.ndarray, offset: np.ndarray, state: Sequence[int]) -> float:
    """A monomial of a state; the dummy species counts 1."""
    a, b, c = ((state[i] if i < len(state) else 1) - o for i, o in zip(factor.tolist(), offset.tolist(), strict=True))
    return float(a) * float(b) * float(c)


def windows(pack: Pack, history: History, recorders: Recorders) -> np.ndarray:
    """What Averages.integral holds of a replicate, shape=(windows, monomials); a stopped one has part of its last.

    Every event adds to every monomial or, where they are settled, only to those of a species that it changes.
    """
    averages = recorders.averages
    out = np.zeros((len(averages.edge) - 1, len(averages.factor)))
    changed = [{i for i, _ in channel.change} for channel in pack.network.channels]
    for q in range(len(averages.factor)):
        running, edge, since = 0.0, 0, 0.0
        species = set(averages.factor[q].tolist())
        for k, state in enumerate(history.states):
            last = k == len(history.channels)
            later = history.stop if last else history.moments[k + 1]
            v = value(averages.factor[q], averages.offset[q], state)
            while edge < len(averages.edge) and later > averages.edge[edge]:
                running += v * (float(averages.edge[edge]) - since)
                since = float(averages.edge[edge])
                if edge:
                    out[edge - 1, q] = running
                running, edge = 0.0, edge + 1
            if last or not len(averages.settle_start) or species & changed[history.channels[k]]:
                running += v * (later - since)
                since = later
        if history.stop < np.inf and 0 < edge < len(averages.edge):
            out[edge - 1, q] = running
    return out


def histogram(pack: Pack, history: History, recorders: Recorders) -> np.ndarray:
    """What Occupancy.seconds holds of a replicate, shape=(followed, bins)."""
    occupancy = recorders.occupancy
    out = np.zeros(occupancy.seconds.shape[1:])
    low, high = occupancy.span.tolist()
    for s, i in enumerate(occupancy.species.tolist()):
        since = 0.0
        for k, state in enumerate(history.states):
            last = k == len(history.channels)
            if last or i in {x for x, _ in pack.network.channels[history.channels[k]].change}:
                until = history.end if last else history.moments[k + 1]
                if min(until, high) > max(since, low):
                    out[s, min(state[i] // int(occupancy.width[s]), out.shape[1] - 1)] += min(until, high) - max(
                        since, low
                    )
                since = until
    return out


def first_above_threshold(pack: Pack, r: int, history: History) -> float:
    """When the count of species 0 first passes what stops replicate r."""
    passed = (t for t, state in zip(history.moments, history.states, strict=True) if state[0] > pack.threshold(r))
    return next(passed, np.inf)
