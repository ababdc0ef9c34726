"""How long does one enzyme molecule take for a turnover, and how regular is it?

A single enzyme E + S <=> ES <=> EP <=> E + P is watched at several substrate concentrations. Its mean turnover time
follows the Michaelis-Menten equation, but the times are not exponential: where binding and catalysis take equally
long, turnovers come more regularly than at random, and the variance of their number falls below its mean (the randomness
parameter of Kou et al., J. Phys. Chem. B 109:19068, 2005). Bars and points are simulated, lines exact.
Usage: python examples/turnover_times.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure
from scipy.linalg import expm

import driblet
from driblet.system.mechanisms.steady_state import generator
from driblet_analysis.figures import COLOURS, LAW_COLOUR, save, style

TEXT = """
[conditions]
temperature = "25 degC"
[compartments.vesicle]
volume = "1 fL"
[species]
S = {{ amount = "{S} uM", held = true }}
P = "0 copies"
[reactions.catalysis]
equation = "S <=> P"
energy = "-60 kJ/mol"
[enzymes.E]
amount = "1 copies"
catalyses = "catalysis"
mechanism = "uni uni"
[enzymes.E.steps]
binds_S = {{ forward = "2e6 /M/s", backward = "30 /s" }}
catalysis = {{ forward = "60 /s" }}
releases_P = {{ forward = "1e5 /s", backward = "10 /M/s" }}
"""
K1, K_OFF, K2 = 2e6, 30.0, 60.0
KM = (K_OFF + K2) / K1
SHOWN = [9, 45, 225]
SWEPT = [2, 5, 10, 20, 45, 100, 200, 500, 1000]


def system_at(S_uM):
    return driblet.loads(TEXT.format(S=S_uM))


def first_turnovers(S_uM, replicates=4000):
    """Share of enzymes that have turned over by each time: a distribution of first turnover times on a grid."""
    mean = (KM + S_uM * 1e-6) / (K2 * S_uM * 1e-6)
    run = driblet.run(system_at(S_uM), replicates=replicates, duration=4 * mean, sample_every=mean / 8, seed=S_uM)
    return run.time_s, (run.turnovers("catalysis") > 0).mean(axis=0), mean


def exact_density(S_uM, times):
    """The same, exact: the enzyme's own generator with the turnover taken out (a phase-type law)."""
    enzyme = system_at(S_uM).enzymes[0]
    rates = generator(enzyme, {"S": S_uM * 1e-6, "P": 0.0})
    counted = enzyme.steps[enzyme.activities[0].counted]
    within = rates - np.diag(rates.sum(axis=1))
    within[counted.source, counted.target] = 0.0  # leaves for good
    start = np.eye(len(rates))[0]
    return np.array([(start @ expm(within * t))[counted.source] * counted.forward for t in times])


def fano(S_uM, replicates=2000, turnovers=40):
    mean = (KM + S_uM * 1e-6) / (K2 * S_uM * 1e-6)
    run = driblet.run(
        system_at(S_uM), replicates=replicates, duration=turnovers * mean, sample_every=turnovers * mean, seed=S_uM
    )
    n = run.turnovers("catalysis")[:, -1].astype(float)
    value = n.var(ddof=1) / n.mean()
    return value, value * np.sqrt(2 / replicates)


with style():
    figure = Figure(figsize=(9.2, 4.0), layout="constrained")
    left, right = figure.subplots(1, 2)
    for colour, S in zip(COLOURS, SHOWN, strict=False):
        edges, share, mean = first_turnovers(S)
        density = np.diff(share) / np.diff(edges)
        left.stairs(density, edges * 1e3, fill=True, alpha=0.35, color=colour)
        fine = np.linspace(0, edges[-1], 200)
        left.plot(fine * 1e3, exact_density(S, fine), color=colour, label=f"{S} µM, mean {mean * 1e3:.3g} ms")
    left.set_xlim(0, 250)
    left.set_xlabel("time to the first turnover (ms)")
    left.set_ylabel("probability density (1/s)")
    left.set_title("Turnover times of one molecule")
    left.legend(title="substrate")
    S = np.geomspace(1.5, 1300, 200) * 1e-6
    total = K1 * S + K_OFF + K2
    right.plot(S * 1e6, (total**2 - 2 * K1 * K2 * S) / total**2, color=LAW_COLOUR, label="Kou et al. (2005)")
    values, errors = np.array([fano(s) for s in SWEPT]).T
    right.errorbar(SWEPT, values, 2 * errors, fmt="o", color=COLOURS[1], capsize=3, label="simulated, ± 2 s.e.")
    right.axhline(1, color=COLOURS[6], linewidth=1.0, linestyle=(0, (5, 3)))
    right.axvline(KM * 1e6, color=COLOURS[6], linewidth=1.0, linestyle=(0, (1, 2)), label="K_M = 45 µM")
    right.set_xscale("log")
    right.set_ylim(0.4, 1.15)
    right.set_xlabel("substrate (µM)")
    right.set_ylabel("variance over mean of the turnovers")
    right.set_title("Most regular where substrate is at K_M")
    right.legend()
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print("written:", save(figure, folder / "turnover_times.png"))
