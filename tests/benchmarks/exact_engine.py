"""Measures the exact engine against hard-coded C and against itself, side by side in one process tree.

    python -m tests.benchmarks.exact_engine                          # everything, some minutes
    python -m tests.benchmarks.exact_engine ensembles --channels 14 60 --rounds 3
    python -m tests.benchmarks.exact_engine ensembles --file configs/uphill_transfer.toml

Each pair is run in turn, so that a noisy machine is noisy for both, and CPU seconds are counted except where threads are
compared; medians over the rounds are printed. What can be trusted are the ratios. NUMBA_CPU_NAME and NUMBA_CPU_FEATURES
choose another instruction set for the kernels.
"""

from __future__ import annotations

import argparse
import os
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np

import driblet
from driblet.engines.contract import RUNNING, Averages, new_samples, new_state
from driblet.engines.exact import ExactEngine, choose_method
from driblet.engines.recorders import new_averages, new_occupancy, recorders_for, settle_plan
from driblet.network import Network
from tests.benchmarks import hard_coded_c
from tests.benchmarks.networks import ring, system_text

REPLICATES = 640
POINTS = 50
SMALL = [2, 6, 14, 30, 60, 120, 300]
LARGE = [300, 2000, 20_000]


def seconds_of(call: Callable[[], int], clock: Callable[[], float] = time.process_time) -> tuple[int, float]:
    start = clock()
    events = call()
    return events, clock() - start


def rate(measured: list[tuple[int, float]]) -> float:
    """Median of events per second, in millions."""
    return statistics.median(events / seconds for events, seconds in measured) / 1e6


def horizon(system: driblet.System, events: float) -> float:
    """Seconds after which a replicate has fired about that many events."""
    duration = 1e-3
    while True:
        fired = int(driblet.run(system, replicates=1, duration=duration, sample_every=duration).events.sum())
        if fired > min(2000, events / 4):
            return float(duration * events / fired)
        duration *= 4


def ensemble(system: driblet.System, duration: float, threads: int = 1, statistics: bool = True) -> int:
    run = driblet.run(
        system,
        replicates=REPLICATES,
        duration=duration,
        sample_every=duration / (POINTS - 1),
        threads=threads,
        statistics=statistics,
    )
    return int(run.events.sum())


def averages_of(network: Network, factor: np.ndarray, offset: np.ndarray, replicates: int, end_s: float) -> Averages:
    """The distinct monomials, summed as a run does it."""
    both = np.unique(np.hstack([factor, offset]), axis=0)
    chosen = both[:, :3].astype(np.int64)
    settle = settle_plan(network.arrays, chosen, np.zeros((0, 2), dtype=np.int64))
    window = np.array([0, end_s])
    return new_averages(window, chosen, both[:, 3:], replicates, len(network.channels), settle=settle)


def kernel(
    network: Network,
    rates: np.ndarray,
    counts: np.ndarray,
    replicates: int,
    end_s: float,
    points: int = 2,
    what: str = "",
    method: str | None = None,
) -> int:
    """Events of the kernel alone, without loading, readouts and files."""
    n, m = len(network.species), len(network.channels)
    stream = np.random.SeedSequence(1).generate_state(4 * replicates, np.uint64).reshape(replicates, 4)
    state = new_state(np.tile(counts, (replicates, 1)), stream, m)
    samples = new_samples(np.linspace(0, end_s, points), replicates, n, m)
    single = np.column_stack([np.arange(n), np.full((n, 2), n)])
    square = np.column_stack([np.arange(n), np.arange(n), np.full(n, n)])
    averages = occupancy = None
    if what == "moments":
        averages = averages_of(network, np.vstack([single, square]), np.zeros((2 * n, 3)), replicates, end_s)
    if what == "monomials":
        averages = averages_of(network, network.arrays.reactant, network.arrays.offset, replicates, end_s)
    if what == "histograms":
        width = np.full(n, 4, dtype=np.int64)
        occupancy = new_occupancy(np.arange(n), width, 64, (0.0, end_s), replicates, n)
    recorders = recorders_for(state, averages, occupancy)
    engine = ExactEngine(network.arrays, n, method)
    repeated = np.tile(rates, (replicates, 1))
    fired = 0
    while (state.reason == RUNNING).any():
        fired += engine.advance(repeated, state, samples, 1 << 22, recorders)
    return fired


def prepared(system: driblet.System) -> tuple[Network, np.ndarray, np.ndarray]:
    network = Network.of(system)
    omega = system.compartment.omega
    return (
        network,
        network.rates(np.array([omega]))[0],
        np.array([round(s.mean_copies(omega)) for s in system.free_species]),
    )


