"""`driblet size`: the least or greatest value that meets a requirement in the asked share of compartments."""

from __future__ import annotations

import json
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from driblet.commands.requirement_rows import percents
from driblet.commands.screen import console, number, print_json, table
from driblet.errors import EXIT_CANNOT_ANSWER, EXIT_CHECK_SAYS_NO, EXIT_DONE
from driblet_analysis.commands.cluster_options import WaitingLines, only_with_slurm, slurm_options

if TYPE_CHECKING:
    from driblet_analysis.sizing import Sizing
    from driblet_analysis.sizing_words import Words


@click.command(short_help="Find the least or greatest value that meets a requirement.")
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--vary", "path", required=True, metavar="KEYPATH", help='What to size, such as "species.PCr".')
@click.option("--between", nargs=2, required=True, metavar="LOW HIGH", help='Limits, such as "1 mM" "50 mM".')
@click.option("--requirement", required=True, metavar="NAME", help="One that states its share of compartments.")
@click.option("-o", "--output", type=click.Path(path_type=Path), help="Folder for it; default: FILE's name with -size.")
@click.option(
    "--within",
    type=click.FloatRange(0.001, 1.0),
    default=0.25,
    show_default=True,
    help="Width of the answer's 95 % interval, relative to the value, at which the search stops.",
)
@click.option(
    "--budget",
    type=click.IntRange(500, 10_000_000),
    default=10_000,
    show_default=True,
    help="Most compartments to simulate.",
)
@click.option("--seed", type=click.IntRange(0, 2**63 - 1), help="Seed of the random streams; default: FILE's.")
@click.option("--threads", type=click.IntRange(1, 4096), help="Threads; default: one per core.")
@click.option("--slurm", is_flag=True, help="Have the rounds done by Slurm job arrays, and wait for them.")
@click.option("--dask", metavar="ADDRESS|FILE", help="Have the rounds done by a running Dask cluster.")
@slurm_options
@click.option("--resume", is_flag=True, help="Go on with an interrupted sizing, or with a larger budget.")
@click.option("--force", is_flag=True, help="Replace a sizing in the folder.")
@click.option("--json", "as_json", is_flag=True, help="Print the result as JSON.")
def size(
    file: Path,
    path: str,
    between: tuple[str, str],
    requirement: str,
    output: Path | None,
    within: float,
    budget: int,
    seed: int | None,
    threads: int | None,
    slurm: bool,
    dask: str | None,
    partition: str | None,
    account: str | None,
    limit: str | None,
    memory: str | None,
    throttle: int | None,
    setup: tuple[str, ...],
    resume: bool,
    force: bool,
    as_json: bool,
) -> int:
    """Find the least (where a share falls with the value: the greatest) value of KEYPATH between two limits with which a
    requirement of FILE is met in the share of compartments that it states.

    Compartments are simulated where the answer is undecided, until its interval is narrow enough. Exit status 0: found, or
    met already at the limit; 1: not reachable between the limits; 3: not monotone, or undecided within the budget.
    """
    if force and resume:
        raise click.UsageError("--force starts anew and --resume goes on: give one of them")
    if slurm and dask:
        raise click.UsageError("--slurm and --dask are different ways of working: give one of them")
    given = {
        "--partition": partition, "--account": account, "--time": limit, "--memory": memory, "--throttle": throttle,
        "--setup": setup,
    }  # fmt: skip
    only_with_slurm(slurm, given)
    from driblet_analysis.sizing import ANSWER, FIGURE
    from driblet_analysis.sizing import size as answer
    from driblet_analysis.sizing_question import read_question

    question = read_question(file, path, *between, requirement, within, budget, seed)
    folder = output or Path(f"{file.stem}-size")
    simulate = None
    with _bar(budget) as (update, tell):
        if slurm or dask:
            from driblet_analysis.sizing_cluster import simulate_on_cluster
            from driblet_analysis.sweep.slurm import Options, check_options

            options = Options(partition, account, limit, memory, 1, throttle, 1, setup)
            check_options(options)
            simulate = simulate_on_cluster(folder, dask, options, tell)
        result = answer(
            question, folder, resume=resume, force=force, simulate=simulate, threads=threads, on_progress=update
        )
    from driblet_analysis.figures import save
    from driblet_analysis.sizing_figure import sizing_figure
    from driblet_analysis.sizing_page import write_page
    from driblet_analysis.sizing_words import as_facts, words_of
    from driblet_analysis.sweep.files import write_text

    words = words_of(result)
    save(sizing_figure(result), folder / FIGURE)
    page = write_page(result, words)
    facts = {"file": str(file), "title": question.system.title, **as_facts(result, words)}
    write_text(folder / ANSWER, json.dumps(_plain(facts), indent=2, ensure_ascii=False) + "\n")
    if as_json:
        print_json(facts)
    else:
        _print(result, words, page)
    return _status(result)


def _plain(value: Any) -> Any:
    """Without numbers that JSON does not have."""
    import math

    if isinstance(value, dict):
        return {k: _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _status(result: Sizing) -> int:
    from driblet_analysis.sizing_parts import ALREADY_MET, FOUND, NOT_REACHABLE

    if result.finding.status in (FOUND, ALREADY_MET):
        return EXIT_DONE
    return EXIT_CHECK_SAYS_NO if result.finding.status == NOT_REACHABLE else EXIT_CANNOT_ANSWER


def _print(result: Sizing, words: Words, page: Path) -> None:
    out = console()
    out.print(result.question.system.title, style="bold", markup=False)
    out.print(words.headline, markup=False)
    if words.fresh is not None:
        out.print(
            f"in {words.compartments} new compartments at {result.question.text(result.finding.at)}: met in "
            f"{percents(words.fresh)} %",
            markup=False,
        )
    if words.loads:
        rows = [[one.name, number(one.copies), number(one.concentration_M * 1e6)] for one in words.loads]
        out.print(table("at this value, in the median compartment", ["", "mean copies", "µM"], rows))
    if words.failing:
        out.print(f"what still fails: {words.failing}", markup=False)
    if words.traits:
        rows = [
            [
                f"{t.quantity} ({t.unit})",
                number(t.failing),
                number(t.meeting),
                f"{t.effect:+.2f}".replace("-", "−"),
                number(t.p, 2),
            ]
            for t in words.traits
        ]
        columns = ["at the start", "failing, median", "meeting, median", "effect, −1 to 1", "corrected p"]
        out.print(table("what failing compartments had in common", columns, rows))
    for line in words.details:
        out.print(line, markup=False, style="dim")
    out.print(f"written: {page} and what it rests on beside it", markup=False, soft_wrap=True)
    out.print(words.caution, style="dim")


@contextmanager
def _bar(budget: int) -> Iterator[Any]:
    """A progress line on a terminal; yields what takes the reports, and what takes words on what is waited for."""
    if not sys.stderr.isatty():
        yield None, WaitingLines()
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn

    bar = Progress(
        TextColumn("sizing"),
        BarColumn(complete_style="blue", finished_style="blue"),
        TextColumn("{task.completed:,} compartments of at most {task.total:,}, at {task.fields[value]}"),
        TextColumn("{task.fields[waiting]}"),
        console=Console(file=sys.stderr),
        transient=True,
    )
    with bar:
        task = bar.add_task("", total=budget, value="", waiting="")
        yield (
            lambda progress: bar.update(task, completed=progress.done, value=progress.value),
            lambda text: bar.update(task, waiting=f"waiting: {text}" if text else ""),
        )
