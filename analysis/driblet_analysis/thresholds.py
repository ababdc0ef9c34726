"""Where requirements stand in the figures of a run: comparisons of one readout or one species with a constant."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

from driblet.readouts import evaluate, extended
from driblet.results import Run
from driblet.system import System
from driblet.system.expressions import Comparison, Expression, Named, Node, Reference, comparisons, references

FAR = 1.5  # spans of an axis by which it is stretched, at most, to show a threshold
LINE_COLOUR = "#1F1F1F"


class Threshold(NamedTuple):
    """A line at `value` in the row of a readout (its unit) or of a species (copies in the median compartment).

    requirement : whose it is; row : name of the readout or species; is_species; value; below : whether the requirement wants
    the row below it.
    """

    requirement: str
    row: str
    is_species: bool
    value: float
    below: bool


def thresholds(system: System) -> list[Threshold]:
    """Every threshold of the system's requirements that can be drawn; others, of several readouts at once, are left out."""
    found = []
    for requirement in system.requirements:
        for comparison in comparisons(requirement.must.root):
            threshold = _threshold(system, requirement.name, comparison)
            if threshold is not None:
                found.append(threshold)
    return found


def _threshold(system: System, requirement: str, comparison: Comparison) -> Threshold | None:
    node, constant, below = comparison.left, comparison.right, comparison.operator in ("<", "<=")
    if not references(node):
        node, constant, below = constant, node, not below
    if references(constant):
        return None
    value = float(extended(system, constant, np.zeros(len(system.free_species), dtype=np.int64), np.array(1.0)))
    held = system.held_concentrations()
    if isinstance(node, Named):
        return Threshold(requirement, node.name, False, value, below)
    if isinstance(node, Reference) and node.kind in ("count", "conc") and node.name not in held:
        scale = system.compartment.omega if node.kind == "conc" else 1.0
        return Threshold(requirement, node.name, True, value * scale, below)
    return _same_as_a_readout(system, requirement, node, value, below)


def _same_as_a_readout(system: System, requirement: str, node: Node, value: float, below: bool) -> Threshold | None:
    """A threshold for an expression that the file also names as a readout."""
    for readout in system.readouts:
        if readout.expression.root == node:
            return Threshold(requirement, readout.name, False, value, below)
    return None


def judged_rows(run: Run, known: Sequence[str]) -> list[tuple[str, str, NDArray[np.float64]]]:
    """(name, label, values at the samples) of readouts by standard name that requirements judge and the file does not record."""
    system = run.system
    omega = (run.volume_L * system.compartment.omega / system.compartment.volume_L)[:, None]
    rows: dict[str, tuple[str, str, NDArray[np.float64]]] = {}
    for requirement in system.requirements:
        for comparison in comparisons(requirement.must.root):
            for node in (comparison.left, comparison.right):
                if isinstance(node, Named) and node.name not in known and node.name not in rows:
                    expression = Expression(node.name, node.node)
                    label = node.name if expression.unit == "1" else f"{node.name} ({expression.unit})"
                    rows[node.name] = (node.name, label, evaluate(system, expression, run.counts, omega))
    return list(rows.values())


def draw_thresholds(axes: Sequence[Axes], system: System, names: Sequence[str]) -> None:
    """Draw every threshold across the row of its readout or species; names : what each of `axes` shows.

    A threshold far from all that happened is told at the edge instead, so that the curves keep their scale.
    """
    for threshold in thresholds(system):
        if threshold.row not in names[: len(axes)]:
            continue
        ax = axes[names.index(threshold.row)]
        low, high = ax.get_ylim()
        text = f"{threshold.requirement}: {'below' if threshold.below else 'above'}"
        reach = FAR * (high - low)
        if low - reach <= threshold.value <= high + reach:
            ax.axhline(threshold.value, color=LINE_COLOUR, linewidth=1.1, linestyle=(0, (4, 3)))
            where, place = threshold.value, "bottom" if threshold.below is False else "top"
        else:
            where, place = (high, "top") if threshold.value > high else (low, "bottom")
            text += f" {threshold.value:.4g}, off this scale"
        ax.annotate(
            text,
            (0.995, where),
            xycoords=ax.get_yaxis_transform(),
            xytext=(0, 2 if place == "bottom" else -2),
            textcoords="offset points",
            ha="right",
            va=place,
            fontsize=8,
            color=LINE_COLOUR,
        )