def ensembles(texts: dict[str, str], rounds: int, events: float) -> None:
    """Ensembles and single trajectories against hard-coded C."""
    print(f"\nM events/s on one core, medians of {rounds}; C: gcc -O3 -march=native -ffast-math, no recording")
    print(
        f"run: driblet.run(statistics=False), {REPLICATES} replicates, {POINTS} points; +stat: with statistics, the default;"
    )
    print("kernel: without loading and file; single: one trajectory; then each over C\n")
    names = ["C", "run", "+stat", "kernel", "single"]
    print(f"{'network':>10}", *(f"{n:>7}" for n in names), "|", *(f"{n:>7}" for n in names[1:]))
    with tempfile.TemporaryDirectory() as folder:
        for name, text in texts.items():
            system = driblet.loads(text)
            network, rates, counts = prepared(system)
            duration = horizon(system, events)
            program = None
            if hard_coded_c.compiler():
                program = hard_coded_c.build(network, rates, counts.astype(float), Path(folder), f"n{len(rates)}")
            calls: dict[str, Callable[[], int]] = {
                "run": lambda s=system, d=duration: ensemble(s, d, statistics=False),  # type: ignore[misc]
                "+stat": lambda s=system, d=duration: ensemble(s, d),  # type: ignore[misc]
                "kernel": lambda a=network, b=rates, c=counts, d=duration: kernel(a, b, c, REPLICATES, d, POINTS),  # type: ignore[misc]
                "single": lambda a=network, b=rates, c=counts, d=duration: kernel(a, b, c, 1, 20 * d, 2),  # type: ignore[misc]
            }
            measured: dict[str, list[tuple[int, float]]] = {key: [] for key in ("C", *calls)}
            for call in calls.values():
                call()
            for k in range(rounds):
                if program:
                    measured["C"].append(hard_coded_c.measure(program, 64, duration, k))
                for key, call in calls.items():
                    measured[key].append(seconds_of(call))
            values = {key: rate(m) if m else float("nan") for key, m in measured.items()}
            ratios = [values[key] / values["C"] for key in calls]
            columns = [*(f"{v:7.1f}" for v in values.values()), "|", *(f"{v:7.2f}" for v in ratios)]
            print(f"{name:>10}", *columns, flush=True)


def large(rounds: int) -> None:
    """Large sparse networks, one trajectory."""
    print("\nlarge sparse networks, one trajectory: channels, M events/s, the same with time integrals,")
    print("time per event against 2000 channels\n")
    found: dict[int, tuple[float, float]] = {}
    for channels in LARGE:
        network, rates = ring(channels)
        counts = np.full(len(network.species), 20.0)
        end = 4_000_000 / kernel(network, rates, counts, 1, 1.0)
        measured = [
            seconds_of(lambda a=network, b=rates, c=counts, e=end: kernel(a, b, c, 1, e)) for _ in range(rounds)
        ]  # type: ignore[misc]
        summed = [
            seconds_of(lambda a=network, b=rates, c=counts, e=end: kernel(a, b, c, 1, e, what="monomials"))  # type: ignore[misc]
            for _ in range(rounds + 1)
        ]
        found[channels] = rate(measured), rate(summed[1:])
    for channels, (speed, with_integrals) in found.items():
        print(f"{channels:>10} {speed:8.2f} {with_integrals:8.2f} {found[2000][0] / speed:6.2f}", flush=True)


def recording(rounds: int) -> None:
    """What recording adds to the kernel, in per cent."""
    print("\nrecording, 14 and 60 channels, per cent added to the time per event of the kernel alone\n")
    kinds = ["", "moments", "monomials", "histograms"]
    print(f"{'network':>10} {'60 events a point':>18} " + " ".join(f"{k:>11}" for k in kinds[1:]))
    for channels in (14, 60):
        network, rates, counts = prepared(driblet.loads(system_text(channels)))
        events, end = 6000, 0.001
        end = events * end / (kernel(network, rates, counts, 64, end) / 64)
        found: dict[str, list[float]] = {k: [] for k in (*kinds, "grid")}
        for _ in range(rounds):
            for kind in found:
                points = events // 60 if kind == "grid" else 2
                fired, seconds = seconds_of(
                    lambda a=network, b=rates, c=counts, e=end, p=points, k=kind: kernel(a, b, c, REPLICATES, e, p, k)  # type: ignore[misc]
                )
                found[kind].append(seconds / fired)
        base = statistics.median(found[""])
        added = {k: 100 * (statistics.median(v) / base - 1) for k, v in found.items()}
        print(f"{channels:>10} {added['grid']:18.0f} " + " ".join(f"{added[k]:11.0f}" for k in kinds[1:]), flush=True)


