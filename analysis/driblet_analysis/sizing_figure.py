"""The picture of `driblet size`: shares with their intervals, the fitted curve, the answer and its interval."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, MaxNLocator, NullFormatter

from driblet.errors import InputError
from driblet_analysis.figures import COLOURS, style
from driblet_analysis.sizing import Sizing
from driblet_analysis.sizing_model import clopper_pearson
from driblet_analysis.sizing_parts import Finding
from driblet_analysis.sizing_question import Question, loads_of

_SURVEY, _CLOSE = COLOURS[6], COLOURS[0]
_ANSWER, _ASKED = COLOURS[1], "#1F1F1F"


def sizing_figure(result: Sizing) -> Figure:
    """The whole range on the left; where an answer was closed in on, its surroundings on the right."""
    with style():
        return _draw(result)


def _draw(result: Sizing) -> Figure:
    finding, question = result.finding, result.question
    close = finding.root is not None and np.isfinite(finding.answer).all()
    figure = Figure(figsize=(9.6 if close else 6.4, 5.0), layout="constrained")
    title = f"{question.system.title}\n{question.requirement}: {finding.status}"
    figure.suptitle(title, x=0.02, ha="left", fontsize=11)
    axes = figure.subplots(1, 2 if close else 1, squeeze=False, width_ratios=(1.2, 1.0) if close else None)[0]
    _panel(axes[0], finding, question, _whole_range(question), (-0.03, 1.04))
    if close:
        _panel(axes[1], finding, question, *_surroundings(finding, question))
        axes[1].set_title("around the answer", fontsize=9.5)
    handles, labels = axes[0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside lower left", ncols=3 if close else 2, fontsize=8)
    return figure


def _whole_range(question: Question) -> tuple[float, float]:
    low, high = question.scale.low, question.scale.high
    if question.scale.log:
        edge = (high / low) ** 0.03
        return low / edge, high * edge
    edge = 0.03 * (high - low)
    return low - edge, high + edge


def _surroundings(finding: Finding, question: Question) -> tuple[tuple[float, float], tuple[float, float]]:
    """Limits of value and share that show the trials of the rounds, the answer and the asked share."""
    rows = [t for t in finding.tried if t.phase == "closing in"]
    values = [t.value for t in rows] + list(finding.answer)
    low, high = min(values), max(values)
    limits = (low**1.1 / high**0.1, high**1.1 / low**0.1) if question.scale.log else (low, high)
    if not question.scale.log:
        limits = (low - 0.1 * (high - low), high + 0.1 * (high - low))
    exact = [clopper_pearson(t.met, t.trials) for t in rows]
    shares = [e.low for e in exact] + [e.high for e in exact] + [question.settings.share]
    edge = 0.04 * (max(shares) - min(shares))
    return limits, (max(-0.03, min(shares) - edge), min(1.04, max(shares) + edge))


def _panel(
    ax: Axes, finding: Finding, question: Question, limits: tuple[float, float], shares: tuple[float, float]
) -> None:
    if question.scale.log:
        ax.set_xscale("log")
    ax.set_xlim(*limits)
    ax.set_ylim(*shares)
    ax.axhline(question.settings.share, color=_ASKED, linewidth=1.0, linestyle=(0, (4, 3)), label="asked")
    if np.isfinite(finding.answer).all():
        ax.axvspan(finding.answer.low, finding.answer.high, color=_ANSWER, alpha=0.18, linewidth=0)
        ax.axvline(finding.answer.value, color=_ANSWER, linewidth=1.6, label="answer, 95 % interval")
    for k, crossing in enumerate(finding.crossings):
        ax.axvspan(crossing.low, crossing.high, color=_ANSWER, alpha=0.18, linewidth=0)
        label = "crossings, 95 % intervals" if k == 0 else None
        ax.axvline(crossing.value, color=_ANSWER, linewidth=1.6, label=label)
    if finding.root is not None and finding.root.law:
        x = np.geomspace(*limits, 300) if question.scale.log else np.linspace(*limits, 300)
        law = f"fitted close by ({finding.root.law})"
        ax.plot(x, finding.root.curve([question.scale.u(v) for v in x]), color=_CLOSE, linewidth=1.2, label=law)
    for survey, colour, label in (
        (True, _SURVEY, "survey, the same compartments"),
        (False, _CLOSE, "new compartments"),
    ):
        rows = [t for t in finding.tried if (t.phase == "survey") == survey]
        if not rows:
            continue
        exact = [clopper_pearson(t.met, t.trials) for t in rows]
        share = np.array([e.value for e in exact])
        error = [share - [e.low for e in exact], np.array([e.high for e in exact]) - share]
        size = 2.5 + 4.0 * np.sqrt(np.array([t.trials for t in rows]) / max(t.trials for t in finding.tried))
        x = np.array([t.value for t in rows])
        ax.errorbar(x, share, yerr=error, fmt="none", ecolor=colour, elinewidth=1.0, alpha=0.6)
        ax.scatter(x, share, s=size**2, color=colour, zorder=3, label=f"{label}, 95 % interval")
    ax.set_xlabel(f"{question.path} ({question.unit})" if question.unit else question.path)
    ax.set_ylabel(f"share of compartments meeting {question.requirement}")
    _plain_ticks(ax, question, limits)
    _copies_axis(ax, question, limits)


def _plain_ticks(ax: Axes, question: Question, limits: tuple[float, float]) -> None:
    """Ticks as plain numbers: powers of ten say little about a range of a factor of five."""
    if not question.scale.log:
        ticks = [t for t in MaxNLocator(5).tick_values(*limits) if limits[0] <= t <= limits[1]]
    else:
        ticks = _round_values(limits)
    ax.xaxis.set_major_locator(FixedLocator(ticks))
    ax.xaxis.set_minor_formatter(NullFormatter())
    ax.set_xticks([], minor=True)
    ax.set_xticklabels([f"{t:.4g}" for t in ticks])


def _round_values(limits: tuple[float, float]) -> list[float]:
    first, last = np.floor(np.log10(limits[0])), np.ceil(np.log10(limits[1]))
    for steps in ((1.0,), (1.0, 3.0), (1.0, 2.0, 5.0), (1.0, 1.5, 2.0, 3.0, 4.0, 5.0, 7.0)):
        found = [s * 10.0**e for e in np.arange(first, last + 1) for s in steps]
        found = [t for t in found if limits[0] <= t <= limits[1]]
        if 4 <= len(found) <= 7:
            return found
        if len(found) > 7:
            return found[:: -(-len(found) // 7)]
    return [t for t in MaxNLocator(5).tick_values(*limits) if limits[0] <= t <= limits[1] and t > 0]


def _copies_axis(ax: Axes, question: Question, limits: tuple[float, float]) -> None:
    """What the values amount to: copies of what is varied, or of the least plentiful load where it is a size."""
    section, name = (*question.path.split("."), "")[:2]
    ticks = list(ax.get_xticks())
    if section == "compartments":
        loads = loads_of(question.system)
        if not loads:
            return
        name = min(loads, key=lambda load: load.copies).name
    elif section not in ("species", "enzymes"):
        return
    label = next((s.label for s in question.system.free_species if s.name == name), name)
    texts = []
    for tick in ticks:
        try:
            found = {load.name: load for load in loads_of(question.system_at(tick))}
        except InputError:
            found = {}
        load = found.get(label) or found.get(name)
        if load is None:
            texts.append("")
        elif section != "compartments" and question.unit == "copies":
            texts.append(f"{load.concentration_M * 1e9:.3g}")
        else:
            texts.append(f"{load.copies:.3g}" if load.copies < 100 else f"{load.copies:,.0f}")
    upper = ax.twiny()
    if question.scale.log:
        upper.set_xscale("log")
    upper.set_xlim(*limits)
    upper.xaxis.set_major_locator(FixedLocator(ticks))
    upper.set_xticks([], minor=True)
    upper.set_xticklabels(texts)
    upper.grid(visible=False)
    what = "nM" if section != "compartments" and question.unit == "copies" else "mean copies"
    upper.set_xlabel(f"{label} in the median compartment ({what})", fontsize=8.5)
