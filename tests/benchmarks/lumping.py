"""Measures what lumping saves and whether it shows: the 1 fL vesicle of configs/lumped_vesicle.toml, step by step and lumped.

    python -m tests.benchmarks.lumping                    # both, some minutes
    python -m tests.benchmarks.lumping speed --rounds 5
    python -m tests.benchmarks.lumping bias --replicates 3000 --volume "0.02 fL" --duration "20 s"

speed: CPU seconds of one simulated hour by each kernel, measured in turn over short stretches. bias: totals at ten times over
compartments, tested together, and the spread of turnovers beside what the enzymes alone predict.
"""

from __future__ import annotations

import argparse
import statistics
import sys
import time
from pathlib import Path

import numpy as np

import driblet
from driblet.engines.contract import RUNNING, new_samples, new_state
from driblet.engines.exact import ExactEngine
from driblet.loading import prepare
from driblet.lumping import treated
from driblet.network import Network
from driblet.quantities import read_quantity
from driblet.volume import at_volume
from driblet_analysis.compare import Way, compare

FILE = Path(__file__).parents[2] / "configs" / "lumped_vesicle.toml"
LANES = 64
HOUR = 3600.0


class Stretch:
    """A stretch of simulated time for some replicates by one kernel."""

    def __init__(self, system: driblet.System, method: str, replicates: int, span_s: float) -> None:
        self.network = Network.of(system)
        self.engine = ExactEngine(self.network.arrays, len(self.network.species), method)
        self.replicates, self.span_s = replicates, span_s
        self.start = prepare(system, 1, range(replicates))
        self.rates = self.network.rates(self.start.omega)

    def run(self, span_s: float) -> tuple[int, float]:
        """Events and CPU seconds."""
        channels = len(self.network.channels)
        state = new_state(self.start.counts, self.start.stream, channels)
        samples = new_samples(np.linspace(0.0, span_s, 5), self.replicates, len(self.network.species), channels)
        begin, events = time.process_time(), 0
        while (state.reason == RUNNING).any():
            events += self.engine.advance(self.rates, state, samples, 1 << 20)
        return events, time.process_time() - begin

    def hour(self) -> tuple[float, float]:
        """CPU seconds of one replicate's simulated hour, and ns per event."""
        events, seconds = self.run(self.span_s)
        return seconds / self.replicates / self.span_s * HOUR, 1e9 * seconds / events


def speed(rounds: int) -> None:
    """Print CPU seconds of a simulated hour and their ratios."""
    system = driblet.load(FILE)
    lumped = treated(system, {e.name: "lumped" for e in system.enzymes})
    cases = {
        "elementary, scalar": Stretch(system, "scalar", 1, 2.0),
        "elementary, lanes": Stretch(system, "lanes", LANES, 0.15),
        "lumped, scalar": Stretch(lumped, "scalar", 1, 500.0),
        "lumped, lanes": Stretch(lumped, "lanes", LANES, 20.0),
    }
    for case in cases.values():
        case.run(1e-4)  # compiles
    measured: dict[str, list[tuple[float, float]]] = {name: [] for name in cases}
    for _ in range(rounds):
        for name, case in cases.items():
            measured[name].append(case.hour())
    median = {name: statistics.median(s for s, _ in found) for name, found in measured.items()}
    print(f"CPU seconds of a simulated hour of one 1 fL vesicle, medians of {rounds} rounds in turn")
    for name, found in measured.items():
        print(f"  {name:20s} {median[name]:9.3g} s   {statistics.median(ns for _, ns in found):6.1f} ns an event")
    best = median["lumped, lanes"]
    print(f"lumped in lanes against elementary, scalar: {median['elementary, scalar'] / best:.0f} times less")
    print(f"lumped in lanes against elementary, lanes:  {median['elementary, lanes'] / best:.0f} times less")
    one = median["elementary, scalar"] / median["lumped, scalar"]
    print(f"lumped, scalar against elementary, scalar:  {one:.0f} times less")


def bias(replicates: int, volume_L: float, duration_s: float, seed: int) -> int:
    """Print the comparison; returns 1 where a test departs."""
    result = compare(
        at_volume(driblet.load(FILE), volume_L), (Way("elementary"), Way("lumped")), replicates, duration_s, seed
    )
    print(f"{result.verdict}: {result.reason}")
    print("worst of each quantity: t of the mean, t of the spread, Kolmogorov distance (exceeded by chance in 5 %)")
    for row in result.worst():
        ratio = row.sd[1] / row.sd[0] if row.sd[0] else float("nan")
        print(
            f"  {row.quantity:16s} at {row.time_s:5.3g} s  {row.t_mean:+5.2f}  {row.t_variance:+5.2f} (sd ratio {ratio:.3f})"
            f"  {row.distance:.4f} ({row.noise:.4f})  corrected p {row.smallest_p:.3g}"
        )
    print("variance over mean of net turnovers by the end, elementary and lumped; enzyme alone at the start")
    for one in result.turnovers:
        predicted = "" if one.predicted is None else f"; {one.predicted[0]:.3f} and {one.predicted[1]:.3f}"
        print(f"  {one.reaction:16s} {one.fano[0]:.3f} and {one.fano[1]:.3f}{predicted}")
    return int(result.verdict != "consistent")


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("what", nargs="?", choices=["speed", "bias", "all"], default="all")
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--replicates", type=int, default=3000)
    parser.add_argument("--volume", default="0.02 fL")
    parser.add_argument("--duration", default="20 s")
    parser.add_argument("--seed", type=int, default=11)
    given = parser.parse_args()
    status = 0
    if given.what != "bias":
        speed(given.rounds)
    if given.what != "speed":
        volume, duration = read_quantity(given.volume).to("volume"), read_quantity(given.duration).to("time")
        status = bias(given.replicates, volume, duration, given.seed)
    return status


if __name__ == "__main__":
    sys.exit(main())
