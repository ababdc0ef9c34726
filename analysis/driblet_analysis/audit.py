"""What the energies of a system imply before anything is simulated, as plain facts."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.drive import emergent_affinities, is_driven, ln_constants, runnable
from driblet.energetics.cycles import conservation_laws, cycles, dependencies
from driblet.energetics.equilibrium import NoEquilibriumError, equilibrium_composition
from driblet.errors import CannotAnswerError
from driblet.network import BACKWARD, FORWARD, Network
from driblet.quantities import power_unit
from driblet.requirements import CompiledRequirements
from driblet.shares import when_text
from driblet.system import Reaction, System
from driblet.system.build import stoichiometric_matrix
from driblet.treatments import with_treatments
from driblet_analysis.audit_work import course_of, engine_facts, run_facts, treated_course
from driblet_analysis.energy_conditions import buffer_facts, condition_warnings, magnesium_facts, sensitivity_facts
from driblet_analysis.enzyme_facts import catalysed_rates, disagreements, enzyme_facts, lumping_rows
from driblet_analysis.references.count_equilibrium import count_law

FEW_MOLECULES = 10
WIDE_RANGE = 1e9
ROUNDING = 0.01
Array = NDArray[np.float64]


def audit_facts(system: System) -> dict[str, Any]:
    """Everything `driblet audit` prints, as values for JSON; energies in kJ/mol, times in s, counts in copies.

    Numbers that have no value are None, with the reason beside them.
    """
    network = Network.of(system)
    omega = system.compartment.omega
    copies = np.array([s.mean_copies(omega) for s in system.free_species])
    rates = network.rates(np.array([omega]))[0]
    course = course_of(system, network, copies)
    equilibrium = _equilibrium(system, network)
    macroscopic = equilibrium["macroscopic"] if equilibrium else None
    there = macroscopic and _totals(system, macroscopic)
    magnesium, buffer = magnesium_facts(system, there), buffer_facts(system, there)
    enzymes, catalysed = enzyme_facts(system), catalysed_rates(system)
    work = run_facts(system, treated_course(system) or course)
    warnings = list(system.warnings)
    warnings += disagreements(enzymes)
    warnings += condition_warnings(magnesium, buffer)
    warnings += _warnings(system, network, copies, course)
    return {
        "title": system.title,
        "source": system.source,
        "conditions": {
            "temperature_K": system.conditions.temperature_K,
            "pH": system.conditions.pH,
            "pH_scale": system.conditions.pH_scale,
            "pMg": system.conditions.pMg,
            "ionic_strength_M": system.conditions.ionic_strength_M,
            "RT_kJ_per_mol": system.conditions.RT_kJ_per_mol,
        },
        "compartment": {
            "name": system.compartment.name,
            "volume_L": system.compartment.volume_L,
            "cv": system.compartment.cv,
            "copies_per_mM": omega * 1e-3,
        },
        "species": [
            {
                "name": s.name,
                "held": s.held,
                "concentration_M": s.concentration_M if s.concentration_M is not None else (s.copies or 0.0) / omega,
                "mean_copies": None if s.held else s.mean_copies(omega),
                "loading": None if s.held else s.loading,
            }
            for s in system.species
            if s.enzyme is None
        ],
        "reactions": [_reaction_facts(system, network, r, copies, rates, catalysed) for r in system.stated],
        "enzymes": enzymes,
        "lumping": lumping_rows(system),
        "additions": [
            {"name": a.name, "at_s": a.at_s, "species": a.species, "mean_copies": a.mean_copies(omega)}
            for a in system.additions
        ],
        "conservation_laws": _conservation(system, network, copies),
        "cycles": _cycle_facts(system),
        "emergent_cycles": [
            {"reactions": _turned_over(system, cycle.reactions), "affinity_kJ_per_mol": cycle.affinity_kJ_per_mol}
            for cycle in emergent_affinities(system)
        ],
        "driven": is_driven(system),
        "equilibrium": equilibrium,
        "magnesium": magnesium,
        "buffer": buffer,
        "requirements": _requirements(system),
        "run": work,
        "engine": engine_facts(system, work["estimated_core_seconds"]),
        "warnings": warnings,
    }


def _requirements(system: System) -> list[dict[str, Any]]:
    """What a run will judge, and where: after every event, or on its samples for the reason told."""
    if not system.requirements:
        return []
    made, _ = with_treatments(system)
    compiled = CompiledRequirements.of(made, Network.of(made), system.settings.duration_s)
    return [
        {
            "name": r.name,
            "must": r.must.text,
            "when": when_text(r.when, r.averaged_over_s),
            "share": r.share,
            "looked_at": looked_at,
            "reason": compiled.by_grid.get(q),
        }
        for q, (r, looked_at) in enumerate(zip(system.requirements, compiled.resolutions(), strict=True))
    ]


def _totals(system: System, copies: dict[str, float]) -> dict[str, float]:
    """Concentrations of the file's free species, what enzymes hold added, mol/L; copies : of every free species."""
    totals = {s.name: copies[s.name] for s in system.free_species if s.enzyme is None}
    for species in system.free_species:
        for name, number in species.holds:
            if name in totals:
                totals[name] += number * copies[species.name]
    return {name: n / system.compartment.omega for name, n in totals.items()}


