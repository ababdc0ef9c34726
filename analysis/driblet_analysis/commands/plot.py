"""`driblet plot`: trajectories and histograms of a run."""

from __future__ import annotations

from pathlib import Path

import click

from driblet.commands.screen import console


@click.command(short_help="Draw trajectories and histograms of a run.")
@click.argument("run_file", metavar="RUN.h5", type=click.Path(path_type=Path))
@click.option(
    "-o",
    "--output",
    type=click.Path(path_type=Path),
    help="FIG.png, .pdf or .svg; default: RUN.png beside the run file.",
)
def plot(run_file: Path, output: Path | None) -> None:
    """Draw RUN.h5: each species over time with the spread between compartments, and the end states.

    Where the system has an exact equilibrium law, it is drawn over the histograms.
    """
    from driblet.results import Run
    from driblet_analysis.figures import overview, save

    with Run(run_file) as run:
        path = save(overview(run), output or run_file.with_suffix(".png"))
    console().print(f"written: {path}", markup=False, soft_wrap=True)
