"""The check as a picture: the verdict, energies as firings show them against the stated, end states against the law."""

from __future__ import annotations

import textwrap

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.transforms import blended_transform_factory

from driblet.results import Run
from driblet_analysis.check_rows import CheckResult
from driblet_analysis.figures import COLOURS, LAW_COLOUR, draw_end_states, laws_of, mean_marginal, style

MOST_HISTOGRAMS = 6
_WORDS = {
    "consistent": ("#2B6E4F", "consistent with these energies"),
    "inconsistent": ("#A23B16", "not what these energies imply"),
    "cannot answer": ("#6B6B6B", "cannot answer"),
}


def check_figure(run: Run, result: CheckResult) -> Figure:
    """Draw a check of `run`. Histograms are drawn where the system has an exact law, at most MOST_HISTOGRAMS."""
    with style():
        return _draw(run, result)


def _draw(run: Run, result: CheckResult) -> Figure:
    changing = [i for i in range(len(run.species)) if np.ptp(run.final_counts()[:, i])][:MOST_HISTOGRAMS]
    laws = laws_of(run)
    columns = 3
    rows = -(-len(changing) // columns)
    tall = max(1.6, 0.34 * len(result.energies) + 0.9)
    figure = Figure(figsize=(8.6, 1.5 + tall + 2.1 * rows), layout="constrained")
    colour, words = _WORDS[result.verdict]
    grid = figure.add_gridspec(2 + rows, columns, height_ratios=[0.95, tall, *[2.1] * rows])
    head = figure.add_subplot(grid[0, :])
    head.axis("off")
    place = blended_transform_factory(figure.transFigure, head.transAxes)  # at the paper's edge, in this row
    head.text(0.015, 1.0, words, color=colour, fontsize=15, va="top", transform=place, in_layout=False)
    body = f"{run.system.title}. {result.reason[0].upper()}{result.reason[1:]}."
    wrapped = "\n".join(textwrap.wrap(body, 118))
    head.text(0.015, 0.5, wrapped, fontsize=9, va="top", transform=place, in_layout=False)
    _energies(figure.add_subplot(grid[1, :]), result)
    labels = {s.name: s.label for s in run.system.species}
    for k, i in enumerate(changing):
        ax = figure.add_subplot(grid[2 + k // columns, k % columns])
        law = None if laws is None else mean_marginal(laws, i)
        shade = COLOURS[k % len(COLOURS)]
        draw_end_states(ax, run.final_counts()[:, i], f"{labels[run.species[i]]} (copies)", shade, law, legend=k == 0)
    return figure


def _energies(ax: Axes, result: CheckResult) -> None:
    """Measured minus stated energy of each reaction, with what would have shown as a grey band."""
    ax.axvline(0.0, color=LAW_COLOUR, linewidth=1.2)
    names = []
    for k, row in enumerate(result.energies):
        names.append(row.name if row.measured is not None else f"{row.name} (fired too rarely)")
        if row.detectable_kJ_per_mol is not None:
            ax.barh(k, 2 * row.detectable_kJ_per_mol, left=-row.detectable_kJ_per_mol, height=0.62, color="#E3DED3")
        if row.measured is not None and row.standard_error is not None:
            ax.errorbar(
                row.measured - row.stated, k, xerr=1.96 * row.standard_error, fmt="o", color=COLOURS[1], capsize=3, ms=5
            )
    ax.set_yticks(range(len(names)), names)
    ax.set_ylim(len(names) - 0.4, -0.6)
    ax.set_xlabel("ΔG°′ shown by firings − stated (kJ/mol); dots with 95 % intervals, grey: too small to have shown")
    ax.grid(axis="y", visible=False)
