"""What a sweep costs beyond its simulations: overhead per point, plan, status and table of 10,000 points, two workers, memory.

Usage: python tests/benchmarks/sweeps.py [overhead|dask|plan|workers|memory ...]; without names, all. On an idle machine.
Times are of the whole call with everything compiled; ratios are measured side by side.
"""

from __future__ import annotations

import json
import os
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import driblet
from driblet_analysis.sweep import make_plan, read_plan, work_locally
from driblet_analysis.sweep.shards import Result, write_results
from driblet_analysis.sweep.summary import SummaryColumn
from driblet_analysis.sweep.work import Stop, Worker, warm_up

BASE = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "0.1 fL"
[species]
A = "{copies} copies"
B = "0 copies"
[reactions.turn]
equation = "A <=> B"
K = 2
forward = "{rate} /s"
[readouts]
part = "B / (A + B)"
[run]
replicates = {replicates}
duration = "2 s"
sample_every = "0.5 s"
"""
TEN_THOUSAND = """
"run.seed" = { from = 1, to = 100, points = 100 }
"species.A" = { from = "1 copies", to = "100 copies", points = 100 }
"""


def sweep(folder: Path, axes: str, rate: float = 1.0, replicates: int = 3, copies: int = 10) -> Path:
    """A directory with the plan of an invented isomerisation over the given axes."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "base.toml").write_text(BASE.format(rate=rate, replicates=replicates, copies=copies))
    (folder / "sweep.toml").write_text(f'system = "base.toml"\n[axes]\n{axes}\n')
    make_plan(folder / "sweep.toml", folder / "sweep")
    return folder / "sweep"


def seeds(points: int) -> str:
    """An axis of so many points that are alike."""
    return f'"run.seed" = {{ from = 1, to = {points}, points = {points} }}'


def timed(act: Callable[[], object]) -> float:
    """Wall time of a call, s."""
    started = time.perf_counter()
    act()
    return time.perf_counter() - started


def line(what: str, value: str, asked: str = "") -> None:
    """One row of the report."""
    print(f"{what:<66}{value:>16}   {asked}", flush=True)


def overhead(folder: Path) -> None:
    """Tiny points through one worker, against the same systems through driblet.run alone."""
    points = 300
    directory = sweep(folder, seeds(points))
    plan = read_plan(directory)
    warm_up(plan)
    systems = [plan.system(p) for p in plan.read(range(points))]
    alone = min(
        timed(lambda: [driblet.run(s, threads=1, record="trajectories").close() for s in systems]) for _ in range(2)
    )
    whole = timed(lambda: Worker(plan, range(plan.shards), Stop(), lambda _: None).run())
    line(
        "a point of next to nothing, one worker, everything counted", f"{1e3 * whole / points:.1f} ms", "at most 20 ms"
    )
    line("  of which driblet.run", f"{1e3 * alone / points:.1f} ms")


def dask(folder: Path) -> None:
    """The same points on a LocalCluster of two processes."""
    try:
        from distributed import LocalCluster
    except ImportError:
        line("Dask", "skipped", "needs dask and distributed")
        return
    from driblet_analysis.sweep.dask_cluster import work_on_dask

    points = 300
    first, second = sweep(folder / "first", seeds(2 * points)), sweep(folder / "second", seeds(points))
    with LocalCluster(n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None) as cluster:
        work_on_dask(first, cluster.scheduler_address)
        whole = timed(lambda: work_on_dask(second, cluster.scheduler_address))
    each = 2 * whole / points  # of one of the two workers
    line("the same point on Dask, per worker, connecting and warm-up included", f"{1e3 * each:.1f} ms", "at most 60 ms")


def plan(folder: Path) -> None:
    """10,000 points: planned, then filled with results as a worker writes them, then read."""
    script = (
        "from pathlib import Path; from tests.benchmarks.sweeps import sweep, TEN_THOUSAND; "
        f"sweep(Path({str(folder)!r}), TEN_THOUSAND)"
    )
    line(
        "plan of 10,000 points, the start of Python included",
        f"{timed(lambda: run_python(script)):.1f} s",
        "under 10 s",
    )
    directory = folder / "sweep"
    fill(directory)
    command = [sys.executable, "-m", "driblet", "sweep"]
    status = timed(lambda: subprocess.run([*command, "status", str(directory)], check=True, capture_output=True))
    line("status of it", f"{status:.1f} s", "under 10 s")
    table = [*command, "collect", str(directory), "-o", str(folder / "table")]
    line(
        "collect of it, CSV and HDF5",
        f"{timed(lambda: subprocess.run(table, check=True, capture_output=True)):.1f} s",
        "under 10 s",
    )


