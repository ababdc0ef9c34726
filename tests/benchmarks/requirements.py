"""Measures what requirements cost the exact engine, judged after every event, and how long their conditions take to compile.

    python -m tests.benchmarks.requirements                       # some minutes; both methods, 14 channels
    python -m tests.benchmarks.requirements --channels 6 60 --rounds 5 --methods lanes

The same ensemble is run in turn without and with requirements through `driblet.run`, in memory, one thread, 50 samples;
CPU seconds are counted and the median ratio over the rounds is printed. No condition is ever decided early.
"""

from __future__ import annotations

import argparse
import statistics
import time

import driblet
from driblet.network import Network
from driblet.requirements import CompiledRequirements
from tests.benchmarks.exact_engine import horizon
from tests.benchmarks.networks import system_text

POINTS = 50


def conditions(system: driblet.System) -> dict[str, list[tuple[str, str]]]:
    """Name -> (condition, averaged over) of the requirements of one run; every one nearly always holds."""
    a, b, c = (s.name for s in system.free_species[:3])
    two = [r.name for r in system.reactions if len(r.equation.reactants) == 2] or [system.reactions[0].name]
    gibbs = f"gibbs({two[0]}) < 12 kJ/mol"
    return {
        "linear, one species": [(f"{a} > 20", "")],
        "linear, three species": [(f"2 * {a} + {b} - 0.5 * {c} > 40", "")],
        "concentration": [(f"conc({a}) > 0.2 uM", "")],
        "ratio": [(f"{a} / ({a} + {b}) > 0.1", "")],
        "Gibbs energy": [(gibbs, "")],
        "Gibbs energy and linear": [(f"{gibbs} and {a} > 20", "")],
        "linear, averaged": [(f"{a} > 40", "0.05")],
        "Gibbs energy, averaged": [(gibbs, "0.05")],
        "three requirements": [(f"{a} > 20", ""), (f"{b} + {c} > 20", ""), (gibbs, "")],
    }


def with_requirements(text: str, musts: list[tuple[str, str]], duration: float) -> driblet.System:
    for k, (must, share_of_run) in enumerate(musts):
        averaged = f'averaged_over = "{float(share_of_run) * duration:.9e} s"\n' if share_of_run else ""
        text += f'\n[requirements.r{k}]\nmust = "{must}"\nwhen = "throughout"\n{averaged}'
    return driblet.loads(text)


def seconds_per_event(system: driblet.System, duration: float, replicates: int, method: str) -> float:
    start = time.process_time()
    run = driblet.run(
        system,
        replicates=replicates,
        duration=duration,
        sample_every=duration / POINTS,
        threads=1,
        statistics=False,
        method=method,
    )
    return (time.process_time() - start) / float(run.events.sum())


def costs(channels: int, method: str, rounds: int, events: float) -> None:
    text = system_text(channels)
    plain = driblet.loads(text)
    duration = horizon(plain, events)
    replicates = 640 if method == "lanes" else 64
    systems = {name: with_requirements(text, musts, duration) for name, musts in conditions(plain).items()}
    for system in (plain, *systems.values()):  # compiles
        seconds_per_event(system, duration, 8, method)
    ratios: dict[str, list[float]] = {name: [] for name in systems}
    base = []
    for _ in range(rounds):
        for name, system in systems.items():
            without = seconds_per_event(plain, duration, replicates, method)
            base.append(without)
            ratios[name].append(seconds_per_event(system, duration, replicates, method) / without)
    print(f"{channels} channels, {method}: {statistics.median(base) * 1e9:.2f} ns an event without requirements")
    for name, values in ratios.items():
        print(
            f"  {name:26s} {100 * (statistics.median(values) - 1):+6.0f} %   (rounds {min(values):.2f} to {max(values):.2f})"
        )


def compile_times() -> None:
    text = system_text(14)
    plain = driblet.loads(text)
    start = time.process_time()
    driblet.loads(text)
    alone = time.process_time() - start
    musts = [must for several in conditions(plain).values() for must in several] * 4
    start = time.process_time()
    system = with_requirements(text, musts, 1.0)
    read = time.process_time() - start - alone
    start = time.process_time()
    CompiledRequirements.of(system, Network.of(system), 1.0)
    print(f"{len(musts)} conditions: read in {read:.3f} s, compiled in {time.process_time() - start:.3f} s")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--channels", nargs="+", type=int, default=[14])
    parser.add_argument("--methods", nargs="+", default=["lanes", "scalar"])
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--events", type=float, default=20_000, help="per replicate")
    given = parser.parse_args()
    compile_times()
    for channels in given.channels:
        for method in given.methods:
            costs(channels, method, given.rounds, given.events)


if __name__ == "__main__":
    main()
