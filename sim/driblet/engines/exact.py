"""The exact engine: which kernel runs a network, and what is laid out for it once. See contract.py."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driblet.engines.contract import EnsembleState, NetworkArrays, Recorders, Samples
from driblet.engines.recording import recorders_for
from driblet.engines.scalar import advance_scalar
from driblet.engines.sums import refresh_plan, select, sum_rows

__all__ = ["ExactEngine", "advance", "select"]


class ExactEngine:
    """A network laid out for the exact method."""

    def __init__(self, network: NetworkArrays) -> None:
        self.network = network
        self.rows = sum_rows(len(network.reactant))
        self.refresh = refresh_plan(network, self.rows)

    def advance(
        self,
        rates: NDArray[np.float64],
        state: EnsembleState,
        samples: Samples,
        budget: int,
        recorders: Recorders | None = None,
    ) -> int:
        """See contract.py. rates : float64, (R, M), 1/s per product of falling factorials."""
        recorders = recorders or recorders_for(state)
        with np.errstate(all="ignore"):  # for kernels that run as plain Python
            return int(advance_scalar(self.network, self.rows, self.refresh, rates, state, samples, budget, recorders))


def advance(
    network: NetworkArrays,
    rates: NDArray[np.float64],
    state: EnsembleState,
    samples: Samples,
    budget: int,
    recorders: Recorders | None = None,
) -> int:
    """One call of the contract for a network that is not laid out yet."""
    return ExactEngine(network).advance(rates, state, samples, budget, recorders)
