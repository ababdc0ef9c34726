"""How long does a vesicle stay powered, against the copies of the enzyme that spends its ATP?

One reservoir, one to sixteen pumps in a vesicle of 100 nm. For each number of pumps the time at which the energy of ATP
hydrolysis first fails, over compartments that share all but chance; beside it what a division of the mean reservoir by the
mean rate would say. Few pumps live long; what differs between vesicles of one number is how many molecules they received,
what differs between vesicles of one preparation is above all how many pumps they received (right).
Usage: python examples/lifetime_against_copies.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import driblet
from driblet_analysis.figures import COLOURS, save, style
from driblet_analysis.lifetime import lifetimes

TEXT = """
[conditions]
temperature = "37 degC"
[compartments.lumen]
diameter = {{ median = "100 nm", cv = 0.05 }}
wall = "4 nm"
[species]
ATP      = "2 mM"
ADP      = "20 uM"
PCr      = "8 mM"
creatine = "0.5 mM"
Pi       = "1 mM"
pump     = {pump}
[reactions.buffering]
equation = "ADP + PCr <=> ATP + creatine"
energy   = "-12.5 kJ/mol"
forward  = "4000 /M/s"
[reactions.pumping]
equation = "ATP + pump + H2O <=> ADP + Pi + pump"
energy   = "-32 kJ/mol"
forward  = "600 /M/s"
[reactions.loss]
equation = "ATP + H2O <=> ADP + Pi"
energy   = "-32 kJ/mol"
forward  = "1e-6 /s"
[requirements.powered]
must = "gibbs(loss) < -50 kJ/mol"
when = "throughout"
averaged_over = "5 s"
[run]
replicates = 150
duration = "60 min"
loading = "poisson"
"""
PUMPS = [1, 2, 3, 4, 6, 8, 11, 16]
PREPARATION = 4  # pumps in the mean vesicle of a preparation


def life(pump, seed, **more):
    system = driblet.loads(TEXT.format(pump=pump))
    run = driblet.run(system, seed=seed, record="summary", **more)
    return system, lifetimes(run).each[0].survival


with style():
    figure = Figure(figsize=(9.2, 4.2), layout="constrained")
    left, right = figure.subplots(1, 2, width_ratios=(1.1, 1.0))
    middle, low, high = [], [], []
    for number in PUMPS:
        system, curve = life(f'{{ amount = "{number} copies", loading = "nearest" }}', number)
        middle.append(curve.quantile(0.5).value / 60)
        low.append(curve.quantile(0.05).value / 60)
        high.append(curve.quantile(0.95).value / 60)
    left.fill_between(PUMPS, low, np.minimum(high, 60.0), color=COLOURS[0], alpha=0.22, label="90 % of vesicles")
    left.plot(PUMPS, middle, color=COLOURS[0], marker="o", linewidth=2, label="median")
    concentration = {s.name: s.concentration_M for s in system.species}
    reserve = (concentration["ATP"] + concentration["PCr"]) * system.compartment.omega
    naive = reserve / (600 * concentration["ATP"] * np.array(PUMPS)) / 60
    left.plot(PUMPS, naive, color=COLOURS[1], linestyle="--", label="reservoir / rate of spending")
    left.set_xscale("log")
    left.set_yscale("log")
    left.set_xticks(PUMPS, [str(n) for n in PUMPS])
    left.set_xticks([], minor=True)
    left.set_yticks([1, 2, 5, 10, 20, 60], ["1", "2", "5", "10", "20", "60"])
    left.set_yticks([], minor=True)
    left.set_xlabel("pumps in a vesicle (copies)")
    left.set_ylabel("time powered (min)")
    left.set_title("Lifetime against copies")
    left.legend()

    for k, (pump, label) in enumerate(
        (
            (f'{{ amount = "{PREPARATION} copies", loading = "nearest" }}', f"{PREPARATION} pumps in each vesicle"),
            (f'"{PREPARATION} copies"', f"{PREPARATION} pumps on average, received at random"),
        )
    ):
        _, curve = life(pump, 90 + k, replicates=600)
        time = np.concatenate([[0.0], curve.time, [3600.0]]) / 60
        share = np.concatenate([[1.0], curve.survival, curve.survival[-1:]])
        right.step(time, share, where="post", color=COLOURS[2 * k], linewidth=2, label=label)
    right.set_xlim(0, 60)
    right.set_ylim(-0.02, 1.03)
    right.set_xlabel("time (min)")
    right.set_ylabel("share of vesicles still powered")
    right.set_title("The same mean, two preparations")
    right.legend()
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print("written:", save(figure, folder / "lifetime_against_copies.png"))
