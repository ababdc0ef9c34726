"""When is a ratio of means not the equilibrium constant?

A transfer ATP + sugar <=> ADP + sugarP with K' = 10 among N + N molecules: the ratio of mean products that an experiment
would report lies above K' when N is small. Points are simulated, the line is exact; only at hundreds of molecules does
the ratio settle at K'. Usage: python examples/finite_counts.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import driblet
from driblet.statistics import jackknife
from driblet_analysis.figures import COLOURS, save, style
from driblet_analysis.references.count_equilibrium import count_law

TEXT = """
[conditions]
temperature = "25 degC"
[compartments.vesicle]
volume = "{volume} aL"
[species]
ATP = "{n} copies"
sugar = "{n} copies"
ADP = "0 copies"
sugarP = "0 copies"
[reactions.transfer]
equation = "ATP + sugar <=> ADP + sugarP"
K = 10
forward = "5000 /M/s"
[run]
replicates = 400
duration = "20 s"
sample_every = "0.1 s"
"""
EXACT = [2, 3, 4, 6, 8, 12, 16, 24, 32, 48, 64, 100, 150, 200]
SIMULATED = [2, 4, 6, 12, 32, 100]


def ratio(means):
    """<ADP><sugarP> / <ATP><sugar>, the ratio of mean counts; columns in the order of the file."""
    return means[2] * means[3] / (means[0] * means[1])


def system_of(n):
    return driblet.loads(TEXT.format(n=n, volume=n / 120))  # the same 0.2 mM at every n


exact = []
for n in EXACT:
    system = system_of(n)
    exact.append(ratio(count_law(system, [n, n, 0, 0], system.compartment.omega).mean()))
points = []
for n in SIMULATED:
    run = driblet.run(system_of(n), seed=n)
    late = run.counts[:, len(run.time_s) // 2 :].mean(axis=1)
    points.append(jackknife(ratio, late))

with style():
    figure = Figure(figsize=(6.4, 4.2), layout="constrained")
    ax = figure.subplots()
    ax.axhline(10, color=COLOURS[6], linewidth=1.2, linestyle=(0, (5, 3)), label="K′ = 10 (many molecules)")
    ax.plot(EXACT, exact, color=COLOURS[0], linewidth=1.8, label="exact for N + N molecules")
    values, errors = np.array(points).T
    ax.errorbar(SIMULATED, values, 2 * errors, fmt="o", color=COLOURS[1], capsize=3, label="simulated, ± 2 s.e.")
    ax.set_xscale("log")
    ax.set_xlabel("N, molecules of each substrate per vesicle")
    ax.set_ylabel("⟨ADP⟩⟨sugarP⟩ / ⟨ATP⟩⟨sugar⟩")
    ax.set_title("The ratio of means overstates K′ when molecules are few")
    ax.legend()
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print("written:", save(figure, folder / "finite_counts.png"))
