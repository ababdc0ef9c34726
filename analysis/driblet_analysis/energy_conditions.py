"""What the conditions make of the energies of a system: sensitivities, free magnesium along the way, pH change.

Free magnesium is solved at the initial composition and then held; a reaction that converts ATP to ADP would release or
bind some, and these functions say how far the energies would move if it did.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from driblet.energetics.magnesium import CannotBeMetError, pH_after, solved_pMg, total_magnesium
from driblet.energetics.reference import NotInTableError, Reference
from driblet.energetics.transform import Potentials, bound
from driblet.system import Reaction, System
from driblet.system.reference_energies import full_change

DRIFT_LIMIT = 0.5  # kJ/mol an energy may move with free magnesium before it is worth a warning
PH_LIMIT = 0.1
Composition = Mapping[str, float]  # species -> mol/L


def initial_composition(system: System) -> dict[str, float]:
    """Concentrations at the start in the median compartment, mol/L, held species included, enzymes left out."""
    omega = system.compartment.omega
    return {s.name: s.mean_copies(omega) / omega for s in system.species if s.enzyme is None}


def full_conversion(system: System, reaction: Reaction) -> dict[str, float] | None:
    """The composition once `reaction` alone has run until what it consumes is exhausted; None when it cannot start.

    Forward, or backward where nothing is there to go forward.
    """
    start = initial_composition(system)
    held = system.held_concentrations()
    change = {name: n for name, n in reaction.equation.change.items() if name not in held}
    for direction in (1, -1) if reaction.backward is not None else (1,):
        used = [start[name] / abs(n) for name, n in change.items() if n * direction < 0]
        if used and min(used) > 0:
            extent = direction * min(used)
            return {name: max(0.0, c + extent * change.get(name, 0)) for name, c in start.items()}
    return None


def sensitivity_facts(system: System, reaction: Reaction) -> dict[str, Any]:
    """How dG0' answers to pH, pMg and temperature, kJ/mol per unit and per 10 K; None and why where the table cannot say."""
    none = {"per_pH": None, "per_pMg": None, "per_10_K": None}
    if reaction.dG0_kJ_per_mol is None:
        return {**none, "reason": "one way: the energy is undefined"}
    try:
        found = _table(system).sensitivity(full_change(reaction.equation), system.conditions)
    except NotInTableError as error:
        return {**none, "reason": str(error)}
    return {**found._asdict(), "reason": None}


def magnesium_facts(system: System, equilibrium: Composition | None) -> dict[str, Any] | None:
    """Free and bound magnesium at the start, and pMg and each dG0' at start, equilibrium and full conversions.

    equilibrium : macroscopic concentrations of the free species, mol/L, or None. None when pH, pMg or ionic strength is not
    stated, or no species binds magnesium.
    """
    conditions, table = system.conditions, _table(system)
    if conditions.missing(with_magnesium=True):
        return None
    start = initial_composition(system)
    load = table.load(start)
    if not any(reactant.binds_magnesium for reactant, _ in load):
        return None
    total = total_magnesium(load, conditions, table.magnesium_ion)
    compositions: dict[str, Composition] = {"start": start}
    if equilibrium is not None:
        compositions["equilibrium"] = {**start, **equilibrium}
    for reaction in system.stated:
        after = full_conversion(system, reaction)
        if after is not None:
            compositions[reaction.name] = after
    assert conditions.pMg is not None
    at = Potentials.of(conditions, table.magnesium_ion)
    known = {name: r for name in start for r in [table.find(name)] if r is not None}
    return {
        "total_M": total,
        "stated_total_M": conditions.total_magnesium_M,
        "free_M": 10.0**-conditions.pMg,
        "bound_M": {name: start[name] * bound(reactant, at).magnesiums for name, reactant in known.items()},
        "not_in_table": [name for name in start if name not in known],
        "compositions": [_at_composition(system, name, c, total) for name, c in compositions.items()],
    }