def fill(directory: Path) -> None:
    """Results for every point, made up."""
    made = read_plan(directory)
    columns = [SummaryColumn(f"X{i}.mean", "copies") for i in range(40)]
    for shard in range(made.shards):
        points = made.read(made.shard(shard))
        values = {p.number: Result(p.number, p.key, dict.fromkeys(columns, p.number / 3), "", 0.02) for p in points}
        write_results(made, shard, values)


def run_python(script: str) -> str:
    """Run a few lines in a fresh interpreter, at the top of the checkout; returns what it prints."""
    top = Path(__file__).parents[2]
    done = subprocess.run([sys.executable, "-c", script], check=True, capture_output=True, text=True, cwd=top)
    return done.stdout


def workers(folder: Path) -> None:
    """One process against two, on points of about two seconds, in turn; as a user starts them."""
    points = 60
    trial = sweep(folder / "trial", seeds(2), rate=2e5, replicates=16, copies=60)
    warm_up(read_plan(trial))
    rate = 2e5 * 2.0 / (timed(lambda: work_locally(trial, workers=1)) / 2)
    wall, others = {}, {}
    for number in (1, 2):
        directory = sweep(folder / f"{number}", seeds(points), rate=rate, replicates=16, copies=60)
        command = [sys.executable, "-m", "driblet", "sweep", "work", str(directory), "--workers", str(number)]
        before = cpu_of_others()
        wall[number] = timed(lambda command=command: subprocess.run(command, check=True, capture_output=True))  # type: ignore[misc]
        others[number] = cpu_of_others() - before
    what = f"two workers against one, {points} points of {wall[1] / points:.1f} s"
    line(what, f"{wall[1] / wall[2]:.2f}", "at least 1.85")
    line("  CPU seconds other programs took meanwhile, one and two workers", f"{others[1]:.0f}, {others[2]:.0f} s")
    if others[2] > 0.02 * wall[2] and os.cpu_count() == 2:
        left = wall[1] / (wall[2] - others[2] / 2)
        line("  the ratio over the CPU time that they left of two processors", f"{left:.2f}")


def cpu_of_others() -> float:
    """CPU seconds of this machine that neither this process nor its ended children took; 0 where there is no /proc."""
    try:
        ticks = [int(n) for n in Path("/proc/stat").read_text().split("\n", 1)[0].split()[1:9]]
    except OSError:
        return 0.0
    busy = (sum(ticks) - ticks[3] - ticks[4]) / os.sysconf("SC_CLK_TCK")
    own = [resource.getrusage(who) for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return busy - sum(r.ru_utime + r.ru_stime for r in own)


def memory(folder: Path) -> None:
    """Peak memory of `collect` and of `work`, a fresh process each, at few and at many points."""
    found: dict[str, list[float]] = {"work": [], "collect": []}
    for points in (200, 2000):
        directory = sweep(folder / f"{points}", seeds(points))
        for what in found:
            call = {
                "work": f"work_locally({str(directory)!r}, workers=1)",
                "collect": f"collect({str(directory)!r}, {str(folder / f'{points}.h5')!r})",
            }[what]
            script = (
                "import resource, json; from driblet_analysis.sweep import collect, work_locally; "
                f"{call}; print(json.dumps(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss))"
            )
            found[what].append(json.loads(run_python(script)) / 1024)
    for what, (few, many) in found.items():
        line(f"peak memory of {what} at 200 and at 2,000 points", f"{few:.0f}, {many:.0f} MB", "the same")


PARTS = {"overhead": overhead, "dask": dask, "plan": plan, "workers": workers, "memory": memory}


def main() -> None:
    """Run the named parts, all without names."""
    for name in sys.argv[1:] or PARTS:
        with tempfile.TemporaryDirectory() as folder:
            PARTS[name](Path(folder) / name)


if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).parents[2]))
    main()
