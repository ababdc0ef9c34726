"""`driblet audit`: what the energies of a system imply before anything is simulated."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from driblet.commands.requirement_rows import percent
from driblet.commands.screen import CAUTION, console, duration, number, print_json, table
from driblet_analysis.commands.audit_enzymes import print_enzymes


@click.command(short_help="Show what a system's energies imply before anything runs.")
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--json", "as_json", is_flag=True, help="Print the same facts as JSON.")
def audit(file: Path, as_json: bool) -> None:
    """Show what the energies and rate constants in FILE imply, before anything is simulated.

    Energies, constants and directions of each reaction; conserved sums; cycles and what drives them; the equilibrium
    composition beside the exact means over countable states; the work a run will take; and what to watch out for.
    """
    from driblet.system import load
    from driblet_analysis.audit import audit_facts

    facts = audit_facts(load(file))
    if as_json:
        print_json(facts)
        return
    _print(facts)


def _print(facts: dict[str, Any]) -> None:
    out = console()
    out.print(facts["title"], style="bold")
    out.print(_conditions(facts), markup=False)
    out.print(_species(facts))
    out.print(_energies(facts))
    _print_conditions(out, facts)
    if any(r["forward_constant"] is not None for r in facts["reactions"]):
        out.print(_rates(facts))
    print_enzymes(out, facts)
    held = ", bound molecules included" if facts["enzymes"] else ""
    for law in facts["conservation_laws"]:
        out.print(f"conserved{held}: {_sum(law['weights'])} = {number(law['total_copies'])} copies", markup=False)
    for cycle in facts["cycles"]:
        out.print(f"closed cycle: {_sum(cycle['reactions'])} = 0 kJ/mol", markup=False)
    for cycle in facts["emergent_cycles"]:
        spent = cycle["affinity_kJ_per_mol"]
        what = f"spends {number(spent)} kJ/mol a turn" if spent else "held concentrations agree, no drive"
        out.print(f"emergent cycle: {_sum(cycle['reactions'])}: {what}", markup=False)
    driven = {True: "driven: a steady state is not an equilibrium", False: "not driven: it runs to equilibrium"}
    out.print(
        driven.get(facts["driven"], "driven or not is undefined: reactions that can run are one way"), markup=False
    )
    equilibrium = facts["equilibrium"]
    if equilibrium["macroscopic"] is None:
        out.print(f"no equilibrium composition: {equilibrium['reason']}", markup=False)
    elif equilibrium["reason"]:
        out.print(f"no exact finite-count means: {equilibrium['reason']}", markup=False)
    for one in facts["requirements"]:
        asked = "" if one["share"] is None else f", in {percent(one['share'])} % of compartments"
        where = "judged after every event" if one["reason"] is None else f"judged on samples only ({one['reason']})"
        out.print(f"requirement {one['name']}: {one['must']}, {one['when']}{asked}; {where}", markup=False)
    run = facts["run"]
    if run["duration_s"] is not None:
        out.print(
            f"{number(run['events_per_simulated_second'])} events per simulated second and compartment; "
            f"{run['replicates']} compartments for {duration(run['duration_s'])}: about "
            f"{duration(run['estimated_core_seconds'])} on one core by exact events",
            markup=False,
        )
    for line in _engine(facts["engine"]):
        out.print(line, markup=False)
    for warning in facts["warnings"]:
        out.print(f"note: {warning}", markup=False)
    out.print(CAUTION, style="dim")


def _engine(engine: dict[str, Any] | None) -> list[str]:
    if engine is None:
        return []
    seconds = engine["estimated_core_seconds"]
    takes = "" if seconds is None else f"; about {duration(seconds)} on one core"
    if engine["asked"] != "exact":
        return [f"engine {engine['asked']}: {engine['why']}{takes}"]
    return [f'engine "auto" would take {engine["why"]}{takes}'] if engine["auto_takes"] == "leap" else []


def _conditions(facts: dict[str, Any]) -> str:
    c = facts["conditions"]
    parts = [f"{c['temperature_K'] - 273.15:.4g} °C"]
    parts += [f"{name} {c[name]:.4g}" for name in ("pH", "pMg") if c[name] is not None]
    if c["ionic_strength_M"] is not None:
        parts.append(f"ionic strength {c['ionic_strength_M']:g} M")
    volume = facts["compartment"]["volume_L"]
    scale, unit = next((s, u) for s, u in ((1e-9, "nL"), (1e-12, "pL"), (1e-15, "fL"), (0.0, "aL")) if volume >= s)
    scale = scale or 1e-18
    spread = f" (median; cv {facts['compartment']['cv']:.3g})" if facts["compartment"]["cv"] else ""
    return (
        f"{', '.join(parts)}; {facts['compartment']['name']} of {number(volume / scale)} {unit}{spread}: "
        f"1 mM = {number(facts['compartment']['copies_per_mM'])} copies"
    )


def _species(facts: dict[str, Any]) -> Any:
    equilibrium = facts["equilibrium"]

    def at(kind: str, name: str) -> str:
        values = equilibrium.get(kind)
        return number(values.get(name)) if values else "–"

    rows = [
        [
            s["name"],
            f"{s['concentration_M'] * 1e3:.4g}",
            "held" if s["held"] else number(s["mean_copies"]),
            at("macroscopic", s["name"]),
            at("finite_count_mean", s["name"]),
            at("finite_count_sd", s["name"]),
        ]
        for s in facts["species"]
    ]
    columns = ["species", "start (mM)", "copies", "equilibrium, macroscopic", "exact mean", "exact sd"]
    return table("species, copies in the median compartment", columns, rows)


def _energies(facts: dict[str, Any]) -> Any:
    rows = [
        [
            r["name"],
            r["equation"],
            number(r["dG0_kJ_per_mol"]),
            number(r["K"]) + (f" {r['K_unit']}" if r["K"] is not None and r["K_unit"] != "1" else ""),
            number(r["dG_kJ_per_mol"]) if r["dG_reason"] is None else f"– ({r['dG_reason']})",
            r["direction"],
        ]
        for r in facts["reactions"]
    ]
    return table("energies, kJ/mol", ["reaction", "equation", "ΔG°′", "K′", "ΔG at the start", "runs"], rows, left=2)


def _print_conditions(out: Any, facts: dict[str, Any]) -> None:
    """How the energies answer to the conditions; what magnesium and pH would do if they were not held."""
    for r in facts["reactions"]:
        if r["energy_note"]:
            out.print(f"{r['name']}: {r['energy_note']}", markup=False)
    known = [r for r in facts["reactions"] if r["sensitivity_kJ_per_mol"]["reason"] is None]
    if known:
        keys = ("per_pH", "per_pMg", "per_10_K")
        rows = [
            [
                r["name"],
                *(_signed(r["sensitivity_kJ_per_mol"][key]) for key in keys),
                number(r["energy_sd_kJ_per_mol"], 2),
            ]
            for r in known
        ]
        columns = ["reaction", "per unit pH", "per unit pMg", "per 10 K", "sd"]
        out.print(table("how ΔG°′ changes, kJ/mol", columns, rows))
    magnesium = facts["magnesium"]
    if magnesium is not None and (magnesium["stated_total_M"] is not None or known):
        bound = ", ".join(f"{n} {c * 1e3:.3g}" for n, c in magnesium["bound_M"].items() if c >= 5e-7)
        out.print(
            f"magnesium, mM: free {magnesium['free_M'] * 1e3:.3g}, total {magnesium['total_M'] * 1e3:.4g}; bound to {bound}"
            + (
                f"; not in the table, taken to bind none: {', '.join(unknown)}"
                if (unknown := magnesium["not_in_table"])
                else ""
            ),
            markup=False,
        )
        rows = [
            [_composition(row["at"]), number(row["pMg"]), *(_energy_at(row, r["name"]) for r in known)]
            for row in magnesium["compositions"]
        ]
        names = [r["name"] for r in known]
        out.print(table("ΔG°′ if free magnesium were not held, kJ/mol", ["composition", "pMg", *names], rows))
    for row in facts["buffer"]["pH_after"] if facts["buffer"] else ():
        end = (
            f"pH {row['pH']:.2f} ({_signed(row['change'])})"
            if row["pH"] is not None
            else f"pH unknown: {row['reason']}"
        )
        out.print(
            f"{_composition(row['after'])} in {facts['buffer']['concentration_M'] * 1e3:g} mM "
            f"{facts['buffer']['name']}: {end}",
            markup=False,
        )


def _composition(at: str) -> str:
    return at if at in ("start", "equilibrium") else f"after {at} alone"


def _signed(value: float | None) -> str:
    return "–" if value is None else f"{value:+.2f}".replace("-", "−")


def _energy_at(row: dict[str, Any], name: str) -> str:
    return "–" if row["dG0_kJ_per_mol"] is None else number(row["dG0_kJ_per_mol"][name])


def _rates(facts: dict[str, Any]) -> Any:
    own = [r for r in facts["reactions"] if r["forward_constant"] is not None]
    rows = [
        [
            r["name"],
            f"{number(r['forward_constant'])} {r['forward_unit']}",
            f"{number(r['backward_constant'])} {r['backward_unit']}"
            if r["backward_constant"]
            else f"– ({r['one_way']})",
            number(r["forward_propensity_per_s"]),
            number(r["backward_propensity_per_s"]),
        ]
        for r in own
    ]
    columns = ["reaction", "forward constant", "backward constant", "forward at start (/s)", "backward at start (/s)"]
    return table("rates", columns, rows)


def _sum(weights: dict[str, int]) -> str:
    text = ""
    for name, weight in weights.items():
        sign = (" − " if weight < 0 else " + ") if text else ("−" if weight < 0 else "")
        text += sign + (f"{abs(weight)} " if abs(weight) != 1 else "") + name
    return text
