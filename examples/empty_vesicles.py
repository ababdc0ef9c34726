"""What share of the vesicles holds no enzyme at all? Enzyme concentration against share, for vesicles of several sizes.

A stock of 1 uM looks generous, yet a 100 nm vesicle of it holds 0.2 copies in the mean. Points are loads drawn by driblet
(600 vesicles each), lines are exact: exp(-mean) for vesicles of one size, averaged over the sizes where they differ.
Usage: python examples/empty_vesicles.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import driblet
from driblet.loading import prepare
from driblet_analysis.enzyme_facts import share_without
from driblet_analysis.figures import COLOURS, save, style

TEXT = """
[conditions]
temperature = "25 degC"
[compartments.lumen]
diameter = {{ median = "{diameter} nm", cv = {cv} }}
wall = "4 nm"
[species]
S = "1 mM"
P = "0 copies"
[reactions.r]
equation = "S <=> P"
energy = "-20 kJ/mol"
[enzymes.E]
amount = "{amount} nM"
catalyses = "r"
mechanism = "uni uni"
kcat = "50 /s"
KM = {{ S = "0.1 mM" }}
[run]
loading = "poisson"
"""
CURVES = [(100, 0.0), (200, 0.0), (200, 0.35), (400, 0.0)]
VESICLES = 600


def system_of(diameter, cv, amount):
    return driblet.loads(TEXT.format(diameter=diameter, cv=cv, amount=amount))


def drawn(system, seed):
    """Share of drawn vesicles without the enzyme, and its standard error."""
    column = [s.name for s in system.free_species].index("E")
    empty = (prepare(system, seed, range(VESICLES)).counts[:, column] == 0).mean()
    return empty, np.sqrt(max(empty * (1 - empty), 1 / VESICLES) / VESICLES)


with style():
    figure = Figure(figsize=(6.8, 4.4), layout="constrained")
    ax = figure.subplots()
    fine, coarse = np.geomspace(1, 2e4, 60), np.geomspace(3, 1e4, 8)
    for colour, (diameter, cv) in zip(COLOURS, CURVES, strict=False):
        exact = []
        for amount in fine:
            system = system_of(diameter, cv, amount)
            exact.append(share_without(system, next(s for s in system.species if s.name == "E")))
        spread = f", cv {cv:g}" if cv else ""
        style_of_line = "--" if cv else "-"
        ax.plot(fine, 100 * np.array(exact), style_of_line, color=colour, label=f"{diameter} nm{spread}")
        points = np.array([drawn(system_of(diameter, cv, amount), k) for k, amount in enumerate(coarse)])
        ax.errorbar(coarse, 100 * points[:, 0], 200 * points[:, 1], fmt="o", markersize=4, color=colour, capsize=2)
    ax.set_xscale("log")
    ax.set_xlabel("enzyme in the stock (nM)")
    ax.set_ylabel("vesicles without a single copy (%)")
    ax.set_title("Most small vesicles are empty of a dilute enzyme")
    ax.legend(title="outer diameter")
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print("written:", save(figure, folder / "empty_vesicles.png"))