def _at_composition(system: System, name: str, composition: Composition, total: float) -> dict[str, Any]:
    table, conditions = _table(system), system.conditions
    try:
        pMg = solved_pMg(total, table.load(composition), conditions, table.magnesium_ion)
    except CannotBeMetError as error:
        return {"at": name, "pMg": None, "dG0_kJ_per_mol": None, "reason": str(error)}
    there = replace(conditions, pMg=pMg)
    energies: dict[str, float | None] = {}
    for reaction in system.stated:
        energies[reaction.name] = reaction.dG0_kJ_per_mol
        if reaction.dG0_kJ_per_mol is not None:
            try:
                energies[reaction.name] = table.carried(
                    full_change(reaction.equation), reaction.dG0_kJ_per_mol, conditions, there
                )
            except NotInTableError:
                continue  # a reaction the table does not know is taken not to depend on magnesium
    return {"at": name, "pMg": pMg, "dG0_kJ_per_mol": energies, "reason": None}


def buffer_facts(system: System, equilibrium: Composition | None) -> dict[str, Any] | None:
    """The pH at equilibrium, and after each reaction alone has run to full conversion, in the stated buffer.

    equilibrium : as in `magnesium_facts`. None without a buffer.
    """
    buffer = system.conditions.buffer
    if buffer is None:
        return None
    rows = [
        _pH_after(system, reaction.name, full_conversion(system, reaction), [reaction]) for reaction in system.stated
    ]
    if equilibrium is not None:
        there = {**initial_composition(system), **equilibrium}
        rows.insert(0, _pH_after(system, "equilibrium", there, list(system.stated)))
    return {"name": buffer.name, "concentration_M": buffer.concentration_M, "pH_after": rows}


def _pH_after(system: System, name: str, after: Composition | None, reactions: Sequence[Reaction]) -> dict[str, Any]:
    table, conditions = _table(system), system.conditions
    facts: dict[str, Any] = {"after": name, "pH": None, "change": None, "reason": None}
    turned = dict.fromkeys(name for reaction in reactions for name in reaction.equation.change)
    held = [name for name in turned if name in system.held_concentrations()]
    missing = conditions.missing(with_magnesium=True)
    try:
        for reaction in reactions:
            table.terms(full_change(reaction.equation))
        if missing:
            facts["reason"] = f"{' and '.join(missing)} not stated"
        elif after is None:
            facts["reason"] = "it cannot start from this load"
        elif held:
            facts["reason"] = f"held species ({', '.join(held)}) exchange protons with the outside"
        else:
            assert conditions.buffer is not None
            assert conditions.pH is not None
            before = table.load(initial_composition(system))
            pH = pH_after(before, table.load(after), conditions.buffer, conditions, table.magnesium_ion)
            facts.update(pH=pH, change=pH - conditions.pH)
    except (NotInTableError, CannotBeMetError) as error:
        facts["reason"] = str(error)
    return facts


def condition_warnings(magnesium: Mapping[str, Any] | None, buffer: Mapping[str, Any] | None) -> list[str]:
    """What the facts above give cause to say."""
    found = []
    if magnesium is not None:
        start = magnesium["compositions"][0]
        for row in magnesium["compositions"][1:]:
            if row["pMg"] is None:
                found.append(f"free magnesium {_when(row['at'])} has no solution: {row['reason']}")
                continue
            moved = {
                name: value - start["dG0_kJ_per_mol"][name]
                for name, value in row["dG0_kJ_per_mol"].items()
                if value is not None and abs(value - start["dG0_kJ_per_mol"][name]) > DRIFT_LIMIT
            }
            if moved:
                changes = ", ".join(f"{name} {value:+.1f}" for name, value in moved.items())
                found.append(
                    f"free magnesium is held at pMg {start['pMg']:.2f}; {_when(row['at'])} it would be {row['pMg']:.2f} and "
                    f"move dG0' by (kJ/mol) {changes}"
                )
    for row in buffer["pH_after"] if buffer is not None else ():
        if row["change"] is not None and abs(row["change"]) > PH_LIMIT:
            found.append(
                f"the pH is held; {buffer['name']} at {buffer['concentration_M'] * 1e3:g} mM would let it go to "  # type: ignore[index]
                f"{row['pH']:.2f} {_when(row['after'])}"
            )
        elif row["reason"] and "overrun" in row["reason"]:
            found.append(f"{_when(row['after'])}: {row['reason']}")
    return found


def _when(at: str) -> str:
    return "at equilibrium" if at == "equilibrium" else f"after full conversion by {at}"


def _table(system: System) -> Reference:
    assert system.reference is not None
    return system.reference
