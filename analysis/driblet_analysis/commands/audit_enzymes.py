"""The enzymes' part of `driblet audit`: how much there is, what it does, and the steps that stand for it."""

from __future__ import annotations

from typing import Any

from driblet.commands.screen import duration, number, table


def print_enzymes(out: Any, facts: dict[str, Any]) -> None:
    """Print the facts about enzymes and additions; nothing where there are none."""
    if facts["enzymes"]:
        out.print(_amounts(facts["enzymes"]))
        out.print(_constants(facts["enzymes"]))
        for enzyme in facts["enzymes"]:
            if enzyme["steps"]:
                out.print(_steps(enzyme))
        _print_rates(out, facts)
        if facts["lumping"]:
            _print_lumping(out, facts["lumping"])
    for addition in facts["additions"]:
        out.print(
            f"added at {duration(addition['at_s'])}: {number(addition['mean_copies'])} copies of {addition['species']}",
            markup=False,
        )


def _amounts(enzymes: list[dict[str, Any]]) -> Any:
    rows = [
        [
            e["name"],
            number(e["concentration_M"] * 1e9),
            number(e["mean_copies"]),
            _percent(e["share_without"]),
            f"{100 * e['active_fraction']:.3g} %",
            "–" if e["half_life_s"] is None else duration(e["half_life_s"]),
        ]
        for e in enzymes
    ]
    columns = ["enzyme", "active (nM)", "copies", "compartments without", "active fraction", "half-life"]
    return table("enzymes, in the median compartment", columns, rows)


def _percent(share: float) -> str:
    if 0 < share < 1e-4:
        return f"{100 * share:.1e} %"
    return f"{100 * share:.3g} %"


def _constants(enzymes: list[dict[str, Any]]) -> Any:
    rows = []
    for enzyme in enzymes:
        for reaction in enzyme["reactions"]:
            way = "" if reaction["direction"] == "forward" else ", backward"
            head = [enzyme["name"], f"{reaction['reaction']}{way}: {reaction['mechanism']}"]
            kcat = reaction["kcat_per_s"]
            rows.append([*head, "kcat (/s)", number(kcat["stated"]), number(kcat["from_steps"])])
            for KM in reaction["KM_M"]:
                stated = None if KM["stated"] is None else KM["stated"] * 1e3
                from_steps = None if KM["from_steps"] is None else KM["from_steps"] * 1e3
                rows.append(["", "", f"K_M {KM['species']} (mM)", number(stated), number(from_steps)])
            other = reaction["other_way"]
            if other["kcat_per_s"] is not None:
                rows.append(["", "", "reverse kcat (/s)", "–", number(other["kcat_per_s"])])
            for KM in other["KM_M"]:
                rows.append(["", "", f"K_M {KM['species']} (mM)", "–", number(KM["from_steps"] * 1e3)])
    title = "initial-rate constants: other substrates saturating, no product"
    return table(title, ["enzyme", "reaction", "constant", "stated", "from the steps"], rows, left=3)


def _steps(enzyme: dict[str, Any]) -> Any:
    rows = [
        [
            step["name"].removeprefix(enzyme["name"] + "."),
            f"{number(step['forward_constant'])} {step['forward_unit']}",
            f"{number(step['backward_constant'])} {step['backward_unit']}",
            "–" if step["Kd_M"] is None else f"{number(step['Kd_M'] * 1e3)} mM",
            step["origin"],
        ]
        for step in enzyme["steps"]
    ]
    made = table(f"steps of {enzyme['name']} (* by default)", ["step", "forward", "backward", "Kd", "from"], rows)
    made.columns[0].no_wrap = True
    made.columns[-1].justify = "left"
    return made


def _print_lumping(out: Any, rows: list[dict[str, Any]]) -> None:
    """May the enzymes be lumped, and what would be wrong with taking their binding for an equilibrium?"""
    shown = [
        [
            row["name"],
            "–" if row["settling_s"] is None else duration(row["settling_s"]),
            "–" if row["ligand_s"] is None else f"{duration(row['ligand_s'])} ({row['ligand']})",
            "–" if row["share"] is None else f"{_percent(row['share'])} ({row['rarest_ligand']})",
            ", ".join("–" if e is None else f"{100 * e:+.3g} %" for e in row["rapid_equilibrium_error"].values()),
            "yes" if row["allowed"] else "no",
            row["treatment"],
        ]
        for row in rows
    ]
    columns = [
        "enzyme",
        "states settle in",
        "a ligand changes within",
        "share of a ligand",
        "rapid equilibrium errs by",
    ]
    out.print(table("lumping, at the start", [*columns, "allowed", "treatment"], shown))
    for row in rows:
        for reason in row["against"]:
            out.print(f"{row['name']} should not be lumped: {reason}", markup=False)


def _print_rates(out: Any, facts: dict[str, Any]) -> None:
    """Net rates at the start, the uncatalysed path beside the enzymes so that a slip shows."""
    for r in facts["reactions"]:
        if not r["by_enzymes_per_s"]:
            continue
        parts = [f"{number(rate)} /s by {name}" for name, rate in r["by_enzymes_per_s"].items()]
        if r["forward_propensity_per_s"] is not None:
            own = r["forward_propensity_per_s"] - (r["backward_propensity_per_s"] or 0.0)
            parts.append(f"{number(own)} /s uncatalysed, in parallel")
        out.print(f"{r['name']}, net at the start: {'; '.join(parts)}", markup=False)
