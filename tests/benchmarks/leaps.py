"""Measures leaps beside exact events: CPU time, side by side in turn, of the 1 fL vesicle and of published problems.

    python -m tests.benchmarks.leaps                # all, some minutes
    python -m tests.benchmarks.leaps vesicle --rounds 5
    python -m tests.benchmarks.leaps problems
    python -m tests.benchmarks.leaps costs

vesicle: CPU milliseconds of one simulated hour of configs/lumped_vesicle.toml. Leaps simulate the hour; exact kernels simulate
shorter stretches at the start, scaled. problems: leap_problems.py, speed-ups against both exact kernels. costs: of one leap and
of one exact event beside it by number of channels, against the constants of engine_choice.core_seconds.
"""

from __future__ import annotations

import argparse
import statistics
import sys
import time
from collections.abc import Callable

import numpy as np

import driblet
from driblet.engine_choice import core_seconds, leap_engine, leap_rates
from driblet.engines.contract import RUNNING, new_samples, new_state
from driblet.engines.leap_arrays import CRITICAL_EVENTS, EVENTS, LEAPS, REJECTED
from driblet.loading import prepare
from driblet.lumping import treated
from driblet.network import Network
from tests.benchmarks.lumping import FILE, HOUR, LANES, Stretch
from tests.physics.leap_problems import decaying_dimerising, stiff_dimerising, stiff_isomerisations
from tests.unit.leap_cases import HEAD, leap


class Leaps:
    """A stretch of simulated time for some replicates by leaps, sampled as a run would be."""

    def __init__(self, system: driblet.System, replicates: int, span_s: float, tolerance: float, samples: int) -> None:
        self.network = Network.of(system)
        self.engine, self.table = leap_engine(system, self.network, tolerance, 5.0)
        self.replicates, self.span_s, self.samples = replicates, span_s, samples
        self.start = prepare(system, 1, range(replicates))
        self.rates = leap_rates(self.network, self.table, self.start.omega)

    def run(self, span_s: float) -> tuple[np.ndarray, float]:
        """What was done, (WORK,) of one replicate on average, and CPU seconds of all."""
        channels = len(self.network.channels)
        state = new_state(self.start.counts, self.start.stream, channels)
        grid = np.linspace(0.0, span_s, self.samples)
        samples = new_samples(grid, self.replicates, len(self.network.species), channels)
        work = self.engine.new_work(self.replicates)
        begin = time.process_time()
        while (state.reason == RUNNING).any():
            self.engine.advance(self.rates, state, samples, 1 << 22, None, work)
        return work.mean(axis=0), time.process_time() - begin


def medians(cases: dict[str, Callable[[], float]], rounds: int) -> dict[str, float]:
    """Each case measured in turn, `rounds` times."""
    found: dict[str, list[float]] = {name: [] for name in cases}
    for _ in range(rounds):
        for name, case in cases.items():
            found[name].append(case())
    return {name: statistics.median(values) for name, values in found.items()}


def vesicle(rounds: int) -> None:
    """Print CPU milliseconds of a simulated hour of one compartment, and ratios."""
    system = driblet.load(FILE)
    lumped = treated(system, {e.name: "lumped" for e in system.enzymes})
    exact = {
        "elementary, scalar": Stretch(system, "scalar", 1, 2.0),
        "elementary, lanes": Stretch(system, "lanes", LANES, 0.15),
        "lumped, scalar": Stretch(lumped, "scalar", 1, 500.0),
        "lumped, lanes": Stretch(lumped, "lanes", LANES, 20.0),
    }
    leaps = {f"lumped, leaps at {tol:g}": Leaps(lumped, 8, HOUR, tol, 61) for tol in (0.01, 0.03, 0.1)}
    cases: dict[str, Callable[[], float]] = {}
    for name, case in exact.items():
        case.run(1e-4)  # compiles
        cases[name] = lambda case=case: 1e3 * case.hour()[0]  # type: ignore[misc]
    for name, own in leaps.items():
        own.run(1e-4)
        cases[name] = lambda own=own: 1e3 * own.run(HOUR)[1] / own.replicates  # type: ignore[misc]
    median = medians(cases, rounds)
    print(f"CPU milliseconds of a simulated hour of one 1 fL vesicle, medians of {rounds} rounds in turn")
    print("(exact kernels: 2 s, 0.15 s, 500 s and 20 s from the start, scaled to the hour)")
    for name, value in median.items():
        print(
            f"  {name:24s} {value:12.4g} ms" + "".join(f"   {v / value:10.3g}" for k, v in median.items() if k in exact)
        )
    print("  columns: how many times less than " + "; ".join(exact))
    for name, own in leaps.items():
        work, _ = own.run(HOUR)
        single = work[EVENTS] + work[CRITICAL_EVENTS]
        print(f"  {name:24s} {work[LEAPS]:.0f} leaps, {single:.0f} single events, {work[REJECTED]:.1f} rejected")


