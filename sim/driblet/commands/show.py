"""`driblet show`: what a run file holds."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click
import numpy as np

from driblet.commands.engine_lines import engine_lines
from driblet.commands.screen import console, duration, number, print_json, species_rows, table

# of the provenance: told in sentences
_SAID_ABOVE = ("treatments", "engine_pilot", "engine_why", "error_estimate")


@click.command(short_help="Print what a run file holds.")
@click.argument("run_file", metavar="RUN.h5", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the same facts as JSON.")
@click.option("--system", "system_text", is_flag=True, help="Print the system file kept inside, and nothing else.")
def show(run_file: Path, as_json: bool, system_text: bool) -> None:
    """Print what RUN.h5 holds: system, settings, species, readouts and how it was made.

    An interrupted run is read from its parts.
    """
    from driblet.engines.contract import REASONS
    from driblet.results import Run

    with Run(run_file) as run:
        if system_text:
            print(run.system.text, end="")
            return
        final = run.final_counts()
        in_the_end = species_rows(run.system, final)
        stated = [reaction.name for reaction in run.system.stated]
        lines = engine_lines(run)
        codes, times = np.unique(run.end_reason, return_counts=True)
        facts: dict[str, Any] = {
            "file": str(run_file),
            "title": run.system.title,
            "replicates": len(run.replicate),
            "replicates_planned": run.replicates_planned,
            "complete": run.complete,
            "duration_s": float(run.time_s[-1]),
            "samples": len(run.time_s),
            "events": int(run.events.sum()),
            "ended": {REASONS[int(code)]: int(n) for code, n in zip(codes, times, strict=True)},
            "median_volume_L": float(np.median(run.volume_L)) if len(run.volume_L) else None,
            "species": [
                {
                    "name": name,
                    "mean_at_end": final[:, i].mean(),
                    "sd_at_end": final[:, i].std(ddof=1) if len(final) > 1 else None,
                }
                for i, name in enumerate(run.species)
            ],
            "reactions": list(run.reactions),
            "readouts": run.readout_units,
            "treatments": run.treatments,
            "engine": run.engine,
            "leaping": {name: float(values.mean()) for name, values in run.leaping.items()},
            "provenance": {k: v for k, v in run.provenance.items() if k != "readout_units"},
        }
    if as_json:
        print_json(facts)
        return
    out = console()
    out.print(facts["title"], style="bold")
    state = "complete" if facts["complete"] else f"interrupted, {facts['replicates_planned']} planned"
    out.print(
        f"{facts['replicates']} compartments ({state}), {facts['samples']} samples over "
        f"{duration(facts['duration_s'])}, {facts['events']:,} reaction events",
        markup=False,
    )
    for reason, n in facts["ended"].items():
        out.print(f"ended because {reason}: {n}", markup=False)
    rows = [
        [label, number(copies.mean()), number(copies.std(ddof=1)) if len(copies) > 1 else "–"]
        for label, copies in in_the_end
    ]
    out.print(table("copies at the end", ["species", "mean", "sd"], rows))
    if facts["readouts"]:
        out.print("readouts: " + ", ".join(f"{k} ({v})" for k, v in facts["readouts"].items()), markup=False)
    out.print("reactions: " + ", ".join(stated), markup=False)
    for line in lines:
        out.print(line, markup=False)
    rows = [
        [k.replace("_", " "), f"{v:.6g}" if isinstance(v, float) else str(v)]
        for k, v in facts["provenance"].items()
        if k not in _SAID_ABOVE
    ]
    if facts["treatments"]:
        rows.append(["treatments", ", ".join(f"{name} {how}" for name, how in facts["treatments"].items())])
    out.print(table("how it was made", ["", ""], rows, left=2))
