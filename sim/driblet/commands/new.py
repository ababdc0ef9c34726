"""`driblet new`: a commented starter file, or a copy of a ready system."""

from __future__ import annotations

from pathlib import Path

import click

import driblet
from driblet.commands.screen import console, table
from driblet.errors import one_problem

STARTER = """\
# A starter file for driblet. Change the numbers, then:
#   driblet audit THIS_FILE                what the energies imply, before anything runs
#   driblet run THIS_FILE -o run.h5        every molecule, compartment by compartment
#   driblet check run.h5                   the counts against the exact equilibrium
# Every quantity is a text: a number, a space, a unit.
title = "My first compartment"

[conditions]                          # conditions at which the energies below hold
temperature = "25 degC"
pH = 7.0                              # recorded, as are pMg and ionic_strength

[compartments.vesicle]
diameter = { median = "120 nm", cv = 0.10 }   # lognormal over compartments; or volume = "1 aL"
wall = "4 nm"                         # the diameter is then the outer one

[species]                             # a concentration, or a number such as "20 copies"
ATP     = "1 mM"
ADP     = "0.1 mM"
sugar   = "0.5 mM"
sugarP  = "0 copies"
# Pi    = { amount = "5 mM", held = true }    # held at a fixed concentration by a large outside

[reactions.transfer]
equation = "ATP + sugar <=> ADP + sugarP"     # "->" is one way and needs one_way = "the reason"
energy   = "-5 kJ/mol"                # standard transformed Gibbs energy; or K = 7.5
forward  = "2000 /M/s"                # the backward rate constant follows from the energy

[readouts]                            # + - * / ( ), counts, conc(X), gibbs(reaction)
charged = "sugarP / (sugar + sugarP)"
dG      = "gibbs(transfer)"

# [requirements.enough]               # what must hold, when, in which share of compartments; `driblet lifetime run.h5`
# must = "charged > 0.5"              # < > <= >=, and, or, not; conc(X) and gibbs(r) compare with a unit: "dG < -2 kJ/mol"
# when = "at end"                     # or "throughout", "once", "on average"; during = ["1 s", "5 s"]
# share = 0.95

[run]
replicates = 200                      # compartments
duration = "5 s"
sample_every = "0.05 s"
loading = "poisson"                   # or "nearest": the rounded mean in every compartment
seed = 1
"""


def ready_systems() -> dict[str, Path]:
    """The systems that come with driblet: name -> file, from the wheel or, in a checkout, from configs/."""
    package = Path(driblet.__file__).parent
    for folder in (package / "configs", package.parents[1] / "configs"):
        if folder.is_dir():
            return {path.stem: path for path in sorted(folder.glob("*.toml"))}
    return {}


@click.command(short_help="Write a commented starter file, or copy a ready system.")
@click.argument("file", required=False, type=click.Path(path_type=Path))
@click.option("--like", metavar="NAME", help="Copy this ready system instead of the starter.")
@click.option("--list", "listing", is_flag=True, help="List the ready systems.")
@click.option("--force", is_flag=True, help="Replace an existing file.")
def new(file: Path | None, like: str | None, listing: bool, force: bool) -> None:
    """Write a commented system file to FILE and name the commands that come next."""
    ready = ready_systems()
    out = console()
    if listing:
        from driblet.system import load

        rows = [[name, load(path).title] for name, path in ready.items() if _is_system(path)]
        out.print(table("ready systems: driblet new FILE --like NAME", ["name", "what it is"], rows, left=2))
        return
    if file is None:
        raise click.UsageError("a FILE to write is needed, such as my_system.toml; or --list")
    if like is not None and like not in ready:
        raise one_problem("command line", "--like", f'"{like}" is not a ready system; known: {", ".join(ready)}')
    if file.exists() and not force:
        raise one_problem(str(file), "", "exists already; --force replaces it")
    text = ready[like].read_text("utf-8") if like is not None else STARTER
    try:
        file.write_text(text, encoding="utf-8")
    except OSError as error:
        raise one_problem(str(file), "", f"cannot be written: {(error.strerror or '').lower()}") from error
    out.print(f"written: {file}\nnext:    driblet audit {file}", markup=False)


def _is_system(path: Path) -> bool:
    return "[species]" in path.read_text("utf-8")
