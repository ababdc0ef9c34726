"""`driblet export`: a network as JSON, a run's trajectories as CSV."""

from __future__ import annotations

import csv
import sys
from pathlib import Path
from typing import TextIO

import click
import numpy as np

from driblet.commands.screen import print_json
from driblet.errors import one_problem


@click.command(short_help="Print a network as JSON, or a run's trajectories as CSV.")
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--as", "form", required=True, type=click.Choice(["json", "csv"]), help="json of a system, csv of a run.")
@click.option("-o", "--output", type=click.Path(path_type=Path), help="Write here instead of the screen.")
@click.option("--force", is_flag=True, help="Replace an existing output.")
def export(file: Path, form: str, output: Path | None, force: bool) -> None:
    """Print FILE in a form other programs read.

    --as json takes a system file and prints the network as an engine sees it: propensity = rate times the falling
    factorials of the reactants' counts. --as csv takes a run file and prints one row per compartment and time.
    """
    if output is not None and output.exists() and not force:
        raise one_problem(str(output), "", "exists already; --force replaces it")
    if form == "json":
        facts = network_facts(file)
        if output is None:
            print_json(facts)
        else:
            import json

            _write_text(output, json.dumps(facts, indent=2, ensure_ascii=False) + "\n")
        return
    from driblet.results import Run

    with Run(file) as run:
        if output is None:
            _rows(run, sys.stdout)
            return
        temporary = output.with_name(output.name + ".tmp")
        try:
            with temporary.open("w", newline="", encoding="utf-8") as stream:
                _rows(run, stream)
            temporary.replace(output)
        except OSError as error:
            raise one_problem(str(output), "", f"cannot be written: {(error.strerror or '').lower()}") from error
        finally:
            temporary.unlink(missing_ok=True)


def network_facts(file: Path) -> dict[str, object]:
    """The network of a system file as plain values, rates in the median compartment (1/s)."""
    from driblet.network import FORWARD, Network
    from driblet.system import load

    system = load(file)
    network = Network.of(system)
    omega = system.compartment.omega
    rates = network.rates(np.array([omega]))[0]
    names = network.species
    return {
        "title": system.title,
        "volume_L": system.compartment.volume_L,
        "species": list(names),
        "initial": [
            s.mean_copies(omega) if s.loading == "poisson" else float(round(s.mean_copies(omega)))
            for s in system.free_species
        ],
        "channels": [
            {
                "reaction": network.reactions[c.reaction],
                "direction": "forward" if c.direction == FORWARD else "backward",
                "reactants": {names[i]: number for i, number in c.reactants},
                "change": {names[i]: amount for i, amount in c.change},
                "rate": float(rates[j]),
            }
            for j, c in enumerate(network.channels)
        ],
        "additions": [
            {"time_s": a.at_s, "species": a.species, "copies": a.mean_copies(omega)} for a in system.additions
        ],
    }


def _write_text(path: Path, text: str) -> None:
    try:
        path.write_text(text, encoding="utf-8")
    except OSError as error:
        raise one_problem(str(path), "", f"cannot be written: {(error.strerror or '').lower()}") from error


def _rows(run, stream: TextIO) -> None:  # type: ignore[no-untyped-def]
    writer = csv.writer(stream, lineterminator="\n")
    readouts = list(run.readout_units)
    heads = [f"{name} ({unit})" if unit != "1" else name for name, unit in run.readout_units.items()]
    writer.writerow(["replicate", "time (s)", *run.species, *heads])
    values = {name: run.readout(name) for name in readouts}
    for row, replicate in enumerate(run.replicate):
        for k, time_s in enumerate(run.time_s):
            extra = ["" if np.isnan(values[n][row, k]) else repr(float(values[n][row, k])) for n in readouts]
            writer.writerow([int(replicate), repr(float(time_s)), *run.counts[row, k].tolist(), *extra])
