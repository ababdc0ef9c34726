"""Networks to measure on: closed, reversible, with energies that close because they come from potentials."""

from __future__ import annotations

import numpy as np

from driblet.network import Channel, Network

SPECIES = {2: 2, 6: 5, 14: 10, 30: 20, 60: 36, 120: 70, 300: 180}
_ONE_COPY_M = 1.6605391e-8  # in 0.1 fL
_RT = 2.4789571  # kJ/mol at 25 degC


def random_reactions(channels: int, seed: int = 1) -> tuple[int, list[tuple[list[int], list[int]]]]:
    """Species number and reversible reactions: isomerisations, associations and exchanges, mass kept."""
    rng = np.random.default_rng(seed)
    n = SPECIES.get(channels, max(3, int(0.6 * channels)))
    mass = np.ones(n, dtype=int)
    mass[int(np.ceil(0.6 * n)) :] = 2
    singles, doubles = (np.flatnonzero(mass == m) for m in (1, 2))
    if n == 2:
        return 2, [([0], [1])]
    found: list[tuple[list[int], list[int]]] = []
    while len(found) < channels // 2:
        kind = rng.random()
        if kind < 0.45:
            pool = singles if rng.random() < 0.6 or len(doubles) < 2 else doubles
            a, b = rng.choice(pool, 2, replace=False)
            left, right = [a], [b]
        elif kind < 0.75:
            left, right = list(rng.choice(singles, 2, replace=False)), [rng.choice(doubles)]
        else:
            left = [rng.choice(singles), rng.choice(doubles)]
            right = [rng.choice(singles), rng.choice(doubles)]
            if left[0] == right[0] or left[1] == right[1]:
                continue
        pair = (sorted(map(int, left)), sorted(map(int, right)))
        if pair not in found and pair[::-1] not in found:
            found.append(pair)
    return n, found


def system_text(channels: int, seed: int = 1, copies: int = 100) -> str:
    """A system file with that many channels, in 0.1 fL."""
    rng = np.random.default_rng([seed, 7])
    n, reactions = random_reactions(channels, seed)
    names = [f"S{i}" for i in range(n)]
    potential = rng.uniform(-2.0, 2.0, n)
    lines = ['title = "Random network"', "[conditions]", 'temperature = "25 degC"', "[compartments.drop]"]
    lines += ['volume = "0.1 fL"', "[species]", *(f'{name} = "{copies} copies"' for name in names)]
    for k, (left, right) in enumerate(reactions):
        energy = sum(potential[i] for i in right) - sum(potential[i] for i in left)
        energy += _RT * np.log(100 * _ONE_COPY_M) * (len(left) - len(right))  # even at about a hundred copies each
        rate = float(np.exp(rng.uniform(-1.0, 1.0)))
        unit = "/s"
        if len(left) == 2:
            rate *= 0.01 / _ONE_COPY_M
            unit = "/M/s"
        equation = " + ".join(names[i] for i in left) + " <=> " + " + ".join(names[i] for i in right)
        lines += [f"[reactions.r{k}]", f'equation = "{equation}"', f'energy = "{energy:.9f} kJ/mol"']
        lines += [f'forward = "{rate:.9e} {unit}"']
    lines += ["[run]", 'duration = "1 s"', "replicates = 640"]
    return "\n".join(lines) + "\n"


def ring(channels: int, seed: int = 1) -> tuple[Network, np.ndarray]:
    """A large sparse network and its rates: a ring of isomerisations, each neighbouring pair also associating."""
    rng = np.random.default_rng(seed)
    half = channels // 4
    found: list[Channel] = []
    rates = []
    for i in range(half):
        j, complex_ = (i + 1) % half, half + i
        pairs = [([i], [j], 1.0), ([j], [i], 1.0), ([i, j], [complex_], 0.05), ([complex_], [i, j], 1.0)]
        for left, right, rate in pairs:
            change = tuple((s, -1) for s in left) + tuple((s, 1) for s in right)
            found.append(Channel(len(found) // 2, 1, tuple((s, 1) for s in left), change, 1.0, len(left)))
            rates.append(rate * float(np.exp(rng.uniform(-2.0, 2.0))))
    names = tuple(f"S{i}" for i in range(2 * half))
    return Network(names, tuple(f"r{j}" for j in range(2 * half)), tuple(found)), np.array(rates)