def threads(rounds: int) -> None:
    """One thread against two."""
    system = driblet.loads(system_text(14))
    duration = horizon(system, 400_000)  # two seconds: of a fifth of one, what is done once takes a third
    found: dict[int, list[tuple[int, float]]] = {1: [], 2: []}
    ensemble(system, duration)
    for _ in range(rounds):
        for count, measured in found.items():
            measured.append(seconds_of(lambda c=count: ensemble(system, duration, c), time.perf_counter))  # type: ignore[misc]
    one, two = rate(found[1]), rate(found[2])
    print(f"\nthreads, 14 channels: {one:.0f} and {two:.0f} M events/s on one and two, ratio {two / one:.2f}")


def memory(channels: int) -> None:
    """Peak memory of a run, in a process of its own."""
    code = (
        "import driblet\n"
        # the greatest resident set of this process alone; what getrusage tells begins with that of its parent
        "def most():\n"
        "    return int(open('/proc/self/status').read().split('VmHWM:')[1].split()[0])\n"
        "from tests.benchmarks.networks import system_text\n"
        f"system = driblet.loads(system_text({channels}))\n"
        "before = most()\n"
        f"driblet.run(system, replicates={REPLICATES}, duration=1e-4, sample_every=1e-4/{POINTS - 1}, threads=1)\n"
        "print(before // 1024, most() // 1024)\n"
    )
    before, after = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    ).stdout.split()
    print(
        f"memory, {channels} channels, {REPLICATES} replicates, {POINTS} points: {before} MB loaded, {after} MB at most"
    )


def start_up() -> None:
    """What a user waits for a command: the first run ever, compiling, then later ones; CPU seconds of the whole process."""
    print("\ncommands, 14 channels, 64 compartments, wall and CPU seconds of the whole process\n")
    with tempfile.TemporaryDirectory() as folder:
        place = Path(folder)
        required = '\n[requirements.kept]\nmust = "S0 > 1"\nwhen = "throughout"\n'
        plain, judged = place / "plain.toml", place / "judged.toml"
        plain.write_text(system_text(14).replace('"1 s"', '"1 ms"').replace("640", "64"))
        judged.write_text(plain.read_text() + required)
        for file in (plain, judged):
            cache = place / f"cache of {file.stem}"
            cache.mkdir()
            environment = {**os.environ, "NUMBA_CACHE_DIR": str(cache)}
            run = str(place / f"{file.stem}.h5")
            for label, words in (
                (
                    "first run, " + ("requirements" if file is judged else "no requirements"),
                    ["run", str(file), "-o", run],
                ),
                ("later run", ["run", str(file), "-o", run, "--force"]),
                ("complete run resumed", ["run", str(file), "-o", run, "--resume"]),
                ("check", ["check", run]),
                ("plot", ["plot", run]),
                ("--help", ["--help"]),
            ):
                before = resource.getrusage(resource.RUSAGE_CHILDREN)
                start = time.perf_counter()
                subprocess.run(
                    [sys.executable, "-m", "driblet", *words], capture_output=True, env=environment, check=False
                )
                wall = time.perf_counter() - start
                after = resource.getrusage(resource.RUSAGE_CHILDREN)
                spent = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
                print(f"{label:>32} {wall:6.2f} {spent:6.2f}", flush=True)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parts = ["ensembles", "large", "recording", "threads", "memory", "start"]
    parser.add_argument("parts", nargs="*", choices=[*parts, []], help="what to measure; everything by default")
    parser.add_argument("--channels", nargs="*", type=int, default=SMALL, help="sizes of the generated networks")
    parser.add_argument("--file", nargs="*", default=[], help="system files to measure instead of generated networks")
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--events", type=float, default=40_000, help="events a replicate")
    given = parser.parse_args()
    wanted = given.parts or parts
    from driblet.ensemble import _cpu_name

    print(f"{_cpu_name()}, numba for {os.environ.get('NUMBA_CPU_NAME', 'this processor')}; "
          f"14 channels run by {choose_method(14, REPLICATES)!r}")  # fmt: skip
    if "ensembles" in wanted:
        texts = {Path(f).stem[:10]: Path(f).read_text() for f in given.file}
        ensembles(texts or {str(m): system_text(m) for m in given.channels}, given.rounds, given.events)
    if "large" in wanted:
        large(given.rounds)
    if "recording" in wanted:
        recording(given.rounds)
    if "threads" in wanted:
        threads(given.rounds)
    if "memory" in wanted:
        memory(14)
        memory(300)
    if "start" in wanted:
        start_up()


if __name__ == "__main__":
    main()
