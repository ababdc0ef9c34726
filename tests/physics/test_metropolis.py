"""The Metropolis sampler of equilibrium laws against enumeration, on ten small networks.

Means within 4.5 standard errors of nearly independent samples: false-alarm rate below 1e-3 over all comparisons. The twin
with a wrong factorial stands in test_run_check.py.
"""

from math import log

import numpy as np
import pytest

import driblet
from driblet.drive import runnable
from driblet.network import Network
from driblet_analysis.references.count_equilibrium import count_law, equilibrium_weights
from driblet_analysis.references.metropolis import metropolis

HEAD = '[conditions]\ntemperature = "25 degC"\n[compartments.v]\nvolume = "0.2 aL"\n[species]\n'
# species and copies (None: held at 30 uM), reactions with K
NETWORKS = [
    ({"A": 12, "B": 0}, [("A <=> B", "K = 3")]),
    ({"A": 9, "B": 0}, [("2 A <=> B", 'Kd = "40 uM"')]),
    ({"A": 8, "B": 5, "C": 0}, [("A + B <=> C", 'Kd = "30 uM"')]),
    ({"A": 6, "B": 6, "C": 0, "D": 0}, [("A + B <=> C + D", "K = 10")]),
    ({"A": 20, "B": 0, "C": 0}, [("A <=> B", "K = 2"), ("B <=> C", "K = 0.5")]),
    ({"A": 7, "B": 4, "C": 0, "D": 3}, [("A + B <=> C", 'Kd = "20 uM"'), ("C <=> D", "K = 4")]),
    ({"X": None, "A": 0}, [("X <=> A", "K = 2")]),
    ({"X": None, "A": 0, "B": 0}, [("X <=> A", "K = 1"), ("2 A <=> B", 'Kd = "60 uM"')]),
    ({"E": 2, "S": 9, "P": 0}, [("E + S <=> E + P", "K = 3")]),
    ({"A": 3, "B": 10, "C": 0}, [("3 B <=> A + C", 'K = "2000 /M"')]),
]


@pytest.mark.parametrize("k", range(len(NETWORKS)))
def test_sampled_means_and_spreads_are_the_enumerated_ones(k: int) -> None:
    amounts, reactions = NETWORKS[k]
    text = HEAD
    for name, copies in amounts.items():
        text += f'{name} = {{ amount = "30 uM", held = true }}\n' if copies is None else f'{name} = "{copies} copies"\n'
    for j, (equation, energy) in enumerate(reactions):
        order = sum(int(n[0]) if n[0].isdigit() else 1 for n in equation.split(" <=> ")[0].split(" + "))
        unit = {1: "/s", 2: "/M/s", 3: "/M^2/s"}[order]
        text += f'[reactions.r{j}]\nequation = "{equation}"\n{energy}\nforward = "1000 {unit}"\n'
    system = driblet.loads(text)
    network = Network.of(system)
    omega = system.compartment.omega
    load = np.array([round(s.mean_copies(omega)) for s in system.free_species])
    law = count_law(system, load, omega)
    assert law is not None
    present = frozenset(name for name, n in zip(network.species, load, strict=True) if n)
    ln_c, _ = equilibrium_weights(system, present)
    sampled = metropolis(network, load, ln_c + log(omega), runnable(system), 1000, seed=11 + k)
    sd = np.sqrt(np.diag(law.covariance()))
    moved = sd > 0
    assert np.all(np.abs(sampled.mean() - law.mean())[moved] < 4.5 * sd[moved] / np.sqrt(1000) * 1.3)
    assert np.all(np.abs(sampled.states.std(axis=0)[moved] / sd[moved] - 1.0) < 0.15)
    assert np.all(sampled.states[:, ~moved] == load[~moved])