def problems(rounds: int) -> None:
    """Print speed-ups on published problems."""
    made = {
        "decaying-dimerising, 10 s": (decaying_dimerising(), 10.0),
        "stiff variant, 0.2 s": (stiff_dimerising(), 0.2),
        "isomerisations 1e4 apart, 0.05 s": (stiff_isomerisations(1e4, 20_000), 0.05),
        "the same, 100 times the copies": (stiff_isomerisations(1e4, 2_000_000), 0.0005),
    }
    print("CPU milliseconds of one replicate and how many times less than exact events in lanes, alone; ten samples")
    for name, (system, span) in made.items():
        lanes, alone = Stretch(system, "lanes", LANES, span), Stretch(system, "scalar", 2, span)
        cases: dict[str, Callable[[], float]] = {
            "lanes": lambda lanes=lanes: 1e3 * lanes.run(lanes.span_s)[1] / LANES,  # type: ignore[misc]
            "alone": lambda alone=alone: 1e3 * alone.run(alone.span_s)[1] / 2,  # type: ignore[misc]
        }
        for tolerance in (0.01, 0.03, 0.1):
            own = Leaps(system, 16, span, tolerance, 11)
            cases[f"leaps at {tolerance:g}"] = lambda own=own: 1e3 * own.run(own.span_s)[1] / 16  # type: ignore[misc]
        for case in cases.values():
            case()
        median = medians(cases, rounds)
        row = "".join(f"  {k} {v:.3g}" for k, v in median.items())
        gain = "; ".join(
            f"{median['lanes'] / v:.2g}, {median['alone'] / v:.2g}" for k, v in median.items() if "leaps" in k
        )
        print(f"  {name:34s}{row}   times: {gain}")


def chain(pairs: int, copies: int) -> driblet.System:
    """A ring of isomers, each pair of neighbours exchanging at its own rate, out of equilibrium."""
    names = [f"S{i}" for i in range(pairs)]
    lines = [f'{s} = "{copies * (1 + i % 2)} copies"' for i, s in enumerate(names)]
    rows = [
        f'r{i} = {{ equation = "{names[i]} <=> {names[i + 1]}", K = 1, forward = "1 /s" }}' for i in range(pairs - 1)
    ]
    return driblet.loads(HEAD + "\n".join([*lines, "[reactions]", *rows]))


def costs(rounds: int) -> None:
    """Print ns of a leap and of a single event of the leap engine, and what engine_choice takes them for."""
    print("channels: ns of a leap (explicit, implicit by Newton's method), of a single event; engine_choice takes")
    for pairs in (2, 4, 8, 16, 32, 64):
        system = chain(pairs, 100_000)
        few = chain(pairs, 4)
        found = []
        # where no reactant has ten molecules all are single events
        for one, span, stiffness, tolerance in (
            (system, 20.0, 0.15, 0.1), (system, 200.0, 5.0, 0.1), (few, 600.0, 5.0, 0.1),
        ):  # fmt: skip
            grid = np.linspace(0.0, span, 3)
            leap(one, grid, 1, tolerance=tolerance, stiffness=stiffness)
            values = []
            for _ in range(rounds):
                begin = time.process_time()
                work = leap(one, grid, 8, tolerance=tolerance, stiffness=stiffness).work.sum(axis=0)
                seconds = time.process_time() - begin
                done = work[LEAPS] + work[REJECTED]
                values.append(1e9 * seconds / (done if done > 0.5 * work[EVENTS] else work[EVENTS]))
            found.append(statistics.median(values))
        channels = 2 * (pairs - 1)
        facts = {"channels": channels, "firings": 1.0, "leaps": 1.0, "rejected": 0.0, "exact_events": 0.0}
        event, one_leap = (1e9 * s for s in core_seconds(facts))
        single = 1e9 * core_seconds({**facts, "leaps": 0.0, "exact_events": 1.0})[1]
        print(
            f"  {channels:4d}: {found[0]:8.0f} {found[1]:8.0f} {found[2]:8.0f};  a leap {one_leap:8.0f}, a single event "
            f"{single:6.0f}, an event in lanes {event:5.1f}"
        )


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("what", nargs="?", choices=["vesicle", "problems", "costs", "all"], default="all")
    parser.add_argument("--rounds", type=int, default=3)
    given = parser.parse_args()
    for name, part in (("vesicle", vesicle), ("problems", problems), ("costs", costs)):
        if given.what in (name, "all"):
            part(given.rounds)
    return 0


if __name__ == "__main__":
    sys.exit(main())
