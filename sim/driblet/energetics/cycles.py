"""Cycles, conservation laws and the affinity of emergent cycles, by exact integer elimination.

A cycle is a combination of reactions that changes nothing; energies must sum to zero along each (the first law). Null
vectors that appear only when held species lose their rows are emergent cycles: the drive (Polettini & Esposito,
J. Chem. Phys. 141:024117, 2014).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import gcd

import numpy as np
from numpy.typing import NDArray

Vector = NDArray[np.int64]
_LARGE = 2**31  # products and sums of smaller numbers stay exact in int64
CLOSURE_TOLERANCE = 1e-6  # kJ/mol; energies that sum to less along a cycle close it


def dependencies(rows: NDArray[np.int64]) -> Vector:
    """Every linear dependency among integer rows: an exact basis of the left null space.

    rows : int64, shape=(n, m). Returns the smallest whole numbers, shape=(k, n), int64, or object where they are huge;
    each dependency expresses one row by independent rows before it, so the basis is unique for an order of rows.
    """
    n = rows.shape[0]
    pivots: dict[int, tuple[dict[int, int], dict[int, int]]] = {}
    found: list[dict[int, int]] = []
    for i in range(n):
        row = {int(j): int(rows[i, j]) for j in np.flatnonzero(rows[i])}
        mix = {i: 1}
        while row:
            column = min(row)
            if column not in pivots:
                pivots[column] = (row, mix)
                break
            pivot, pivot_mix = pivots[column]
            a, b = pivot[column], row[column]
            row, mix = _combine(row, a, pivot, -b), _combine(mix, a, pivot_mix, -b)
            divisor = gcd(*row.values(), *mix.values())
            if divisor > 1:
                row = {k: v // divisor for k, v in row.items()}
                mix = {k: v // divisor for k, v in mix.items()}
        else:
            divisor = gcd(*mix.values()) * (1 if mix[i] > 0 else -1)
            found.append({k: v // divisor for k, v in mix.items()})
    # the smallest whole numbers of a tangled network can be larger than 64 bits hold; then Python's own integers
    large = max((abs(value) for mix in found for value in mix.values()), default=0) > _LARGE
    basis = np.zeros((len(found), n), dtype=object if large else np.int64)
    for k, mix in enumerate(found):
        for i, value in mix.items():
            basis[k, i] = value
    return basis


def _combine(x: dict[int, int], a: int, y: dict[int, int], b: int) -> dict[int, int]:
    out = {k: a * v for k, v in x.items()}
    for k, v in y.items():
        value = out.get(k, 0) + b * v
        if value:
            out[k] = value
        else:
            out.pop(k, None)
    return out


def cycles(stoichiometry: NDArray[np.int64]) -> Vector:
    """Basis of the combinations of reactions that change no species.

    stoichiometry : int64, shape=(species, reactions). Returns int64, shape=(cycles, reactions).
    """
    return dependencies(np.ascontiguousarray(stoichiometry.T))


def conservation_laws(stoichiometry: NDArray[np.int64]) -> Vector:
    """Basis of the conserved sums of counts, with non-negative weights where adding laws achieves it.

    stoichiometry : int64, shape=(species, reactions). Returns int64, shape=(laws, species).
    """
    basis = dependencies(stoichiometry)
    laws = np.where(basis.sum(axis=1)[:, None] >= 0, basis, -basis).reshape(len(basis), stoichiometry.shape[0])
    for _ in range(len(laws)):
        before = laws.copy()
        for k in np.flatnonzero((laws < 0).any(axis=1)):
            laws[k] = _lift(laws[k], np.delete(laws, k, axis=0))
        if (laws == before).all():
            break
    return laws


def _lift(law: Vector, others: Vector) -> Vector:
    """`law` plus whatever multiple of another law, a row of `others`, rids it of negative weights, if any does."""
    candidates = [law[None], -law[None]]
    positive = others[(others >= 0).all(axis=1)]
    for sign in (law, -law):
        negative = sign < 0
        fitting = positive[(positive[:, negative] > 0).all(axis=1)]
        if not negative.any():
            candidates.append(np.repeat(sign[None], len(fitting), axis=0))
        elif len(fitting):
            times = np.max(-(sign[negative] // fitting[:, negative]), axis=1)
            candidates.append(sign + times[:, None] * fitting)
    rows = np.vstack(candidates)
    best = rows[np.lexsort((np.abs(rows).sum(axis=1), (rows < 0).sum(axis=1)))[0]]
    divisor = gcd(*(int(v) for v in best)) or 1
    return np.asarray(best // divisor)


@dataclass(frozen=True)
class OpenCycle:
    """A cycle whose energies do not sum to zero.

    Attributes: reactions : int64, shape=(reactions,), how often each is run; excess : kJ/mol, the sum found.
    """

    reactions: Vector
    excess: float


def unclosed_cycles(stoichiometry: NDArray[np.int64], dG0: NDArray[np.float64]) -> list[OpenCycle]:
    """The cycles along which dG0' does not sum to zero within CLOSURE_TOLERANCE.

    stoichiometry : shape=(species, reactions), held species included, water left out; dG0 : kJ/mol.
    """
    found = []
    for vector in cycles(stoichiometry):
        vector = vector if vector[np.flatnonzero(vector)[0]] > 0 else -vector
        excess = float(vector @ dG0)
        if abs(excess) > CLOSURE_TOLERANCE * max(1, int(np.abs(vector).sum())):
            found.append(OpenCycle(vector, excess))
    return found


def emergent_cycles(stoichiometry: NDArray[np.int64], held: NDArray[np.bool_]) -> Vector:
    """Cycles over the free species that turn over held ones: a basis that completes the ordinary cycles.

    stoichiometry : shape=(species, reactions); held : shape=(species,). Returns shape=(emergent, reactions).
    """
    closed = cycles(stoichiometry)
    rank = len(closed)
    kept: list[Vector] = []
    for vector in cycles(stoichiometry[~held]):
        trial = np.vstack([closed, *[k[None] for k in kept], vector[None]])
        if trial.shape[0] - len(dependencies(trial)) > rank:
            kept.append(vector)
            rank += 1
    return np.vstack([np.zeros((0, stoichiometry.shape[1]), dtype=np.int64), *kept])


def reconciled(
    stoichiometry: NDArray[np.int64], dG0: NDArray[np.float64], sd: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Energies nearest to `dG0` that close every cycle: weighted least squares on the closure constraints.

    dG0, sd : kJ/mol, shape=(reactions,); an energy with a small sd moves little, one with sd = 0 not at all.
    Raises ValueError when the energies with sd = 0 alone leave a cycle open.
    """
    basis = cycles(stoichiometry).astype(float)
    if not len(basis):
        return dG0.copy()
    weighted = basis * sd**2
    multipliers, *_ = np.linalg.lstsq(weighted @ basis.T, basis @ dG0, rcond=None)
    moved = dG0 - weighted.T @ multipliers
    if np.max(np.abs(basis @ moved)) > CLOSURE_TOLERANCE:
        raise ValueError("the energies that may not move leave a cycle open")
    return np.asarray(moved)
