"""What does a leap tolerance cost, and what does it gain?

The kinase and creatine kinase of configs/lumped_vesicle.toml in 0.1 fL, for 25 minutes in which the sugar runs out: exact events
of the lumped network against leaps of four tolerances. Left: the sugar. Right, against the time a compartment takes: the largest
error of a mean that the comparison shows, which cannot be told from chance below the dotted line, and the one that the run itself
states beforehand, in standard deviations between compartments.
Usage: python examples/leaps_accuracy.py [FOLDER]
"""

import sys
import time
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

import driblet
from driblet.error_estimate import ErrorEstimate
from driblet.volume import at_volume
from driblet_analysis.figures import COLOURS, save, style

FILE = Path(__file__).parents[1] / "configs" / "lumped_vesicle.toml"
COMPARTMENTS, MINUTES = 200, 25
TOLERANCES = [0.3, 0.1, 0.03, 0.01]
system = at_volume(driblet.load(FILE), 0.1e-15)


def simulated(engine, seed, **how):
    """An ensemble, the CPU milliseconds that a compartment took, and the error stated beforehand."""
    settings = {"duration": 60.0 * MINUTES, "sample_every": 60.0, "treatment": "lumped"}
    settings |= {"statistics": False}
    first = driblet.run(system, replicates=1, engine=engine, **settings, **how)  # compiles, and states its error
    settings["estimate_error"] = False
    start = time.process_time()
    run = driblet.run(system, replicates=COMPARTMENTS, engine=engine, seed=seed, **settings, **how)
    return run, 1e3 * (time.process_time() - start) / COMPARTMENTS, ErrorEstimate.read(first.provenance)


exact, exact_ms, _ = simulated("exact", 1)
reference, spread = exact.counts[:, 1:].mean(axis=0), np.maximum(exact.counts[:, 1:].std(axis=0), 1.0)
moving = spread.max(axis=0) > 1.0
# the largest of many differences of two means of as many compartments each, by chance alone
chance = 2.8 * np.sqrt(2.0 / COMPARTMENTS)
print(f"exact: {exact_ms:.2f} ms a compartment, {exact.events.mean():,.0f} events")
sizes, errors, stated, kept = [], [], [], {}
for k, tolerance in enumerate(TOLERANCES):
    run, ms, estimate = simulated("leap", 2 + k, leap_tolerance=tolerance)
    away = np.abs(run.counts[:, 1:].mean(axis=0) - reference)[:, moving] / spread[:, moving]
    sizes.append(ms)
    errors.append(away.max())
    stated.append(estimate.leaps[0])
    kept[tolerance] = run
    print(
        f"tolerance {tolerance:g}: {ms:.3f} ms, largest error of a mean {away.max():.2f} sd (chance {chance:.2f}), stated "
        f"{stated[-1]:.2f} sd"
    )

with style():
    figure = Figure(figsize=(9.2, 3.9), layout="constrained")
    course, cost = figure.subplots(1, 2)
    sugar = exact.species.index("sugar")
    for name, run, colour, line in (
        ("exact", exact, COLOURS[0], "-"),
        ("leaps, 0.01", kept[0.01], COLOURS[1], "--"),
        ("leaps, 0.3", kept[0.3], COLOURS[2], ":"),
    ):
        copies = run.counts[:, :, sugar]
        low, high = np.quantile(copies, [0.05, 0.95], axis=0)
        course.fill_between(run.time_s / 60, low, high, color=colour, alpha=0.15, linewidth=0)
        course.plot(run.time_s / 60, copies.mean(axis=0), color=colour, linestyle=line, label=name)
    course.set(xlabel="time (min)", ylabel="sugar (copies)", yscale="log", title="mean and central 90 %")
    course.legend(loc="lower left")
    cost.plot(sizes, errors, "o-", color=COLOURS[1], label="shown against exact events")
    cost.plot(sizes, stated, "s--", color=COLOURS[2], label="stated by the run")
    for tolerance, x, y in zip(TOLERANCES, sizes, errors, strict=True):
        cost.annotate(f"{tolerance:g}", (x, y), xytext=(5, 5), textcoords="offset points", fontsize=8.5)
    cost.axhline(chance, color="#8A8478", linestyle=":", linewidth=1.2)
    cost.annotate(
        "chance alone", (0.98, chance), xycoords=("axes fraction", "data"), ha="right", va="bottom", fontsize=8.5
    )
    cost.axvline(exact_ms, color=COLOURS[0], linewidth=1.2)
    cost.annotate("exact events", (exact_ms, 0.4), xycoords=("data", "axes fraction"), ha="right", va="center", rotation=90,
                  fontsize=8.5, color=COLOURS[0], xytext=(-3, 0), textcoords="offset points")  # fmt: skip
    cost.set(xscale="log", yscale="log", xlabel="CPU time a compartment (ms)", ylabel="largest error of a mean (sd)")
    cost.set_title("labels: leap tolerance")
    cost.legend(loc="lower left")
    cost.set_ylim(0.3 * min(stated), 2.0 * max(errors))
    print(save(figure, Path(sys.argv[1] if len(sys.argv) > 1 else ".") / "leaps_accuracy.png"))
