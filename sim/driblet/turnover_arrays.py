"""Noise of the turnovers of lumped enzymes, laid out for the leap engine (engines/leap_arrays.Turnover)."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from driblet.engines.leap_arrays import Turnover, no_turnover
from driblet.lumping import lumped_enzymes
from driblet.network import Network
from driblet.system import System
from driblet.system.mechanisms.king_altman import Polynomial, flux_laws
from driblet.system.mechanisms.turnover_noise import turnover_noise

Array = NDArray[np.float64]


@dataclass(frozen=True)
class TurnoverTable:
    """The arrays and their coefficients at Omega = 1. degree : ligands each coefficient's monomial multiplies."""

    arrays: Turnover
    coefficient: Array
    degree: Array

    @classmethod
    def of(cls, system: System, network: Network) -> TurnoverTable:
        """For the enzymes of `system` that are lumped and have a law for each of their activities alone."""
        free = {name: i for i, name in enumerate(network.species)}
        held = system.held_concentrations()
        pairs = {name: r for r, name in enumerate(network.reactions)}
        parts: list[_Enzyme] = []
        for enzyme in lumped_enzymes(system):
            own = [r for r in system.reactions if r.enzyme == enzyme.name and r.factor is not None]
            laws = flux_laws(enzyme)
            unit = _units([law.turns for law in laws], len(enzyme.activities))
            if len(own) != len(laws) or unit is None:
                continue
            parts.append(_Enzyme(system, enzyme.name, [pairs[r.name] for r in own], unit, free, held))
        if not parts:
            return cls(no_turnover(), np.zeros(0), np.zeros(0))
        most = max(p.activities for p in parts)
        turns = np.zeros((sum(len(p.pairs) for p in parts), most))
        units = np.full((len(parts), most), -1, dtype=np.int64)
        at = 0
        for e, part in enumerate(parts):
            for law in part.laws:
                turns[at, : part.activities] = law.turns
                at += 1
            units[e, : part.activities] = part.unit
        ints = np.int64
        return cls(
            Turnover(
                np.array([free[p.name] for p in parts], dtype=ints),
                np.array([p.activities for p in parts], dtype=ints),
                _starts([len(p.pairs) for p in parts]),
                np.array([k for p in parts for k in p.pairs], dtype=ints),
                turns,
                units,
                _starts([len(p.monomials) for p in parts]),
                _starts([len(m) for p in parts for m in p.monomials]),
                np.array([i for p in parts for m in p.monomials for i, _ in m], dtype=ints),
                np.array([float(h) for p in parts for m in p.monomials for _, h in m]),
                _starts([len(p.rows) for p in parts]),
                _starts([p.rows.size for p in parts]),
            ),
            np.concatenate([p.rows.ravel() for p in parts]),
            np.concatenate([np.tile(p.degree, len(p.rows)) for p in parts]),
        )

    def coefficients(self, omega: Array) -> Array:
        """For each Omega, shape=(replicates, coefficients)."""
        return np.asarray(self.coefficient * np.asarray(omega, dtype=float)[:, None] ** -self.degree)


class _Enzyme:
    def __init__(
        self,
        system: System,
        name: str,
        pairs: list[int],
        unit: list[int],
        free: Mapping[str, int],
        held: Mapping[str, float],
    ) -> None:
        enzyme = next(e for e in system.enzymes if e.name == name)
        noise = turnover_noise(enzyme)
        self.name, self.pairs, self.laws = name, pairs, flux_laws(enzyme)
        self.unit = [pairs[k] for k in unit]
        self.activities = count = len(enzyme.activities)
        second = [noise.dd_c0[a][b] for a in range(count) for b in range(a, count)]
        per_s = noise.unit_per_s
        rows = [(noise.c1, 1.0), (noise.c2, 1.0 / per_s)]
        rows += [(d, 1.0) for d in noise.d_c1] + [(d, -per_s) for d in second]
        found: dict[tuple[tuple[int, int], ...], dict[int, float]] = {}
        for k, (polynomial, scale) in enumerate(rows):
            for monomial, value in _terms(polynomial, noise.variables, free, held):
                entry = found.setdefault(monomial, {})
                entry[k] = entry.get(k, 0.0) + scale * value
        self.monomials = list(found)
        self.rows = np.array([[found[m].get(k, 0.0) for m in self.monomials] for k in range(len(rows))])
        self.degree = np.array([float(len(m)) for m in self.monomials])


def _terms(
    polynomial: Polynomial, variables: tuple[tuple[str, int], ...], free: Mapping[str, int], held: Mapping[str, float]
) -> list[tuple[tuple[tuple[int, int], ...], float]]:
    """Each term as its variables (species, molecules held already) and its coefficient, held species multiplied in."""
    found = []
    for coefficient, powers in zip(polynomial.coefficient, polynomial.exponent, strict=True):
        value, monomial = float(coefficient), []
        for (name, bound), power in zip(variables, powers, strict=True):
            if name in held:
                value *= held[name] ** int(power)
            else:
                monomial += [(free[name], bound)] * int(power)
        found.append((tuple(sorted(monomial)), value))
    return found


def _units(turns: list[tuple[int, ...]], activities: int) -> list[int] | None:
    """For each activity the law that turns it once and nothing else; None where one has none."""
    found = []
    for a in range(activities):
        wanted = tuple(int(b == a) for b in range(activities))
        if wanted not in turns:
            return None
        found.append(turns.index(wanted))
    return found


def _starts(lengths: list[int]) -> NDArray[np.int64]:
    return np.cumsum([0, *lengths]).astype(np.int64)
