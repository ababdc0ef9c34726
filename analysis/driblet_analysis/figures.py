"""Figures: matplotlib without pyplot state, one look for all of them.

The look: warm grey paper lines, no box, units in every axis label, colours that stay apart for colour-blind readers (the
order of Okabe & Ito, "Color Universal Design", 2008).
"""

from __future__ import annotations

import time
from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from driblet.errors import CannotAnswerError, one_problem
from driblet.results import Run
from driblet_analysis.references.count_equilibrium import CountLaw, count_law
from driblet_analysis.thresholds import draw_thresholds, judged_rows

Array = NDArray[np.float64]
COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#6B6B6B")
LAW_COLOUR = "#1F1F1F"
FORMATS = (".png", ".pdf", ".svg")
MOST_ROWS = 10
LAW_SECONDS = 20.0  # a law is an addition to the picture, and thousands of molecules of a class each can take minutes
_STYLE: Any = {
    "font.size": 9.5,
    "axes.titlesize": 10.5,
    "axes.titlelocation": "left",
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.edgecolor": "#8A8478",
    "axes.labelcolor": "#33302B",
    "axes.grid": True,
    "grid.color": "#E9E5DD",
    "grid.linewidth": 0.8,
    "axes.axisbelow": True,
    "xtick.color": "#5B564C",
    "ytick.color": "#5B564C",
    "legend.frameon": False,
    "legend.fontsize": 8.5,
    "svg.hashsalt": "driblet",
    "figure.dpi": 110,
    "savefig.dpi": 160,
}


@contextmanager
def style() -> Iterator[None]:
    """driblet's look, for this block only."""
    with matplotlib.rc_context(_STYLE):
        yield


def save(figure: Figure, path: str | Path) -> Path:
    """Write a figure as .png, .pdf or .svg, whole or not at all. Raises InputError for another ending or no access."""
    path = Path(path)
    if path.suffix.lower() not in FORMATS:
        raise one_problem(str(path), "", f"is no figure name: it ends in {', '.join(FORMATS)}")
    temporary = path.with_name(f".{path.stem}.tmp{path.suffix}")
    _take_texts_as_they_stand(figure)
    _lay_out(figure)
    try:
        figure.savefig(temporary)
        temporary.replace(path)
    except OSError as error:
        temporary.unlink(missing_ok=True)
        raise one_problem(str(path), "", f"cannot be written: {(error.strerror or str(error)).lower()}") from error
    return path


def _take_texts_as_they_stand(figure: Figure) -> None:
    """Titles and labels are the user's: a "$" in them starts no formula. Numbers at ticks stay matplotlib's own.

    Texts are named one by one: to ask an axis for all of its texts makes its ticks, which takes as long as drawing them.
    """
    texts = [*figure.texts]
    legends: list[Any] = [*figure.legends]
    for ax in figure.axes:
        texts += [ax.title, ax._left_title, ax._right_title, ax.xaxis.label, ax.yaxis.label, *ax.texts]  # type: ignore[attr-defined]
        legends.append(ax.get_legend())
    for legend in legends:
        texts += [legend.get_title(), *legend.get_texts()] if legend else []
    for text in texts:
        text.set_parse_math(False)


def _lay_out(figure: Figure) -> None:
    """Place everything now: left to savefig, the whole figure is drawn once more for it."""
    engine = figure.get_layout_engine()
    if engine is not None:
        engine.execute(figure)
        figure.set_layout_engine("none")


def time_axis(duration_s: float) -> tuple[float, str]:
    """(divisor, unit) that makes a readable time axis."""
    for limit, divisor, unit in ((1e-2, 1e-3, "ms"), (300.0, 1.0, "s"), (3 * 3600.0, 60.0, "min")):
        if duration_s <= limit:
            return divisor, unit
    return 3600.0, "h"


def laws_of(run: Run) -> list[CountLaw] | None:
    """The exact law of each compartment, or None where there is none to draw, or none within LAW_SECONDS."""
    system = run.system
    started = time.monotonic()
    omega = run.volume_L * system.compartment.omega / system.compartment.volume_L
    laws = []
    try:
        for counts, w in zip(run.class_counts(), omega, strict=True):
            law = count_law(system, counts, float(w))
            if law is None:
                return None
            laws.append(law)
            if (time.monotonic() - started) / len(laws) * len(omega) > LAW_SECONDS and len(laws) > 2:
                return None
    except CannotAnswerError:
        return None
    return laws


def overview(run: Run) -> Figure:
    """Trajectories with the spread between compartments, and the end states with the exact law drawn over them.

    One row per free species that changes, then one per readout, at most MOST_ROWS.
    """
    with style():
        return _overview(run)


