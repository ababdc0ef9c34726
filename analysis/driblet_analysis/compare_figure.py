"""The figure of a comparison: each quantity over time under both treatments, and its end states."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator, ScalarFormatter

from driblet_analysis.compare import Array, Comparison, kolmogorov_distance, quantities
from driblet_analysis.figures import COLOURS, style, time_axis

MOST_ROWS = 6
_BINS = 24


def compare_figure(result: Comparison) -> Figure:
    """Rows: the quantities that change, those that depart most first. Left: mean and central 90 %; right: end states."""
    first, second = (quantities(one) for one in result.runs)
    ranked = sorted(result.worst(), key=lambda row: row.rank)[:MOST_ROWS]
    names = [row.quantity for row in ranked]
    time_s = result.runs[0].time_s
    divisor, unit = time_axis(float(time_s[-1]))
    with style():
        rows = max(1, len(names))
        figure = Figure(figsize=(8.2, 1.0 + 1.9 * rows), layout="constrained")
        grid = figure.subplots(rows, 2, squeeze=False, width_ratios=(1.5, 1.0))
        for (left, right), name, row in zip(grid, names, ranked, strict=False):
            for which, values in enumerate((first[name], second[name])):
                _course(left, time_s / divisor, values, COLOURS[which], result.ways[which], dashed=which == 1)
            left.set_ylabel(name)
            left.yaxis.set_major_locator(MaxNLocator(4))
            _end(right, first[name][:, -1], second[name][:, -1])
            distance = kolmogorov_distance(first[name][:, -1], second[name][:, -1])
            right.set_title(f"Kolmogorov distance {distance:.3f}, by chance {row.noise:.3f}", fontsize=8.5)
            for axis in (left.yaxis, right.xaxis):
                axis.set_major_formatter(ScalarFormatter(useOffset=False))
        grid[0, 0].legend(loc="best")
        grid[-1, 0].set_xlabel(f"time ({unit})")
        grid[-1, 1].set_xlabel("value at the end")
        figure.suptitle(f"{result.ways[1]} against {result.ways[0]}: {result.verdict}", fontsize=11)
    return figure


def _course(axes: Axes, time: Array, values: Array, colour: str, label: str, dashed: bool) -> None:
    low, high = np.nanquantile(values, [0.05, 0.95], axis=0)
    axes.fill_between(time, low, high, color=colour, alpha=0.18, linewidth=0)
    axes.plot(
        time, np.nanmean(values, axis=0), color=colour, linewidth=1.6, linestyle="--" if dashed else "-", label=label
    )


def _end(axes: Axes, first: Array, second: Array) -> None:
    both = np.concatenate([first[np.isfinite(first)], second[np.isfinite(second)]])
    whole = bool((both == np.rint(both)).all())
    low, high = float(both.min()), float(both.max())
    if whole:
        width = max(1.0, np.ceil((high - low + 1) / _BINS))
        edges = np.arange(low - 0.5, high + width + 0.5, width)
    else:
        edges = np.linspace(low, high if high > low else low + 1.0, _BINS + 1)
    bins = edges.tolist()
    axes.hist(first, bins, color=COLOURS[0], alpha=0.45, density=True)
    axes.hist(second, bins, color=COLOURS[1], histtype="step", linewidth=1.5, linestyle="--", density=True)
    axes.set_yticks([])
    axes.xaxis.set_major_locator(MaxNLocator(4, integer=whole))