def _reaction_facts(
    system: System,
    network: Network,
    reaction: Reaction,
    copies: Array,
    rates: Array,
    catalysed: dict[str, dict[str, float]],
) -> dict[str, Any]:
    """Facts about a reaction of the file; constants of its own are None where enzymes alone carry it."""
    propensities = network.propensities(np.round(copies), rates)
    own = reaction.name in network.reactions
    r = network.reactions.index(reaction.name) if own else 0
    forward, backward = (network.channel_index(d)[r] if own else -1 for d in (FORWARD, BACKWARD))
    energy, reason = _initial_energy(system, reaction)
    order_left = sum(n for _, n in reaction.equation.reactants)
    order_right = sum(n for _, n in reaction.equation.products)
    return {
        "name": reaction.name,
        "equation": str(reaction.equation),
        "dG0_kJ_per_mol": reaction.dG0_kJ_per_mol,
        "K": reaction.K,
        "K_unit": power_unit(reaction.equation.order_change) or "1",
        "dG_kJ_per_mol": energy,
        "dG_reason": reason,
        "direction": _direction(system, reaction, energy),
        "forward_constant": reaction.forward if own else None,
        "forward_unit": power_unit(1 - order_left, 1),
        "backward_constant": reaction.backward if own else None,
        "backward_unit": power_unit(1 - order_right, 1),
        "forward_propensity_per_s": float(propensities[forward]) if forward >= 0 else None,
        "backward_propensity_per_s": float(propensities[backward]) if backward >= 0 else None,
        "energy_from": reaction.energy_from,
        "energy_note": reaction.energy_note,
        "energy_sd_kJ_per_mol": reaction.energy_sd_kJ_per_mol,
        "sensitivity_kJ_per_mol": sensitivity_facts(system, reaction),
        "one_way": reaction.one_way,
        "by_enzymes_per_s": catalysed.get(reaction.name, {}),
    }


def _concentration(system: System, name: str) -> float:
    species = next(s for s in system.species if s.name == name)
    if species.concentration_M is not None:
        return species.concentration_M
    return (species.copies or 0.0) / system.compartment.omega


def _initial_energy(system: System, reaction: Reaction) -> tuple[float | None, str | None]:
    """dG at the initial composition in concentrations, or None and why."""
    if reaction.dG0_kJ_per_mol is None:
        return None, "one way: the energy is undefined"
    log_quotient = 0.0
    for name, number in reaction.equation.change.items():
        c = _concentration(system, name)
        if c == 0:
            side = "product" if number > 0 else "reactant"
            return None, f"{side} {name} is absent"
        log_quotient += number * math.log(c)
    return reaction.dG0_kJ_per_mol + system.conditions.RT_kJ_per_mol * log_quotient, None


