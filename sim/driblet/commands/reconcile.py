"""`driblet reconcile`: the nearest energies that close every cycle."""

from __future__ import annotations

from pathlib import Path

import click
import numpy as np

from driblet.commands.screen import console, number, print_json, table
from driblet.errors import one_problem

DEFAULT_SD = 1.0  # kJ/mol, for energies without a stated one: all then move alike


@click.command(short_help="Show the nearest energies that close every cycle.")
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the changes as JSON.")
def reconcile(file: Path, as_json: bool) -> None:
    """Show the energies nearest to those in FILE that sum to zero along every cycle.

    Weighted least squares: an energy moves in proportion to the square of its sd (energy = { value = "...", sd = "..." };
    1 kJ/mol where none is stated). FILE is not changed; copy the new values into it.
    """
    from driblet.energetics.cycles import reconciled, unclosed_cycles
    from driblet.system.build import describe_cycle, load, stoichiometric_matrix

    system = load(file, closure=False)
    reactions = [r for r in system.stated if r.dG0_kJ_per_mol is not None]
    matrix = stoichiometric_matrix([s.name for s in system.species], reactions)
    old = np.array([r.dG0_kJ_per_mol for r in reactions], dtype=float)
    sd = np.array([DEFAULT_SD if r.energy_sd_kJ_per_mol is None else r.energy_sd_kJ_per_mol for r in reactions])
    try:
        new = reconciled(matrix, old, sd)
    except ValueError as error:
        raise one_problem(str(file), "reactions", f"{error}; give one of them an sd above zero") from error
    names = [r.name for r in reactions]
    open_cycles = unclosed_cycles(matrix, old)
    facts = {
        "cycles": [{"cycle": describe_cycle(c.reactions, names), "sum_kJ_per_mol": c.excess} for c in open_cycles],
        "energies": [
            {"name": n, "stated_kJ_per_mol": a, "closed_kJ_per_mol": b, "sd_kJ_per_mol": s}
            for n, a, b, s in zip(names, old.tolist(), new.tolist(), sd.tolist(), strict=True)
        ],
    }
    if as_json:
        print_json(facts)
        return
    out = console()
    if not open_cycles:
        out.print("every cycle closes; nothing to change", markup=False)
        return
    for cycle in open_cycles:
        out.print(f"open: {describe_cycle(cycle.reactions, names)} sums to {cycle.excess:+.4g} kJ/mol", markup=False)
    rows = [
        [n, f"{a:.6f}", f"{b:.6f}", f"{b - a:+.4f}", number(s)] for n, a, b, s in zip(names, old, new, sd, strict=True)
    ]
    out.print(table("energies, kJ/mol", ["reaction", "stated", "closed", "change", "sd"], rows))
