"""`driblet lifetime`: how long requirements hold, in how many compartments, and what failing ones had in common."""

from __future__ import annotations

import math
from pathlib import Path
from typing import TYPE_CHECKING

import click

from driblet.commands.requirement_rows import percent, percents, requirement_notes, requirement_table
from driblet.commands.screen import CAUTION, console, duration, number, print_json, table
from driblet.errors import EXIT_CHECK_SAYS_NO, EXIT_DONE

if TYPE_CHECKING:
    from rich.console import Console

    from driblet.survival import Interval
    from driblet_analysis.lifetime import Lifetime, Lifetimes


@click.command(short_help="Tell how long requirements hold, and in how many compartments.")
@click.argument("run_file", metavar="RUN.h5", type=click.Path(path_type=Path))
@click.option("-o", "--output", type=click.Path(path_type=Path), help="Also draw it: FIG.png, .pdf or .svg.")
@click.option("--json", "as_json", is_flag=True, help="Print the result as JSON.")
def lifetime(run_file: Path, output: Path | None, as_json: bool) -> int:
    """Tell how long the requirements of RUN.h5 hold, in how many of its compartments, and which failed first.

    Shares carry Wilson's 95 % interval, times that of a Kaplan-Meier curve; what failing compartments started with is
    ranked by how far it sets them apart. Exit status 0: every stated share is reached; 1: one is not; 3: no requirement was
    stated.
    """
    from driblet.results import Run
    from driblet_analysis.lifetime import as_facts, lifetimes

    with Run(run_file) as run:
        result = lifetimes(run)
        title, complete = run.system.title, run.complete
        if output is not None:
            from driblet_analysis.figures import save
            from driblet_analysis.lifetime_figure import lifetime_figure

            output = save(lifetime_figure(run, result), output)
    if as_json:
        print_json({"file": str(run_file), "title": title, "complete": complete, **as_facts(result)})
    else:
        _print(result, title, complete)
        if output is not None:
            console().print(f"written: {output}", markup=False, soft_wrap=True)
    return EXIT_DONE if result.reached else EXIT_CHECK_SAYS_NO


def _print(result: Lifetimes, title: str, complete: bool) -> None:
    out = console()
    rows = [one.share for one in result.each]
    state = "" if complete else " (interrupted run)"
    out.print(title, style="bold", markup=False)
    out.print(f"{result.compartments} compartments{state}", markup=False)
    out.print(requirement_table(rows))
    for note in requirement_notes(rows):
        out.print(f"note: {note}", markup=False)
    if len(rows) > 1:
        out.print(f"all of them at once: {percents(result.all_met)} % of compartments", markup=False)
        first = [[one.share.name, str(one.share.failing), str(one.failed_first)] for one in result.each]
        out.print(table("failing compartments", ["requirement", "failed in", "failed first in"], first))
    for one in result.each:
        _print_one(out, one)
    out.print(CAUTION, style="dim")


def _print_one(out: Console, one: Lifetime) -> None:
    if one.survival is not None and len(one.survival.time):
        verb = "failed" if one.requirement.when == "throughout" else "succeeded"
        if any(not math.isinf(q.time_s.low) for q in one.quantiles):
            rows = [[f"{percent(q.share)} %", *_times(q.time_s)] for q in one.quantiles]
            title = f"{one.share.name}: time by which a share of compartments has {verb}"
            out.print(table(title, ["share", "time", "from", "to"], rows))
        else:
            least = percent(min(q.share for q in one.quantiles))
            out.print(f"{one.share.name}: fewer than {least} % of compartments {verb} in its span", markup=False)
    if one.traits:
        rows = [
            [
                f"{t.quantity} ({t.unit})",
                number(t.failing),
                number(t.meeting),
                f"{t.effect:+.2f}".replace("-", "−"),
                number(t.p, 2),
            ]
            for t in one.traits
        ]
        columns = ["at the start", "failing, median", "meeting, median", "effect, −1 to 1", "corrected p"]
        out.print(table(f"{one.share.name}: what failing compartments had in common", columns, rows))
    elif one.share.failing:
        out.print(
            f"{one.share.name}: nothing told about what failing compartments had in common: {one.traits_missing}",
            markup=False,
        )


def _times(interval: Interval) -> list[str]:
    def text(seconds: float) -> str:
        if seconds == 0.0:
            return "at once"
        return "–" if math.isnan(seconds) else "later" if math.isinf(seconds) else duration(seconds)

    return [text(interval.value), text(interval.low), text(interval.high)]
