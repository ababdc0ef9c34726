"""What an enzyme does at fixed concentrations: occupancies, turnover, and the kcat and K_M that its steps imply.

The steady state of the enzyme's generator (King & Altman, J. Phys. Chem. 60:1375, 1956), solved by the elimination of
Grassmann, Taksar & Heyman (Oper. Res. 33:1107, 1985): it never subtracts, so that each occupancy is right to a few units
in the last place however far apart the constants are, and saturation can be taken as a concentration of 1e20 mol/L.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from driblet.system.mechanisms.enzyme import Activity, Enzyme, EnzymeStep

Array = NDArray[np.float64]
SATURATING, TRACE, ABSENT = 1e20, 1e-20, 1e-60  # mol/L, as limits


@dataclass(frozen=True)
class MeasuredConstants:
    """Initial-rate constants of one reaction in one direction.

    kcat_per_s : 1/s; KM_M : mol/L, one per substrate in the order bound, the other substrates saturating, no product.
    """

    kcat_per_s: float
    KM_M: tuple[float, ...]


def generator(
    enzyme: Enzyme, concentrations: Mapping[str, float] | Array, among: Collection[int] | None = None
) -> Array:
    """Rates between states, 1/s, shape=(states, states): [i, j] from i to j, the diagonal zero.

    concentrations : mol/L by species, or one per step, shape=(steps,), for the ligand that the step binds or releases.
    among : indices of the steps that run, default all.
    """
    rates = np.zeros((len(enzyme.states), len(enzyme.states)))
    for k, step in enumerate(enzyme.steps):
        if among is not None and k not in among:
            continue
        if step.ligand is None:
            c = 1.0
        else:
            c = float(concentrations[step.ligand] if isinstance(concentrations, Mapping) else concentrations[k])
        rates[step.source, step.target] += step.forward * (c if step.binds is not None else 1.0)
        rates[step.target, step.source] += step.backward * (c if step.releases is not None else 1.0)
    return rates


def stationary(rates: Array) -> Array:
    """Occupancies, shape=(states,), of a chain of states whose rates are given as by `generator`.

    States that the first one does not lead to and that do not lead to it are left empty.
    """
    n = len(rates)
    linked = [0]
    for i in linked:
        linked += [j for j in range(n) if (rates[i, j] or rates[j, i]) and j not in linked]
    reduced = rates[np.ix_(linked, linked)].copy()
    m = len(linked)
    leaving = np.zeros(m)
    for k in range(m - 1, 0, -1):
        leaving[k] = reduced[k, :k].sum()
        reduced[:k, :k] += np.outer(reduced[:k, k] / leaving[k], reduced[k, :k])
    weights = np.zeros(m)
    weights[0] = 1.0
    for k in range(1, m):
        weights[k] = weights[:k] @ reduced[:k, k] / leaving[k]
    out = np.zeros(n)
    out[linked] = weights / weights.sum()
    return out


def turnover_rates(enzyme: Enzyme, concentrations: Mapping[str, float]) -> dict[str, float]:
    """Steady-state net turnovers of each reaction by one molecule, 1/s, positive in the direction it is written.

    concentrations : mol/L by species; an absent ligand counts as a trace, so that the limit is finite.
    """
    some = {name: max(c, ABSENT) for name, c in concentrations.items()}
    rates = generator(enzyme, some)
    share = stationary(rates)
    out = {}
    for activity in enzyme.activities:
        step = enzyme.steps[activity.counted]
        net = share[step.source] * step.forward - share[step.target] * step.backward
        out[activity.reaction] = float(activity.direction * net)
    return out


def measured_constants(enzyme: Enzyme, activity: Activity, backward: bool = False) -> MeasuredConstants:
    """kcat and K_M of one activity, by itself, in the direction of its substrates or, with `backward`, its products.

    The limits of the initial rate: kcat with all substrates saturating; kcat/K_M from a trace of one of them.
    """
    taken, given = activity.substrate_steps, activity.product_steps
    if backward:
        taken, given = tuple(reversed(given)), tuple(reversed(taken))
    among = frozenset(activity.steps)

    def rate(trace: int | None) -> float:
        c = np.full(len(enzyme.steps), ABSENT)
        for i, steps in enumerate(taken):
            c[list(steps)] = TRACE if i == trace else SATURATING
        share = stationary(generator(enzyme, c, among))
        # with no product about, its release is one way, and the sum over the steps that release it the initial rate
        return sum(_release(enzyme.steps[k], share) for k in given[0])

    kcat = rate(None)
    return MeasuredConstants(kcat, tuple(kcat * TRACE / rate(i) for i in range(len(taken))))


def _release(step: EnzymeStep, share: Array) -> float:
    """Gross rate at which `step` lets its ligand go, 1/s."""
    if step.releases is not None:
        return float(share[step.source] * step.forward)
    return float(share[step.target] * step.backward)
