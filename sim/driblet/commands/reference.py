"""`driblet reference`: the table of formation energies, measured constants and buffers, with sources."""

from __future__ import annotations

import math
from difflib import get_close_matches
from typing import Any

import click

from driblet.commands.screen import console, number, print_json, table


@click.command(short_help="List or explain the energies of the reference table.")
@click.argument("name", required=False)
@click.option("--json", "as_json", is_flag=True, help="Print the same facts as JSON.")
def reference(name: str | None, as_json: bool) -> None:
    """List the reference table that `energy = "reference"` uses, or explain one entry: NAME is a reactant or an alias.

    Energies of formation are those of each ionic and magnesium-bound species at 25 degC and zero ionic strength; what they
    give at the conditions of a system is shown by `driblet audit`. Measured constants stand beside the computed ones.
    """
    from driblet.energetics.reference import reference_table

    facts = reference_facts(reference_table(), name)
    if as_json:
        print_json(facts)
    elif name is None:
        _print_list(facts)
    else:
        _print_entry(facts)


def reference_facts(known: Any, name: str | None) -> dict[str, Any]:
    """The table, or the entry `name` and the measured constants it takes part in; raises InputError for another name."""
    from driblet.errors import one_problem

    reactants = list(known.reactants.values())
    measured = list(known.measured)
    if name is not None:
        found = known.find(name)
        if found is None:
            names = [n for r in reactants for n in (r.key, *r.aliases)]
            close = get_close_matches(name, names, 3, 0.5) or get_close_matches(name.lower(), names, 3, 0.5)
            choices = next((keys for n, keys in known.ambiguous.items() if n.lower() == name.lower()), None)
            hint = f"it may mean {' or '.join(choices)}" if choices else (
                f"did you mean {' or '.join(close)}?" if close else "`driblet reference` lists all")  # fmt: skip
            raise one_problem("reference", name, f"is not an entry of the table; {hint}")
        reactants = [found]
        measured = [m for m in measured if found.key in m.change]
    facts: dict[str, Any] = {
        "reactants": [_reactant_facts(known, r) for r in reactants],
        "measured": [_measured_facts(known, m) for m in measured],
    }
    if name is None:
        facts["buffers"] = [{"name": n, **b._asdict()} for n, b in known.buffers.items()]
    return facts


def _reactant_facts(known: Any, reactant: Any) -> dict[str, Any]:
    from driblet.energetics.conditions import REFERENCE_TEMPERATURE
    from driblet.quantities import thermal_energy

    decade = thermal_energy(REFERENCE_TEMPERATURE) * math.log(10)
    by_composition = {(s.hydrogens, s.magnesiums): s for s in reactant.species}
    binding = []
    for s in reactant.species if reactant.key != "Mg" else ():
        bare = by_composition.get((s.hydrogens - 1, s.magnesiums))
        if bare is not None:
            binding.append({"binds": "H", "to_charge": bare.charge, "pK": (bare.energy - s.energy) / decade})
        bare = by_composition.get((s.hydrogens, s.magnesiums - 1))
        if bare is not None:
            log_K = (bare.energy + known.magnesium_ion.energy - s.energy) / decade
            binding.append({"binds": "Mg", "to_charge": bare.charge, "log_K": log_K})
    return {
        "key": reactant.key,
        "name": reactant.name,
        "aliases": list(reactant.aliases),
        "atoms": dict(reactant.atoms),
        "species": [
            {
                "charge": s.charge,
                "hydrogens": s.hydrogens,
                "magnesiums": s.magnesiums,
                "energy_kJ_per_mol": s.energy,
                "enthalpy_kJ_per_mol": s.enthalpy,
            }
            for s in known.stated[reactant.key].species
        ],
        "enthalpy_estimated": reactant.entropy_sd > 0,
        "binding": binding,
        "sd_kJ_per_mol": reactant.sd_kJ_per_mol,
        "source": reactant.source,
        "note": reactant.note,
    }


