"""What an enzyme's steps imply, for `driblet audit`: constants recomputed, steps and where they come from, loading."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.errors import InputError
from driblet.loading import volumes
from driblet.lumping import ELEMENTARY
from driblet.network import Network
from driblet.quantities import copies_per_molar
from driblet.run_settings import sample_times
from driblet.system import Species, System
from driblet.system.mechanisms import Activity, Enzyme, measured_constants, turnover_rates
from driblet.treatments import RAPID_EQUILIBRIUM_TOLERANCE, lumping_facts

_QUANTILES = 20_001  # of the size distribution, to average over it
Array = NDArray[np.float64]


def enzyme_facts(system: System) -> list[dict[str, Any]]:
    """Facts about every enzyme; constants in /M/s, /s and mol/L, turnovers per molecule in 1/s at the start."""
    here = initial_concentrations(system)
    return [_facts(system, enzyme, here) for enzyme in system.enzymes]


def initial_concentrations(system: System) -> dict[str, float]:
    """Concentration of each species of the file at the start, mol/L, in the median compartment."""
    omega = system.compartment.omega
    return {
        s.name: s.concentration_M if s.concentration_M is not None else (s.copies or 0.0) / omega
        for s in system.species
        if s.enzyme is None
    }


def share_without(system: System, species: Species) -> float:
    """Share of compartments that start with no copy of a species, averaged over their sizes."""
    middle = (np.arange(_QUANTILES) + 0.5) / _QUANTILES
    spread = system.compartment.cv or system.compartment.sizes_L
    omega = copies_per_molar(1.0) * volumes(system.compartment, middle if spread else middle[:1])
    mean = np.array([species.mean_copies(w) for w in omega])
    empty = np.exp(-mean) if species.loading == "poisson" else (np.rint(mean) == 0).astype(float)
    return float(empty.mean())


def catalysed_rates(system: System) -> dict[str, dict[str, float]]:
    """Net rate of each catalysed reaction by each enzyme at the start, 1/s in the median compartment."""
    here = initial_concentrations(system)
    found: dict[str, dict[str, float]] = {}
    for enzyme in system.enzymes:
        copies = _free(system, enzyme).mean_copies(system.compartment.omega)
        for reaction, rate in _turnovers(system, enzyme, here).items():
            found.setdefault(reaction, {})[enzyme.name] = copies * rate
    return found


def lumping_rows(system: System) -> list[dict[str, Any]]:
    """For each enzyme with steps whether it may be lumped, with the numbers behind it."""
    if not any(e.steps for e in system.enzymes):
        return []
    try:
        first = float(sample_times(system.settings)[1])
    except InputError:
        first = None
    asked = dict(system.treatments)
    return [
        {
            "name": name,
            "treatment": asked.get(name, ELEMENTARY),
            "allowed": not facts.failures,
            "against": list(facts.failures),
            "settling_s": facts.settling_s,
            "ligand": facts.ligand,
            "ligand_s": facts.ligand_s,
            "rarest_ligand": facts.rarest,
            "share": facts.share,
            "first_output_s": facts.first_output_s,
            "rapid_equilibrium_error": dict(facts.rapid_equilibrium),
            "rapid_equilibrium_allowed": all(
                error is None or abs(error) < RAPID_EQUILIBRIUM_TOLERANCE for _, error in facts.rapid_equilibrium
            ),
            "fano": dict(facts.fano),
            "firing_fano": dict(facts.firing_fano),
        }
        for name, facts in lumping_facts(system, first).items()
    ]


def _free(system: System, enzyme: Enzyme) -> Species:
    return next(s for s in system.species if s.name == enzyme.name)


def _facts(system: System, enzyme: Enzyme, here: Mapping[str, float]) -> dict[str, Any]:
    species = _free(system, enzyme)
    omega = system.compartment.omega
    mean = species.mean_copies(omega)
    turnovers = _turnovers(system, enzyme, here)
    return {
        "name": enzyme.name,
        "concentration_M": mean / omega,
        "mean_copies": mean,
        "loading": species.loading,
        "share_without": share_without(system, species),
        "active_fraction": enzyme.active_fraction,
        "half_life_s": enzyme.half_life_s,
        "inhibitors_Ki_M": dict(enzyme.inhibitors),
        "states": [state.name for state in enzyme.states],
        "reactions": [_activity(enzyme, activity, turnovers[activity.reaction]) for activity in enzyme.activities],
        "steps": [
            {
                "name": step.name,
                "source": enzyme.states[step.source].name,
                "target": enzyme.states[step.target].name,
                "binds": step.binds,
                "releases": step.releases,
                "forward_constant": step.forward,
                "forward_unit": "/M/s" if step.binds is not None else "/s",
                "backward_constant": step.backward,
                "backward_unit": "/M/s" if step.releases is not None else "/s",
                "Kd_M": _dissociation(step.forward, step.backward, step.binds, step.releases),
                "origin": step.origin,
            }
            for step in enzyme.steps
        ],
    }


def _turnovers(system: System, enzyme: Enzyme, here: Mapping[str, float]) -> dict[str, float]:
    """Net turnovers of each reaction per molecule, 1/s, at concentrations `here`."""
    if enzyme.steps:
        return turnover_rates(enzyme, here)
    network = Network.of(system)
    omega = system.compartment.omega
    rates = network.rates(np.array([omega]))[0]
    n = np.array([1.0 if s.name == enzyme.name else here.get(s.name, 0.0) * omega for s in system.free_species])
    factors = network.factors(n, rates, exact=False)
    (activity,) = enzyme.activities
    net = 0.0
    for j, channel in enumerate(network.channels):
        if network.reactions[channel.reaction] == f"{enzyme.name}.{activity.reaction}":
            flow = rates[j] * factors[j] * np.prod([n[i] ** k for i, k in channel.reactants])
            net += channel.direction * float(flow)
    return {activity.reaction: net}


def _dissociation(forward: float, backward: float, binds: str | None, releases: str | None) -> float | None:
    if binds is not None:
        return backward / forward
    return forward / backward if releases is not None else None


def _activity(enzyme: Enzyme, activity: Activity, turnover: float) -> dict[str, Any]:
    if not enzyme.steps:  # no mechanism: the constants are what the file states
        return {
            "reaction": activity.reaction,
            "mechanism": activity.mechanism,
            "direction": "forward" if activity.direction == 1 else "backward",
            "binds": list(activity.substrates),
            "releases": list(activity.products),
            "kcat_per_s": {"stated": activity.kcat_per_s, "from_steps": None},
            "KM_M": [
                {"species": name, "stated": stated, "from_steps": None}
                for name, stated in zip(activity.substrates, activity.KM_M, strict=True)
            ],
            "other_way": {"kcat_per_s": None, "KM_M": []},
            "turnovers_per_s": turnover,
        }
    there, back = measured_constants(enzyme, activity), measured_constants(enzyme, activity, backward=True)
    return {
        "reaction": activity.reaction,
        "mechanism": activity.mechanism,
        "direction": "forward" if activity.direction == 1 else "backward",
        "binds": list(activity.substrates),
        "releases": list(activity.products),
        "kcat_per_s": {"stated": activity.kcat_per_s, "from_steps": there.kcat_per_s},
        "KM_M": [
            {"species": name, "stated": stated, "from_steps": value}
            for name, stated, value in zip(activity.substrates, activity.KM_M, there.KM_M, strict=True)
        ],
        "other_way": {
            "kcat_per_s": back.kcat_per_s,
            "KM_M": [
                {"species": name, "from_steps": value}
                for name, value in zip(reversed(activity.products), back.KM_M, strict=True)
            ],
        },
        "turnovers_per_s": turnover,
    }


def disagreements(facts: list[dict[str, Any]], tolerance: float = 1e-6) -> list[str]:
    """Where the steps do not give what the file states: a fault of driblet, never expected."""
    found = []
    for enzyme in facts:
        for reaction in enzyme["reactions"]:
            pairs = [("kcat", reaction["kcat_per_s"]), *((f"K_M of {k['species']}", k) for k in reaction["KM_M"])]
            for what, pair in pairs:
                stated, found_value = pair["stated"], pair["from_steps"]
                if (
                    stated is not None
                    and found_value is not None
                    and not math.isclose(stated, found_value, rel_tol=tolerance)
                ):
                    found.append(f"{enzyme['name']}, {reaction['reaction']}: the steps give {what} = {found_value:.6g}")
    return found
