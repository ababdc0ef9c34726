"""The factor by which a lumped or saturable rate law departs from mass action: a ratio of polynomials in counts."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Term:
    """coefficient * prod_i c_i, in (mol/L)^-m for m ligands.

    ligands : (species, shift) as often as they stand there, c = (n + shift) / Omega and never below zero, n the count at
    the state common to both directions of the reaction: reactants gone, products not there yet.
    """

    coefficient: float
    ligands: tuple[tuple[str, float], ...] = ()


@dataclass(frozen=True)
class RateFactor:
    """f = numerator / denominator, which both directions of a reaction share at their common state.

    numerator : the terms, empty for 1; denominator : the terms; all coefficients are positive.
    """

    numerator: tuple[Term, ...]
    denominator: tuple[Term, ...]
