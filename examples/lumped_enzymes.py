"""What does lumping an enzyme change, and when does it show?

Creatine kinase refills the ADP that a load makes in a vesicle of 10 aL, simulated step by step and lumped. Above: where the
enzyme is rare nothing can be told apart, at a small fraction of the events. Below: the same work by more and more enzyme. Step by
step the enzyme holds some of the ADP, which adds to what is free; lumped, that is neglected, and the number of ADP falls short
as the enzyme's share of it grows. `driblet audit` advises against lumping above 5 %.
Usage: python examples/lumped_enzymes.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import driblet
from driblet.treatments import LARGEST_SHARE
from driblet_analysis.compare import Way, compare, quantities
from driblet_analysis.figures import COLOURS, save, style

TEXT = """
[conditions]
temperature = "37 degC"
[compartments.vesicle]
volume = "10 aL"
[species]
ATP = "4 mM"
ADP = "0.06 mM"
PCr = "10 mM"
creatine = "15 mM"
Pi = {{ amount = "5 mM", held = true }}
[reactions.buffer]
equation = "ADP + PCr <=> creatine + ATP"
K = 150
[reactions.load]
equation = "ATP + H2O <=> ADP + Pi"
energy = "-32 kJ/mol"
forward = "0.05 /s"
[enzymes.CK]
amount = "{copies} copies"
catalyses = "buffer"
mechanism = "ordered bi bi"
binds = ["ADP", "PCr"]
releases = ["creatine", "ATP"]
[enzymes.CK.steps]
binds_ADP = {{ forward = "2e7 /M/s", backward = "1e3 /s" }}
binds_PCr_with_ADP = {{ forward = "1e6 /M/s", backward = "3e3 /s" }}
buffer = {{ forward = "{kcat} /s" }}
releases_creatine_with_ATP = {{ forward = "1.5e4 /s", backward = "1e6 /M/s" }}
releases_ATP = {{ forward = "5e4 /s", backward = "1e7 /M/s" }}
"""
COPIES = [4, 15, 40, 100]
TURNOVERS = 1.2e4  # largest rate of all copies together, /s: the more enzyme, the slower each


def compared(copies, replicates):
    """Step by step against lumped; the total rate is kept the same."""
    text = TEXT.format(copies=copies, kcat=TURNOVERS / copies)
    return compare(driblet.loads(text), (Way("elementary"), Way("lumped")), replicates, 0.5, seed=5)


few = compared(COPIES[0], 300)
share, shift, error = [], [], []
for copies in COPIES:
    result = few if copies == COPIES[0] else compared(copies, 200)
    first, second = (quantities(one)["total(ADP)"][:, -1] for one in result.runs)
    share.append(copies / quantities(result.runs[0])["total(ADP)"][0, 0])
    shift.append(second.mean() / first.mean() - 1.0)
    error.append(np.sqrt(first.var() / len(first) + second.var() / len(second)) / first.mean())
    print(
        f"{copies} copies, {100 * share[-1]:.1f} % of ADP: ADP after 0.5 s {100 * shift[-1]:+.1f} ± {100 * error[-1]:.1f} %, "
        f"{result.events[0] / result.events[1]:.1f} times fewer events"
    )

with style():
    figure = Figure(figsize=(7.4, 6.4), layout="constrained")
    (course, end), (below, _) = figure.subplots(2, 2, width_ratios=(1.5, 1.0))
    _.remove()
    grid = below.get_gridspec()
    below.remove()
    below = figure.add_subplot(grid[1, :])
    names = ("step by step", "lumped")
    pair = [quantities(one)["total(ADP)"] for one in few.runs]
    for values, name, colour, line in zip(pair, names, COLOURS, ("-", "--"), strict=False):
        low, high = np.quantile(values, [0.05, 0.95], axis=0)
        course.fill_between(few.runs[0].time_s, low, high, color=colour, alpha=0.18, linewidth=0)
        course.plot(few.runs[0].time_s, values.mean(axis=0), color=colour, linestyle=line, label=name)
    course.set(xlabel="time (s)", ylabel="ADP, free and bound (copies)", title=f"{COPIES[0]} enzymes: mean and 90 %")
    course.legend()
    edges = np.arange(min(p[:, -1].min() for p in pair) - 0.5, max(p[:, -1].max() for p in pair) + 4.5, 4.0)
    end.hist(pair[0][:, -1], edges, color=COLOURS[0], alpha=0.45, density=True)
    end.hist(pair[1][:, -1], edges, color=COLOURS[1], histtype="step", linewidth=1.5, linestyle="--", density=True)
    end.set(xlabel="ADP after 0.5 s (copies)", yticks=[], title="compartments")
    below.axhline(0.0, color="#8A8478", linewidth=0.8)
    below.axvline(100 * LARGEST_SHARE, color=COLOURS[2], linewidth=1.2, linestyle=":")
    below.annotate("advised limit", (100 * LARGEST_SHARE, 0.02), xycoords=("data", "axes fraction"), fontsize=8.5, xytext=(4, 2),
                   textcoords="offset points", color=COLOURS[2])  # fmt: skip
    below.errorbar(
        100 * np.array(share), 100 * np.array(shift), 196 * np.array(error), fmt="o", color=COLOURS[1], capsize=3
    )
    below.set(
        xscale="log", xlabel="enzyme over ADP at the start (%)", ylabel="ADP after 0.5 s,\nlumped less step by step (%)"
    )
    below.set_xticks([1, 2, 5, 10, 20], ["1", "2", "5", "10", "20"])
    below.set_title("the same work by more enzyme: bars are 95 % intervals")
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print(save(figure, folder / "lumped_enzymes.png"))
