"""System -> System with enzymes lumped: each carries its net reactions at its steady-state flux, in one step.

A lumped enzyme is one species, all its copies, and for every net reaction one reversible channel pair

    w+(n) = E k+ prod (n)_nu- N(m)/D(m),   w-(n) = E k- prod (n)_nu+ N(m)/D(m)

with N/D from the diagrams of the mechanism (system/mechanisms/king_altman.py) and m the state common to both directions: a
firing leads from reactants + m to products + m, and N/D is taken half way between, with half the reactants and half the
products about. So w+(n)/w-(n + nu) = exp(-dG/RT) for every single transition, as for mass action. Counts of ligands are then
those of free and bound molecules together.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping
from dataclasses import replace

from driblet.errors import InputError, Problem
from driblet.system.equation import Equation
from driblet.system.expressions import nearest
from driblet.system.mechanisms import Enzyme, MechanismError
from driblet.system.mechanisms.king_altman import FluxLaw, Polynomial, Variable, closure_excess, diagram, flux_laws
from driblet.system.model import Reaction, Species, System
from driblet.system.rate_factors import RateFactor, Term

ELEMENTARY, LUMPED = "elementary", "lumped"
CLOSURE = 1e-6  # of ln K: what constants that follow from energies miss by rounding alone is far less


def treated(system: System, treatments: Mapping[str, str]) -> System:
    """`system` with the enzymes named in `treatments` as that says, "elementary" or "lumped", the others as they are.

    What is lumped already stays so. Raises InputError with every problem: an enzyme that is unknown, cannot be lumped, or
    is lumped and asked for as elementary.
    """
    problems = [
        Problem(
            "treatment", f'"{name}" is not an enzyme of this system{nearest(name, [e.name for e in system.enzymes])}'
        )
        for name in treatments
        if name not in {e.name for e in system.enzymes}
    ]
    now = dict(system.treatments)
    made: dict[str, tuple[Species, tuple[Reaction, ...]]] = {}
    for enzyme in system.enzymes:
        wanted = treatments.get(enzyme.name, now.get(enzyme.name, ELEMENTARY))
        path = f"enzymes.{enzyme.name}.treatment"
        if wanted not in (ELEMENTARY, LUMPED):
            problems.append(Problem(path, f'"{wanted}" is not a treatment: "elementary" or "lumped"'))
        elif wanted == ELEMENTARY and is_lumped(system, enzyme.name) and enzyme.steps:
            problems.append(Problem(path, "is lumped already; start from the system file to have its steps"))
        elif wanted == LUMPED and not is_lumped(system, enzyme.name):
            try:
                made[enzyme.name] = lump(system, enzyme)
            except MechanismError as error:
                problems.append(Problem(path, str(error)))
    if problems:
        raise InputError(system.source or "system", problems)
    if not made:
        return system
    species = [
        made[s.enzyme][0] if s.enzyme in made else s
        for s in system.species
        if s.enzyme not in made or s.name == s.enzyme
    ]
    reactions: list[Reaction] = []
    for reaction in system.reactions:
        if reaction.enzyme not in made:
            reactions.append(reaction)
        elif reaction.name == _first(system, reaction.enzyme):
            reactions += made[reaction.enzyme][1]
    return replace(
        system,
        species=tuple(species),
        reactions=tuple(reactions),
        treatments=tuple((e.name, LUMPED if e.name in made else now.get(e.name, ELEMENTARY)) for e in system.enzymes),
    )


def is_lumped(system: System, enzyme: str) -> bool:
    """Whether an enzyme of this system stands for itself and all its complexes."""
    return all(s.name == enzyme for s in system.species if s.enzyme == enzyme)


def lumped_enzymes(system: System) -> tuple[Enzyme, ...]:
    """The enzymes with steps of their own that are lumped in this system."""
    return tuple(e for e in system.enzymes if e.steps and is_lumped(system, e.name))


def lump(system: System, enzyme: Enzyme) -> tuple[Species, tuple[Reaction, ...]]:
    """The species and the reactions that stand for a lumped enzyme.

    Raises MechanismError for a mechanism of too many states, and for constants that break closure.
    """
    excess = closure_excess(enzyme) if len(enzyme.states) else 0.0
    if excess > CLOSURE:
        RT = system.conditions.RT_kJ_per_mol
        raise MechanismError(
            f"its constants break closure by {excess * RT:.4g} kJ/mol: ways through its steps disagree on the energy, and "
            "a lumped enzyme would work for nothing",
            "steps",
        )
    reactions = [lumped_reaction(system, enzyme, law) for law in flux_laws(enzyme)]
    if enzyme.half_life_s is not None:
        name, reason = f"{enzyme.name}.inactivates", f"{enzyme.label} inactivates for good"
        equation = Equation(((enzyme.name, 1),), (), 0, False)
        rate = math.log(2.0) / enzyme.half_life_s
        reactions.append(
            Reaction(name, name, equation, None, None, rate, None, "one way", one_way=reason, enzyme=enzyme.name)
        )
    free = next(s for s in system.species if s.name == enzyme.name)
    return replace(free, holds=()), tuple(reactions)


def lumped_reaction(system: System, enzyme: Enzyme, law: FluxLaw) -> Reaction:
    """One net reaction of an enzyme at steady-state flux, the enzyme on both sides."""
    activities = enzyme.activities
    energy, water = 0.0, 0
    for times, activity in zip(law.turns, activities, strict=True):
        stated = system.reaction(activity.reaction)
        assert stated.dG0_kJ_per_mol is not None
        energy += times * stated.dG0_kJ_per_mol
        water += times * stated.equation.water
    K = math.exp(-energy / system.conditions.RT_kJ_per_mol)
    name = f"{enzyme.name}.{reaction_name(enzyme, law)}"
    both = ((enzyme.name, 1),)
    equation = Equation(
        both + tuple(Counter(law.reactants).items()), both + tuple(Counter(law.products).items()), water, True
    )
    variables = diagram(enzyme).variables
    numerator = _terms(law.numerator, variables, law)
    factor = RateFactor(
        () if len(numerator) == 1 and not numerator[0].ligands else numerator, _terms(law.denominator, variables, law)
    )
    turns = tuple((a.reaction, n) for n, a in zip(law.turns, activities, strict=True) if n)
    return Reaction(
        name,
        name,
        equation,
        energy,
        K,
        law.forward,
        law.forward / K,
        "enzyme",
        enzyme=enzyme.name,
        factor=factor,
        turns=turns,
    )


def reaction_name(enzyme: Enzyme, law: FluxLaw) -> str:
    """The reaction of the file, or "a_less_b" for the exchange that runs a forward and b backward."""
    more = [a.reaction for turns, a in zip(law.turns, enzyme.activities, strict=True) for _ in range(turns)]
    less = [a.reaction for turns, a in zip(law.turns, enzyme.activities, strict=True) for _ in range(-turns)]
    return "_and_".join(more) + "".join(f"_less_{name}" for name in less)


def _terms(polynomial: Polynomial, variables: tuple[Variable, ...], law: FluxLaw) -> tuple[Term, ...]:
    """Terms of the rate factor; half way through a firing half its reactants and half its products are about."""
    about = Counter(law.reactants) + Counter(law.products)
    terms = []
    for coefficient, powers in zip(polynomial.coefficient, polynomial.exponent, strict=True):
        ligands = [
            (v.species, 0.5 * about[v.species] - v.held)
            for v, power in zip(variables, powers, strict=True)
            for _ in range(power)
        ]
        terms.append(Term(float(coefficient), tuple(ligands)))
    return tuple(terms)


def _first(system: System, enzyme: str) -> str:
    return next(r.name for r in system.reactions if r.enzyme == enzyme)
