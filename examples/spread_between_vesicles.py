"""How different are vesicles of one preparation, and is it loading or reaction noise?

One mixture enclosed at random in vesicles of 60 to 300 nm. For each size the spread of the charged share between
vesicles: with random loading and size, and with every vesicle loaded alike. Where the two curves part, the spread comes
from what each vesicle received, and no reaction would remove it. Usage: python examples/spread_between_vesicles.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import driblet
from driblet_analysis.figures import COLOURS, save, style

TEXT = """
[conditions]
temperature = "30 degC"
[compartments.lumen]
diameter = {{ median = "{diameter} nm", cv = {cv} }}
wall = "4 nm"
[species]
ATP = "0.2 mM"
ADP = "0.05 mM"
sugar = "0.2 mM"
sugarP = "0 copies"
[reactions.transfer]
equation = "ATP + sugar <=> ADP + sugarP"
energy = "-4 kJ/mol"
forward = "8000 /M/s"
[readouts]
charged = "sugarP / (sugar + sugarP)"
[run]
replicates = 400
duration = "4 s"
sample_every = "0.1 s"
loading = "{loading}"
"""
DIAMETERS = [60, 80, 100, 130, 170, 220, 300]


def spread(diameter, loading, cv):
    run = driblet.run(driblet.loads(TEXT.format(diameter=diameter, loading=loading, cv=cv)), seed=diameter)
    share = run.readout("charged")[:, -1]
    share = share[np.isfinite(share)]  # a vesicle that received no sugar has no share
    return share.std(ddof=1), share.std(ddof=1) / np.sqrt(2 * (len(share) - 1))


with style():
    figure = Figure(figsize=(6.4, 4.2), layout="constrained")
    ax = figure.subplots()
    for colour, loading, cv, label in (
        (COLOURS[1], "poisson", 0.15, "random loading, sizes spread by 15 %"),
        (COLOURS[0], "nearest", 0.0, "every vesicle loaded alike"),
    ):
        sd, error = np.array([spread(d, loading, cv) for d in DIAMETERS]).T
        ax.errorbar(DIAMETERS, sd, 2 * error, marker="o", color=colour, capsize=3, label=label)
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_xticks(DIAMETERS, [str(d) for d in DIAMETERS], minor=False)
    ax.set_xticks([], minor=True)
    ax.set_xlabel("outer diameter (nm)")
    ax.set_ylabel("sd of the charged share between vesicles")
    ax.set_title("What makes vesicles of one preparation differ")
    ax.legend()
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print("written:", save(figure, folder / "spread_between_vesicles.png"))
