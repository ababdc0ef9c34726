"""The picture of `driblet lifetime`: survival of each requirement, and what failing compartments had in common."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from driblet.results import Run
from driblet_analysis.figures import COLOURS, style, time_axis
from driblet_analysis.lifetime import Lifetime, Lifetimes

MOST_ROWS, MOST_TRAITS = 8, 6


def lifetime_figure(run: Run, result: Lifetimes) -> Figure:
    """A row per requirement: the share of compartments that still meets it over time, and the effects of their start."""
    with style():
        return _draw(run, result)


def _draw(run: Run, result: Lifetimes) -> Figure:
    rows = result.each[:MOST_ROWS]
    figure = Figure(figsize=(8.8, 1.1 + 2.5 * len(rows)), layout="constrained")
    note = f"{result.compartments} compartments" + ("" if run.complete else " (interrupted run)")
    if len(result.each) > MOST_ROWS:
        note += f"; {len(result.each) - MOST_ROWS} more requirements not drawn"
    figure.suptitle(f"{run.system.title}\n{note}", x=0.02, ha="left", fontsize=11)
    axes = figure.subplots(len(rows), 2, squeeze=False, width_ratios=(1.5, 1.0))
    for k, one in enumerate(rows):
        colour = COLOURS[k % len(COLOURS)]
        if one.survival is None:
            _share(axes[k, 0], one, colour)
        else:
            _survival(axes[k, 0], one, colour)
        _traits(axes[k, 1], one, colour)
    return figure


def _title(ax: Axes, one: Lifetime) -> None:
    bound = f"; {one.share.bound}" if one.share.bound else ""
    ax.set_title(f"{one.share.name}: {one.share.must}\n{one.share.when}{bound}", fontsize=9.5)


def _survival(ax: Axes, one: Lifetime, colour: str) -> None:
    curve = one.survival
    assert curve is not None
    length = one.span_s[1] - one.span_s[0]
    divisor, unit = time_axis(length)
    inside = curve.time <= length
    time = np.concatenate([[0.0], curve.time[inside], [length]]) / divisor

    def steps(values: np.ndarray) -> np.ndarray:
        kept = np.concatenate([[1.0], values[inside]])
        return np.append(kept, kept[-1])

    low, high = steps(np.where(np.isnan(curve.low), 0.0, curve.low)), steps(curve.high)
    high = np.where(np.isnan(high), 0.0, high)
    ax.fill_between(time, low, high, step="post", color=colour, alpha=0.22, linewidth=0, label="95 % limits")
    once = one.requirement.when == "once"
    label = "not yet met" if once else "still holding"
    ax.step(time, steps(curve.survival), where="post", color=colour, linewidth=2.0, label=label)
    if one.share.asked is not None:
        asked = 1 - one.share.asked if once else one.share.asked
        ax.axhline(asked, color="#1F1F1F", linewidth=1.0, linestyle=(0, (4, 3)), label="asked")
    ax.set_xlim(0.0, length / divisor * 1.01)
    # the scale begins at zero unless all that is drawn happens near one
    room = 1.3 * (1.0 - min(float(low.min()), 1.0 if one.share.asked is None or once else one.share.asked))
    ax.set_ylim(1.0 - room if 0.0 < room < 0.7 else -0.02, 1.0 + 0.03 * (room if 0.0 < room < 0.7 else 1.0))
    ax.set_xlabel(f"time in its span ({unit})")
    ax.set_ylabel("share of compartments")
    _title(ax, one)
    ax.legend(loc="best")


def _share(ax: Axes, one: Lifetime, colour: str) -> None:
    share = one.share.share
    ax.barh([0], [share.value], height=0.45, color=colour, alpha=0.45)
    error = [[share.value - share.low], [share.high - share.value]]
    ax.errorbar([share.value], [0], xerr=error, color=colour, capsize=4, linewidth=1.6, label="found, 95 % interval")
    if one.share.asked is not None:
        ax.axvline(one.share.asked, color="#1F1F1F", linewidth=1.0, linestyle=(0, (4, 3)), label="asked")
    ax.set_xlim(0.0, 1.02)
    ax.set_ylim(-0.7, 1.1)
    ax.set_yticks([])
    ax.grid(axis="y", visible=False)
    ax.set_xlabel("share of compartments that meet it")
    _title(ax, one)
    ax.legend(loc="upper left")


def _traits(ax: Axes, one: Lifetime, colour: str) -> None:
    ax.set_title("what failing ones started with", fontsize=9.5)
    if not one.traits:
        ax.set_axis_off()
        text = "no compartment failed" if not one.share.failing else one.traits_missing
        ax.text(0.0, 0.85, _wrapped(text), transform=ax.transAxes, va="top", fontsize=9, color="#33302B")
        return
    shown = one.traits[:MOST_TRAITS]
    places = np.arange(len(shown))[::-1]
    for place, trait in zip(places, shown, strict=True):
        clear = trait.p < 0.05
        ax.barh(place, trait.effect, height=0.6, color=colour, alpha=0.75 if clear else 0.25)
    ax.set_yticks(places, [t.quantity for t in shown])
    ax.axvline(0.0, color="#8A8478", linewidth=0.8)
    ax.set_xlim(-1.05, 1.05)
    ax.set_ylim(-0.7, max(len(shown), 3) - 0.3)
    ax.grid(axis="y", visible=False)
    ax.set_xlabel("less   ←  rank-biserial effect  →   more")
    if any(t.p >= 0.05 for t in shown):
        ax.text(1.0, 0.02, "pale: corrected p ≥ 0.05", transform=ax.transAxes, ha="right", fontsize=8, color="#5B564C")


def _wrapped(text: str) -> str:
    import textwrap

    return textwrap.fill(text, 34)
