"""A saturable rate law for an enzyme whose mechanism nobody states: kcat and K_M, and the energy for the way back.

    v = E kcat prod(s/K_s) (1 - Gamma/K') / (prod(1 + s/K_s) + prod(1 + p/K_p) - 1)

the common modular law of Liebermeister, Uhlendorf & Klipp (Bioinformatics 26:1528, 2010); products without a K_M do not slow the
enzyme. Both directions share the denominator at their common state, so that counts keep detailed balance. It is no mechanism:
there are no states, nothing is held, and turnovers come at random.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping

from driblet.system.equation import Equation
from driblet.system.mechanisms import Activity, Enzyme, EnzymeState
from driblet.system.model import Reaction
from driblet.system.rate_factors import RateFactor, Term

SATURABLE = "saturable"
MOST_MOLECULES = 2  # on a side; the enzyme is a third


def saturable_enzyme(
    name: str,
    label: str,
    reaction: Reaction,
    direction: int,
    kcat: float,
    KM: Mapping[str, float],
    **facts: float | None,
) -> Enzyme:
    """The enzyme as a value; facts : half_life_s, active_fraction, molar_mass."""
    substrates, products = (
        tuple(n for n, number in terms for _ in range(number)) for terms in _sides(reaction, direction)
    )
    activity = Activity(
        reaction.name,
        SATURABLE,
        direction,
        substrates,
        products,
        kcat,
        tuple(KM[n] for n in substrates),
        (),
        (),
        (),
        -1,
    )
    return Enzyme(name, label, (EnzymeState(name),), (), (activity,), **facts)  # type: ignore[arg-type]


def saturable_reaction(
    enzyme: str, reaction: Reaction, direction: int, kcat: float, KM: Mapping[str, float]
) -> Reaction:
    """The enzyme's reaction, the enzyme on both sides; KM : mol/L, of every substrate and some products."""
    assert reaction.K is not None
    substrates, products = _sides(reaction, direction)
    about = Counter(dict(substrates)) + Counter(dict(products))
    terms: Counter[tuple[tuple[str, float], ...]] = Counter()
    for ligands in (_molecules(substrates, KM, about), _molecules(products, KM, about)):
        for chosen in range(1 if ligands is None else 1 << len(ligands)):
            picked = [ligand for i, ligand in enumerate(ligands or []) if chosen >> i & 1]
            coefficient = math.prod(1.0 / K for _, _, K in picked)
            terms[tuple((n, shift) for n, shift, _ in picked)] += coefficient  # type: ignore[assignment]
    terms[()] = 1.0  # type: ignore[assignment]
    there = kcat / math.prod(KM[n] ** number for n, number in substrates)
    K = reaction.K if direction == 1 else 1.0 / reaction.K
    forward, backward = (there, there / K) if direction == 1 else (there / K, there)
    both = ((enzyme, 1),)
    equation = reaction.equation
    name = f"{enzyme}.{reaction.name}"
    return Reaction(
        name,
        name,
        Equation(both + equation.reactants, both + equation.products, equation.water, True),
        reaction.dG0_kJ_per_mol,
        reaction.K,
        forward,
        backward,
        "enzyme",
        enzyme=enzyme,
        factor=RateFactor((), tuple(Term(float(c), key) for key, c in terms.items())),
        turns=((reaction.name, 1),),
    )


def _sides(reaction: Reaction, direction: int) -> tuple[tuple[tuple[str, int], ...], tuple[tuple[str, int], ...]]:
    equation = reaction.equation
    return (equation.reactants, equation.products) if direction == 1 else (equation.products, equation.reactants)


def _molecules(
    side: tuple[tuple[str, int], ...], KM: Mapping[str, float], about: Mapping[str, int]
) -> list[tuple[str, float, float]] | None:
    """(species, shift, K) of each molecule on a side, None where one has no K_M; a second molecule finds one less."""
    if any(name not in KM for name, _ in side):
        return None
    return [(name, 0.5 * about[name] - i, KM[name]) for name, number in side for i in range(number)]