def _direction(system: System, reaction: Reaction, energy: float | None) -> str:
    if reaction.backward is None:
        return "forward"
    if energy is not None:
        return "at equilibrium" if abs(energy) < 1e-9 else ("forward" if energy < 0 else "backward")
    can_forward = all(_concentration(system, n) > 0 for n, _ in reaction.equation.reactants)
    can_backward = all(_concentration(system, n) > 0 for n, _ in reaction.equation.products)
    return {(True, False): "forward", (False, True): "backward"}.get((can_forward, can_backward), "neither can start")


def _readable_laws(system: System, network: Network) -> list[NDArray[np.int64]]:
    """A basis of the conserved sums: each enzyme's own copies first, and the other sums freed of them."""
    stoichiometry = network.stoichiometry
    laws = list(conservation_laws(stoichiometry))
    own = [np.array([s.enzyme == e.name for s in system.free_species], dtype=np.int64) for e in system.enzymes]
    own = [law for law in own if not (law @ stoichiometry).any()]
    if not own:
        return laws
    freed = []
    for law in laws:
        for copies_of in own:
            law = law - int(law[np.flatnonzero(copies_of)[0]]) * copies_of
        freed.append(-law if law.sum() < 0 else law)
    kept: list[NDArray[np.int64]] = []
    for law in own + sorted(freed, key=lambda law: int(np.count_nonzero(law))):
        if law.any() and len(dependencies(np.array([*kept, law]))) == 0:
            kept.append(law)
    return kept


def _conservation(system: System, network: Network, copies: Array) -> list[dict[str, Any]]:
    """Conserved sums; what enzymes hold counts with the species held, and an enzyme with all of its states."""
    laws = []
    for law in _readable_laws(system, network):
        weights = {name: int(w) for name, w in zip(network.species, law, strict=True) if w}
        for species in system.free_species:
            if species.enzyme is not None and species.name != species.enzyme:
                implied = weights.get(species.enzyme, 0)
                implied += sum(number * weights.get(name, 0) for name, number in species.holds)
                left = weights.pop(species.name, 0) - implied
                if left:
                    weights[species.name] = left
        laws.append({"weights": weights, "total_copies": float(law @ copies)})
    return laws


def _turned_over(system: System, vector: NDArray[np.int64]) -> dict[str, int]:
    """A cycle in reactions of the file: what an enzyme's steps turn over, and the others as they are."""
    weights = {r.name: int(w) for r, w in zip(system.reactions, vector, strict=True) if w}
    out = {r.name: weights.get(r.name, 0) for r in system.stated}
    for reaction in system.reactions:
        for name, times in reaction.turns:
            out[name] += times * weights.get(reaction.name, 0)
    return {name: weight for name, weight in out.items() if weight}


def _cycle_facts(system: System) -> list[dict[str, Any]]:
    reversible = [r for r in system.stated if r.dG0_kJ_per_mol is not None]
    matrix = stoichiometric_matrix([s.name for s in system.species], reversible)
    energies = np.array([r.dG0_kJ_per_mol for r in reversible], dtype=float)
    return [
        {
            "reactions": {reversible[r].name: int(vector[r]) for r in np.flatnonzero(vector)},
            "sum_kJ_per_mol": float(vector @ energies),
        }
        for vector in cycles(matrix)
    ]


def _equilibrium(system: System, network: Network) -> dict[str, Any] | None:
    """Copies in the median compartment: macroscopic, and the exact mean over states of its class."""
    if is_driven(system) is not False:
        why = "the system is driven" if is_driven(system) else "one-way reactions have no equilibrium"
        return {"macroscopic": None, "finite_count_mean": None, "reason": why}
    omega = system.compartment.omega
    names = network.species
    added = np.array([sum(a.mean_copies(omega) for a in system.additions if a.species == name) for name in names])
    concentrations = np.array([_concentration(system, name) for name in names]) + added / omega
    active = runnable(system)
    macroscopic = concentrations.copy()
    touched = np.abs(network.stoichiometry[:, active]).sum(axis=1) > 0
    try:
        macroscopic[touched] = equilibrium_composition(
            network.stoichiometry[np.ix_(touched, active)], ln_constants(system)[active], concentrations[touched]
        )
    except NoEquilibriumError as error:
        return {"macroscopic": None, "finite_count_mean": None, "reason": str(error)}
    facts: dict[str, Any] = {
        "macroscopic": dict(zip(names, (macroscopic * omega).tolist(), strict=True)),
        "finite_count_mean": None,
        "finite_count_sd": None,
        "reason": None,
    }
    load = np.array([round(s.mean_copies(omega)) for s in system.free_species]) + np.rint(added)
    try:
        law = count_law(system, load, omega)
    except CannotAnswerError as error:
        return {**facts, "reason": str(error)}
    if law is None:
        return {**facts, "reason": "too many states to enumerate"}
    facts["finite_count_mean"] = dict(zip(names, law.mean().tolist(), strict=True))
    facts["finite_count_sd"] = dict(zip(names, np.sqrt(np.diag(law.covariance())).tolist(), strict=True))
    return facts


