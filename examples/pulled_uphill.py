"""How far does ATP drive an uphill transfer, when the product is pulled on by a second reaction?

The transfer costs 12.5 kJ/mol; the reaction that follows releases 0 to 30. The share of acceptor converted at
equilibrium, in one attolitre: exact means with the spread between compartments, and simulated compartments for a few of
the energies. Usage: python examples/pulled_uphill.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import driblet
from driblet_analysis.figures import COLOURS, save, style
from driblet_analysis.references.count_equilibrium import count_law

TEXT = """
[conditions]
temperature = "25 degC"
[compartments.droplet]
volume = "0.2 aL"
[species]
ATP = "2 mM"
ADP = "0 copies"
acceptor = "0.25 mM"
acceptorP = "0 copies"
stored = "0 copies"
[reactions.transfer]
equation = "ATP + acceptor <=> ADP + acceptorP"
energy = "12.5 kJ/mol"
forward = "300 /M/s"
[reactions.storage]
equation = "acceptorP <=> stored"
energy = "{pull} kJ/mol"
forward = "5 /s"
[run]
replicates = 200
duration = "60 s"
sample_every = "1 s"
"""


def converted(counts, total):
    return (counts[..., 3] + counts[..., 4]) / total


pulls = np.arange(0, 31, 1.0)
exact = []
for pull in pulls:
    system = driblet.loads(TEXT.format(pull=-pull))
    load = np.round([s.mean_copies(system.compartment.omega) for s in system.free_species])
    law = count_law(system, load, system.compartment.omega)
    share = converted(law.states, load[2])
    mean = law.expect(share)
    exact.append((mean, np.sqrt(law.expect((share - mean) ** 2))))
mean, sd = np.array(exact).T

with style():
    figure = Figure(figsize=(6.4, 4.2), layout="constrained")
    ax = figure.subplots()
    ax.fill_between(
        pulls, mean - sd, mean + sd, color=COLOURS[0], alpha=0.25, linewidth=0, label="± sd of compartments"
    )
    ax.plot(pulls, mean, color=COLOURS[0], linewidth=1.8, label="exact mean at equilibrium")
    for k, pull in enumerate((0, 8, 16, 24)):
        run = driblet.run(driblet.loads(TEXT.format(pull=-float(pull))), seed=pull)
        share = converted(run.final_counts(), run.initial_counts()[:, 2])
        ax.errorbar(pull, share.mean(), share.std(), fmt="o", color=COLOURS[1], capsize=3,
                    label="simulated, ± sd" if k == 0 else None)  # fmt: skip
    ax.set_xlabel("Gibbs energy released by the pulling reaction (kJ/mol)")
    ax.set_ylabel("share of acceptor converted")
    ax.set_ylim(-0.02, 1.02)
    ax.set_title("An uphill transfer of 12.5 kJ/mol, pulled")
    ax.legend(loc="lower right")
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print("written:", save(figure, folder / "pulled_uphill.png"))
