"""`driblet plot`: trajectories and histograms of a run, results of a sweep over its axes."""

from __future__ import annotations

from pathlib import Path

import click

from driblet.commands.screen import console


@click.command(short_help="Draw trajectories and histograms of a run, or the table of a sweep.")
@click.argument("run_file", metavar="RUN.h5|TABLE", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    help="FIG.png, .pdf or .svg; default: RUN.png beside the run file.",
)
@click.option("--show", metavar="NAME", help="Table: the requirement, readout or species to draw.")
@click.option("--along", metavar="KEY", help="Table: the axis along the page.")
@click.option("--by", metavar="KEY", help="Table: the axis in colours, or up a map.")
@click.option("--at", multiple=True, metavar="KEY=VALUE", help="Table: only points with this value; may be repeated.")
def plot(
    run_file: Path, output: Path | None, show: str | None, along: str | None, by: str | None, at: tuple[str, ...]
) -> None:
    """Draw RUN.h5: each species over time with the spread between compartments, and the end states.

    Where the system has an exact equilibrium law, it is drawn over the histograms.

    Or draw TABLE, which `driblet sweep collect` wrote: lines with intervals along one axis, a map over two, with lines where
    a requirement is met in a stated share.
    """
    from driblet_analysis.sweep.table import is_table, read_table

    if is_table(run_file):
        from driblet_analysis.figures import save
        from driblet_analysis.sweep_figure import sweep_figure

        values = dict(_pair(text) for text in at)
        figure = sweep_figure(read_table(run_file), show, along, by, values)
        path = save(figure, output or run_file.with_suffix(".png"))
        console().print(f"written: {path}", markup=False, soft_wrap=True)
        return
    if show or along or by or at:
        raise click.UsageError("--show, --along, --by and --at go with the table of a sweep")
    from driblet.results import Run
    from driblet_analysis.figures import overview, save

    with Run(run_file) as run:
        path = save(overview(run), output or run_file.with_suffix(".png"))
    console().print(f"written: {path}", markup=False, soft_wrap=True)


def _pair(text: str) -> tuple[str, str]:
    key, sign, value = text.partition("=")
    if not sign or not key.strip() or not value.strip():
        raise click.UsageError(f'--at: "{text}" is not KEY=VALUE, such as species.ATP=1')
    return key.strip(), value.strip()