def _warnings(system: System, network: Network, copies: Array, course: dict[str, Any] | None) -> list[str]:
    found = []
    stoichiometry = network.stoichiometry
    used = {i for channel in network.channels for i, _ in channel.reactants + channel.change}
    for i, name in enumerate(network.species):
        if i not in used:
            found.append(f"{name} takes part in no reaction")
        elif not stoichiometry[i].any():
            found.append(f"{name} is only a catalyst: its count never changes")
    carried = {r.name: r.turns[0][0] for r in system.reactions if len(r.turns) == 1}
    can_run = {carried.get(r.name, r.name) for r, runs in zip(system.reactions, runnable(system), strict=True) if runs}
    for reaction in system.stated:
        if reaction.name not in can_run:
            found.append(f"{reaction.name} can never run from this load: something it needs is never made")
    found += _rounding(system)
    final = copies if course is None else course["final"]
    stated = {s.name for s in system.species if s.enzyme is None}
    few = [
        name
        for i, name in enumerate(network.species)
        if i in used and 0 < max(copies[i], final[i]) < FEW_MOLECULES and stoichiometry[i].any() and name in stated
    ]
    if few:
        found.append(
            f"under {FEW_MOLECULES} copies of {', '.join(few)} in a compartment: concentrations mislead, read the "
            "finite-count means"
        )
    if course is not None:
        found += _firing_warnings(system, network, course)
    return found


def _rounding(system: System) -> list[str]:
    omega = system.compartment.omega
    found = []
    for species in system.free_species:
        mean = species.mean_copies(omega)
        if species.loading == "nearest" and mean and abs(round(mean) - mean) > ROUNDING * mean:
            found.append(
                f'{species.name}: {mean:.4g} copies on average, but loading = "nearest" puts {round(mean)} in a median '
                'compartment; loading = "poisson" keeps the mean'
            )
    return found


def _firing_warnings(system: System, network: Network, course: dict[str, Any]) -> list[str]:
    firings = course["firings"]
    found = []
    backward = network.channel_index(BACKWARD)
    for r, reaction in enumerate(system.reactions):
        if reaction.enzyme is not None:
            continue
        total = float(firings[backward[r]]) * system.settings.replicates if backward[r] >= 0 else math.inf
        if total < 1 and runnable(system)[r]:
            found.append(
                f"the reverse of {reaction.name} is expected to fire {total:.2g} times in the whole run: too rarely for "
                "the run to show its energy"
            )
    # the many small ways in which one enzyme inactivates are no part of what a run is for
    dying = [system.reactions[c.reaction].enzyme is not None and c.direction == FORWARD
             and system.reactions[c.reaction].one_way is not None for c in network.channels]  # fmt: skip
    firings = np.where(dying, 0.0, firings)
    positive = firings[firings > 0]
    if len(positive) and positive.max() / positive.min() > WIDE_RANGE:
        slow, fast = (network.channels[int(np.flatnonzero(firings == f)[0])] for f in (positive.min(), positive.max()))
        found.append(
            f"firings are {positive.max() / positive.min():.1g}-fold apart ({network.reactions[fast.reaction]} against "
            f"{network.reactions[slow.reaction]}): nearly all of the work goes into the fastest"
        )
    return found
