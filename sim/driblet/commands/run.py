"""`driblet run`: simulate an ensemble into a run file."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import click

from driblet.commands.engine_lines import engine_lines
from driblet.commands.requirement_rows import readout_notes, requirement_notes, requirement_table
from driblet.commands.screen import console, duration, number, species_rows, table, time_option
from driblet.commands.treatment_lines import treatment_lines


@click.command(short_help="Simulate an ensemble of compartments into a run file.")
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "-o", "--output", type=click.Path(path_type=Path), help="The run file; default: FILE's name with .h5, here."
)
@click.option("--replicates", type=click.IntRange(1, 10_000_000), help="How many compartments.")
@click.option("--duration", callback=time_option, metavar="TIME", help='Simulated time, such as "20 min".')
@click.option("--sample-every", callback=time_option, metavar="TIME", help='Recording interval, such as "5 s".')
@click.option("--seed", type=click.IntRange(0, 2**63 - 1), help="Seed of the random streams.")
@click.option("--threads", type=click.IntRange(1, 4096), help="Threads; default: one per core.")
@click.option("--engine", metavar="NAME", help='"exact", "leap", or "auto", which takes what pays and says why.')
@click.option(
    "--leap-tolerance", type=float, help="Expected change of a reaction's gross rate in one leap; 0.01 is usual."
)
@click.option("--stop-when-decided", is_flag=True, help="End a compartment when every requirement is decided.")
@click.option("--method", metavar="NAME", help='Kernel of exact runs: "lanes" or "scalar"; left out, the faster one.')
@click.option("--treatment", metavar="HOW", help='Enzymes: "elementary", "lumped", "auto", or "kinase=lumped,...".')
@click.option("--force", is_flag=True, help="Replace an existing run file or its parts.")
@click.option("--resume", is_flag=True, help="Go on with an interrupted run; a complete one is left as it is.")
def run(
    file: Path,
    output: Path | None,
    replicates: int | None,
    duration: float | None,
    sample_every: float | None,
    seed: int | None,
    threads: int | None,
    engine: str | None,
    method: str | None,
    leap_tolerance: float | None,
    stop_when_decided: bool,
    treatment: str | None,
    force: bool,
    resume: bool,
) -> None:
    """Simulate the system in FILE, molecule by molecule, and write a run file.

    Options replace what FILE says under [run]. Ctrl-C keeps the replicates that are finished; --resume goes on.
    """
    if force and resume:
        raise click.UsageError("--force starts anew and --resume goes on: give one of them")
    from driblet.ensemble import run as simulate
    from driblet.system import load
    from driblet.treatments import read_treatments

    system = load(file)
    output = output or Path(file.with_suffix(".h5").name)
    with _ProgressLine() as line:
        result = simulate(
            system,
            output,
            replicates=replicates,
            duration=duration,
            sample_every=sample_every,
            seed=seed,
            engine=engine,
            method=method,
            leap_tolerance=leap_tolerance,
            treatment=None if treatment is None else read_treatments(treatment),
            threads=threads,
            stop_when_decided=stop_when_decided,
            resume=resume,
            force=force,
            on_progress=line.update,
        )
    _summary(result, line.seconds)


class _ProgressLine:
    """A progress bar with rate and estimate, on a terminal only; it also remembers the time taken."""

    def __init__(self) -> None:
        self.seconds: float | None = None
        self._bar: Any = None

    def __enter__(self) -> _ProgressLine:
        if sys.stderr.isatty():
            from rich.console import Console
            from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

            self._bar = Progress(
                TextColumn("simulating"),
                BarColumn(complete_style="blue", finished_style="blue"),
                TextColumn("{task.percentage:3.0f} %  {task.fields[detail]}"),
                TimeRemainingColumn(compact=True),
                console=Console(file=sys.stderr),
                transient=True,
            )
            self._bar.start()
            self._task = self._bar.add_task("", total=1.0, detail="")
        return self

    def update(self, progress) -> None:  # type: ignore[no-untyped-def]
        self.seconds = progress.seconds
        if self._bar is not None:
            rate = progress.events / progress.seconds if progress.seconds else 0.0
            detail = f"{progress.finished}/{progress.replicates} compartments, {rate / 1e6:.1f} M events/s"
            self._bar.update(self._task, completed=progress.fraction, detail=detail)

    def __exit__(self, *_: object) -> None:
        if self._bar is not None:
            self._bar.stop()


def _summary(result, seconds: float | None) -> None:  # type: ignore[no-untyped-def]
    out = console()
    system = result.system
    events = int(result.events.sum())
    how = ", ".join(dict.fromkeys((result.engine, str(result.provenance.get("method", result.engine)))))
    out.print(system.title, style="bold")
    if seconds is None:
        spread = "complete already; nothing was simulated anew"
    else:
        spread = f"{duration(seconds)} of wall time, {events / max(seconds, 1e-9) / 1e6:.1f} M events/s"
    out.print(
        f"{len(result.replicate)} compartments, {duration(float(result.time_s[-1]))} each, "
        f"{events:,} reaction events ({how}); {spread}",
        markup=False,
    )
    final = result.final_counts()
    rows = [
        [
            label,
            number(copies.mean()),
            number(copies.std(ddof=1)) if len(final) > 1 else "–",
            number(float(copies.min())),
            number(float(copies.max())),
        ]
        for label, copies in species_rows(system, final)
    ]
    out.print(table("copies at the end, over compartments", ["species", "mean", "sd", "least", "most"], rows))
    if system.requirements:
        from driblet.shares import shares

        judged = shares(result)
        out.print(requirement_table(judged))
        for note in requirement_notes(judged):
            out.print(f"note: {note}", markup=False)
    for line in (*treatment_lines(result.lumping, leaps=bool(result.leaping)), *engine_lines(result)):
        out.print(line, markup=False)
    for note in (*readout_notes(result), *getattr(system, "warnings", ())):
        out.print(f"note: {note}", markup=False)
    out.print(f"written: {result.name}", markup=False)