def _measured_facts(known: Any, m: Any) -> dict[str, Any]:
    terms = known.terms(m.change)
    RT = m.conditions.RT_kJ_per_mol
    computed = math.exp(-known.from_formation(terms, m.conditions) / RT)
    left = [(key, -n) for key, n in m.change.items() if n < 0]
    right = [(key, n) for key, n in m.change.items() if n > 0]
    sides = [" + ".join((f"{n} " if n > 1 else "") + key for key, n in side) for side in (left, right)]
    return {
        "reaction": " <=> ".join(sides),
        "conditions": str(m.conditions),
        "assumed": m.assumed,
        "K_measured": m.K,
        "K_computed": computed,
        "log10_computed_over_measured": math.log10(computed / m.K),
        "used_for_energy_reference": m.wins,
        "why": m.why,
        "source": m.source,
    }


def _print_list(facts: dict[str, Any]) -> None:
    out = console()
    rows = [[r["key"], r["name"], ", ".join(r["aliases"])] for r in facts["reactants"]]
    out.print(table("reactants (`driblet reference NAME` explains one)", ["name", "in full", "aliases"], rows, left=3))
    out.print(_measured_table(facts["measured"]))
    rows = [[b["name"], f"{b['pK']:.3f}", number(b["enthalpy_kJ_per_mol"])] for b in facts["buffers"]]
    out.print(table("buffers, 25 °C, zero ionic strength", ["name", "pK", "enthalpy of dissociation (kJ/mol)"], rows))


def _print_entry(facts: dict[str, Any]) -> None:
    out = console()
    reactant = facts["reactants"][0]
    out.print(reactant["key"], style="bold", end="")
    out.print(f": {reactant['name']}")
    if reactant["aliases"]:
        out.print(f"also {', '.join(reactant['aliases'])}", markup=False)
    rows = [
        [
            f"{s['charge']:+d}".replace("+0", "0").replace("-", "−"),
            str(s["hydrogens"]),
            str(s["magnesiums"]),
            f"{s['energy_kJ_per_mol']:.2f}".replace("-", "−"),
            "–" if s["enthalpy_kJ_per_mol"] is None else f"{s['enthalpy_kJ_per_mol']:.2f}".replace("-", "−"),
        ]
        for s in reactant["species"]
    ]
    estimated = " (estimated)" if reactant["enthalpy_estimated"] else ""
    columns = ["charge", "H", "Mg", "ΔfG° (kJ/mol)", f"ΔfH°{estimated} (kJ/mol)"]
    out.print(table("species at 25 °C and zero ionic strength", columns, rows, left=0))
    for b in reactant["binding"]:
        what = f"pK {b['pK']:.2f}" if b["binds"] == "H" else f"log K {b['log_K']:.2f}"
        charge = f"{b['to_charge']:+d}".replace("+0", "0").replace("-", "−")
        out.print(f"binding of {b['binds']} to the species of charge {charge}: {what}", markup=False)
    conserved = ", ".join(f"{n} {element.replace('_', ' ')}" for element, n in reactant["atoms"].items())
    if conserved:
        out.print(f"reactions conserve: {conserved}", markup=False)
    if reactant["sd_kJ_per_mol"] is not None:
        out.print(f"standard deviation: {reactant['sd_kJ_per_mol']:g} kJ/mol", markup=False)
    out.print(f"source: {reactant['source']}", markup=False)
    if reactant["note"]:
        out.print(f"note: {reactant['note']}", markup=False)
    if facts["measured"]:
        out.print(_measured_table(facts["measured"]))
        for m in facts["measured"]:
            assumed = f" ({m['assumed']} assumed)" if m["assumed"] else ""
            used = f'; energy = "reference" uses it: {m["why"]}' if m["used_for_energy_reference"] else ""
            out.print(f"{m['reaction']} at {m['conditions']}{assumed}: {m['source']}{used}", markup=False)


def _measured_table(measured: list[dict[str, Any]]) -> Any:
    rows = [
        [
            m["reaction"] + (" *" if m["used_for_energy_reference"] else ""),
            number(m["K_measured"], 3),
            number(m["K_computed"], 3),
            f"{m['log10_computed_over_measured']:+.2f}".replace("-", "−"),
        ]
        for m in measured
    ]
    title = 'measured K′ beside the computed one (* energy = "reference" uses the measured one)'
    return table(title, ["reaction", "measured", "computed", "log10 of their ratio"], rows)