def _overview(run: Run) -> Figure:
    labels = {s.name: s.label for s in run.system.species}
    counts = run.counts
    plain = [s.enzyme is None for s in run.system.free_species]
    changing = [i for i in range(len(run.species)) if plain[i] and np.ptp(counts[:, :, i])]
    rows: list[tuple[str, NDArray[Any], int | None]] = [
        (f"{labels[run.species[i]]} (copies)", counts[:, :, i], i) for i in changing
    ]
    for name, unit in run.readout_units.items():
        rows.append((f"{name} ({unit})" if unit != "1" else name, run.readout(name), None))
    names = [run.species[i] for i in changing] + list(run.readout_units)
    for name, label, judged in judged_rows(run, names):
        names.append(name)
        rows.append((label, judged, None))
    left_out = max(0, len(rows) - MOST_ROWS)
    rows = rows[:MOST_ROWS]
    laws = laws_of(run)
    height = 1.15 + 1.75 * max(1, len(rows))
    figure = Figure(figsize=(8.6, height), layout="constrained")
    note = f"{len(run.replicate)} compartments" + ("" if run.complete else " (interrupted run)")
    if left_out:
        note += f"; {left_out} more rows not drawn"
    figure.suptitle(f"{run.system.title}\n{note}", x=0.02, ha="left", fontsize=11)
    axes = figure.subplots(max(1, len(rows)), 2, squeeze=False, width_ratios=(1.75, 1.0))
    divisor, unit = time_axis(float(run.time_s[-1]))
    for k, (label, values, i) in enumerate(rows):
        colour = COLOURS[k % len(COLOURS)]
        _trajectories(axes[k, 0], run.time_s / divisor, values, label, colour, legend=k == 0)
        law = None if laws is None or i is None else mean_marginal(laws, i)
        draw_end_states(axes[k, 1], values[:, -1], label, colour, law, legend=k == 0)
    draw_thresholds(list(axes[:, 0]), run.system, names)
    axes[-1, 0].set_xlabel(f"time ({unit})")
    figure.align_ylabels(axes[:, 0])
    axes[0, 0].set_title("over time")
    axes[0, 1].set_title("at the end" + (", with the exact law" if laws is not None else ""))
    return figure


def _trajectories(ax: Axes, time: Array, values: Array, label: str, colour: str, legend: bool) -> None:
    finite = np.where(np.isfinite(values), values, np.nan)
    with np.errstate(all="ignore"), _quiet():
        quantile = np.nanquantile if np.isnan(finite).any() else np.quantile  # the first is far slower
        low, middle, high = quantile(finite, (0.05, 0.5, 0.95), axis=0)
    ax.fill_between(time, low, high, color=colour, alpha=0.22, linewidth=0, label="90 % of compartments")
    ax.plot(time, finite[0], color=colour, linewidth=0.7, alpha=0.75, label="one compartment")
    ax.plot(time, middle, color=colour, linewidth=2.0, label="median")
    ax.set_ylabel(label)
    ax.margins(x=0.01)
    if legend:
        ax.legend(loc="best", ncols=1)


@contextmanager
def _quiet() -> Iterator[None]:
    """A column of NaN (a readout that is nowhere defined) is drawn as a gap, without numpy's warning."""
    import warnings

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        yield


def draw_end_states(
    ax: Axes, values: NDArray[Any], label: str, colour: str, law: tuple[Array, Array] | None, legend: bool
) -> None:
    """Histogram of end states, the exact law over it where there is one. law : (counts, probabilities)."""
    values = values[np.isfinite(values)]
    ax.set_ylabel("share")
    ax.set_xlabel(label)
    if not len(values):
        return
    whole = bool(np.all(values == np.round(values)))
    span = float(np.ptp(values))
    if whole and (law is not None or span < 1e6):
        width = max(1, int(np.ceil((span + 1) / 30)))
        start = np.floor(values.min()) - 0.5
        edges = np.arange(start, values.max() + width + 0.5, width)
    else:
        edges = np.histogram_bin_edges(values, bins=min(30, max(5, int(np.sqrt(len(values))))))
    share, _ = np.histogram(values, bins=edges)
    ax.stairs(share / len(values), edges, fill=True, color=colour, alpha=0.45, label="simulated")
    if law is not None:
        n, p = law
        low, high = edges[0] - (edges[-1] - edges[0]) * 0.15, edges[-1] + (edges[-1] - edges[0]) * 0.15
        bins = np.arange(edges[0] - np.ceil((edges[0] - low) / width) * width, high + width, width)
        bins = bins[bins >= -0.5]
        expected, _ = np.histogram(n, bins=bins, weights=p)
        ax.stairs(expected, bins, color=LAW_COLOUR, linewidth=1.4, label="exact law")
    ax.xaxis.set_major_locator(MaxNLocator(5, integer=whole))
    if legend and law is not None:
        ax.legend(loc="best")


def mean_marginal(laws: list[CountLaw], i: int) -> tuple[Array, Array]:
    """Average over compartments of the marginal law of species i: (counts, probabilities)."""
    shared = Counter(id(law) for law in laws)  # compartments of one load and size share their law
    parts = [(law.marginal(i), shared.pop(id(law))) for law in laws if id(law) in shared]
    low = min(int(n[0]) for (n, _), _ in parts)
    total = np.zeros(max(int(n[-1]) for (n, _), _ in parts) - low + 1)
    for (n, p), times in parts:
        total[n - low] += times * p
    return np.arange(low, low + len(total), dtype=float), total / len(laws)
