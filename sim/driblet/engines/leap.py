"""The leap engine: what is laid out for it once, and one call of the contract. See contract.py and leaps.py.

A replicate's bits belong to the machine's instruction set and library (draws.py) and to the times at which leaps end: the
recording grid, the windows of statistics where they are kept, those of averaged requirements. They depend on nothing else.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driblet.engines.contract import EnsembleState, NetworkArrays, Recorders, Samples
from driblet.engines.factors import factor_rows, most_nodes
from driblet.engines.leap_arrays import WORK, Pairs, Turnover, new_room, no_turnover
from driblet.engines.leaps import advance_leaps
from driblet.engines.recorders import recorders_for


class LeapEngine:
    """A network laid out for leaps.

    tolerance : the share by which a pair's gross propensity may be expected to change in one leap; stiffness : the longest
    leap, in units of the fastest relaxation time. The coefficients of `turnover` stand at the end of each row of rates.
    """

    def __init__(
        self,
        network: NetworkArrays,
        pairs: Pairs,
        species: int,
        turnover: Turnover | None = None,
        tolerance: float = 0.01,
        stiffness: float = 5.0,
    ) -> None:
        self.network, self.pairs, self.turnover = network, pairs, turnover or no_turnover()
        self.tolerance, self.stiffness = tolerance, stiffness
        self.factor_row, self.nodes = factor_rows(network), most_nodes(network)
        touched: list[list[tuple[int, float]]] = [[] for _ in range(species + 1)]
        for k in range(len(pairs.forward)):
            for c in range(pairs.change_start[k], pairs.change_start[k + 1]):
                touched[pairs.change_species[c]].append((k, float(pairs.change_amount[c])))
        self.touch_start = np.cumsum([0, *(len(t) for t in touched)]).astype(np.int64)
        self.touch_pair = np.array([k for t in touched for k, _ in t], dtype=np.int64)
        self.touch_amount = np.array([a for t in touched for _, a in t], dtype=np.float64)

    def new_work(self, replicates: int) -> NDArray[np.float64]:
        """Nothing done yet, (R, WORK); columns in leaps.py."""
        return np.zeros((replicates, WORK))

    def advance(
        self,
        rates: NDArray[np.float64],
        state: EnsembleState,
        samples: Samples,
        budget: int,
        recorders: Recorders | None = None,
        work: NDArray[np.float64] | None = None,
    ) -> int:
        """See contract.py. rates : float64, (R, M + 2 T + coefficients of `turnover`). Raises ValueError for an event log."""
        recorders = recorders or recorders_for(state)
        if recorders.log.time.shape[1]:
            raise ValueError("a leap has no single events to log")
        work = self.new_work(len(state.reason)) if work is None else work
        noise_at = len(self.network.reactant) + 2 * len(self.network.node_parent)
        with np.errstate(all="ignore"):  # for kernels that run as plain Python
            return int(
                advance_leaps(
                    self.network,
                    self.pairs,
                    self.turnover,
                    self.touch_start,
                    self.touch_pair,
                    self.touch_amount,
                    self.factor_row,
                    self.nodes,
                    rates,
                    noise_at,
                    self.tolerance,
                    self.stiffness,
                    state,
                    samples,
                    budget,
                    recorders._replace(requirements=None),
                    recorders.requirements,
                    work,
                    new_room(self.pairs, self.turnover, state.counts.shape[1] - 1, self.nodes),
                )
            )
