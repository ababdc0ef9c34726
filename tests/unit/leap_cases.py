"""Systems for tests of leaps, random ones among them, and a stretch of them simulated by the leap engine alone."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from unittest.mock import patch

import numpy as np
from numpy.typing import NDArray

import driblet
from driblet.engine_choice import leap_engine, leap_rates
from driblet.engines.contract import RUNNING, EnsembleState, Recorders, Samples, new_samples, new_state
from driblet.loading import prepare
from driblet.lumping import treated
from driblet.network import Network
from driblet.sums import SumsPlan

# one copy is 1 mol/L, so that rate constants are per molecule
HEAD = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "1.6605390671738466e-24 L"
[species]
"""
RT = 8.31446261815324e-3 * 298.15


@contextmanager
def leaps_that_need_not_pay() -> Iterator[None]:
    """Runs that are asked for leaps leap, also where exact events would cost less."""
    with patch("driblet.engine_choice.core_seconds", return_value=(1.0, 1e-3)):
        yield


@dataclass
class Leaped:
    """What came of it. work : (R, WORK) of engines/leaps.py."""

    network: Network
    state: EnsembleState
    samples: Samples
    recorders: Recorders | None
    work: NDArray[np.float64]

    def arrays(self) -> list[NDArray[np.generic]]:
        gathered = [a for r in self.recorders or () if r is not None for a in r]
        return [*self.state, *self.samples, self.work, *gathered]


def leap(
    system: driblet.System,
    times: NDArray[np.float64],
    replicates: int,
    *,
    seed: int = 1,
    tolerance: float = 0.03,
    stiffness: float = 5.0,
    budget: int = 1 << 22,
    rows: list[int] | None = None,
    statistics: bool = False,
    correlated: bool = True,
) -> Leaped:
    """Replicates by the leap engine. rows : which of them, default the first; correlated : False forgets that turnovers of an
    enzyme depend on each other, which is wrong."""
    network = Network.of(system)
    engine, table = leap_engine(system, network, tolerance, stiffness)
    if not correlated:
        from driblet.engines.leap import LeapEngine

        engine = LeapEngine(network.arrays, engine.pairs, len(network.species), None, tolerance, stiffness)
    rows = list(range(replicates)) if rows is None else rows
    start = prepare(system, seed, rows)
    state = new_state(start.counts, start.stream, len(network.channels))
    samples = new_samples(times, len(rows), len(network.species), len(network.channels))
    recorders = None
    if statistics:
        recorders = SumsPlan.of(system, network, float(times[-1]), None).recorders(state, 0.0, float(times[-1]))
    rates, work = leap_rates(network, table, start.omega), engine.new_work(len(rows))
    while (state.reason == RUNNING).any():
        engine.advance(rates, state, samples, budget, recorders, work)
    return Leaped(network, state, samples, recorders, work)


def lumped(text: str) -> driblet.System:
    """A system from text with all its enzymes lumped."""
    system = driblet.loads(text)
    return treated(system, {e.name: "lumped" for e in system.enzymes})


KINDS = ("uni", "bi", "exchange", "dimer", "split", "decay", "join", "supply")


def random_system(rng: np.random.Generator, enzymes: int) -> driblet.System:
    """Species with 0 to 1e5 copies, energies from formation energies of their own, rates over four decades; reactions of one
    and two molecules, both ways or one way; some carried by lumped enzymes."""
    n = int(rng.integers(3, 7))
    names = [f"S{i}" for i in range(n)]
    counts = np.where(rng.random(n) < 0.25, 0, np.floor(10 ** rng.uniform(0.3, 5.0, n))).astype(int)
    if counts.sum() == 0:
        counts[0] = 1000
    formation = dict(zip(names, rng.uniform(-3.0, 3.0, n), strict=True))  # RT
    level = float(np.log(max(100.0, counts.mean())))  # copies at which a molecule more on one side costs nothing
    reactions, carried = [], []
    for k in range(int(rng.integers(1, 6)) + enzymes):
        kind = "uni" if k < enzymes and rng.random() < 0.5 else str(rng.choice(KINDS))
        if k < enzymes and kind not in ("uni", "exchange"):
            kind = "exchange"
        a, b, c, d = (names[i] for i in rng.permutation(n)[:4]) if n > 3 else (*rng.permutation(names), names[0])
        if kind == "exchange" and len({a, b, c, d}) < 4:
            kind = "uni"
        left, right = {
            "uni": ([a], [b]), "bi": ([a, b], [c]), "exchange": ([a, b], [c, d]), "dimer": ([a, a], [b]),
            "split": ([a], [b, c]), "decay": ([a], []), "join": ([a, b], [c]), "supply": ([], [a]),
        }[kind]  # fmt: skip
        forward = float(10 ** rng.uniform(-2, 2) * np.exp(-level * (len(left) - 1)))
        equation = " + ".join(left) or "nothing", " + ".join(right) or "nothing"
        unit = {0: "M/s", 1: "/s", 2: "/M/s"}[len(left)]
        name = f"r{k}"
        change = len(right) - len(left)
        if kind in ("decay", "join", "supply"):
            text = (
                f'equation = "{equation[0]} -> {equation[1]}", one_way = "of this test", forward = "{forward!r} {unit}"'
            )
        else:
            away = sum(formation[x] for x in right) - sum(formation[x] for x in left) - level * change
            K, of = float(np.exp(-away)), {-1: " /M", 0: "", 1: " M"}[change]
            text = f'equation = "{equation[0]} <=> {equation[1]}", K = ' + (f'"{K!r}{of}"' if of else f"{K!r}")
            if k < enzymes:
                carried.append((name, kind, a, b))
            else:
                text += f', forward = "{forward!r} {unit}"'
        reactions.append(f"[reactions]\n{name} = {{ {text} }}" if not reactions else f"{name} = {{ {text} }}")
    lines = [HEAD, *(f'{s} = "{c} copies"' for s, c in zip(names, counts, strict=True)), *reactions]
    for k, (name, kind, a, b) in enumerate(carried):
        mechanism = "uni uni" if kind == "uni" else str(rng.choice(["ordered bi bi", "ping pong bi bi"]))
        half = {
            x: f'"{float(np.exp(level) * 10 ** rng.uniform(-1, 1))!r} M"' for x in ([a] if kind == "uni" else [a, b])
        }
        lines += [
            f"[enzymes.e{k}]",
            f'amount = "{rng.integers(1, 60)} copies"\ncatalyses = "{name}"\nmechanism = "{mechanism}"',
            f'kcat = "{float(10 ** rng.uniform(0, 3))!r} /s"',
            "KM = { " + ", ".join(f"{x} = {v}" for x, v in half.items()) + " }",
        ]
    return lumped("\n".join(lines))
