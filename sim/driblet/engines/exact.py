"""The exact engine: which kernel runs a network, and what is laid out for it once. See contract.py.

Both methods give the same bits, so that a choice between them is one of speed alone:

lanes   replicates in lockstep (lanes.py): an event costs time in proportion to the number of channels, shared by 64
scalar  one replicate after the other (scalar.py): an event costs nearly the same at any number of channels
"""

from __future__ import annotations

import time
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from driblet.engines.choice import LANES, METHODS, choose_method, fewest_lanes
from driblet.engines.contract import RUNNING, EnsembleState, NetworkArrays, Recorders, Samples
from driblet.engines.factors import factor_rows, most_nodes
from driblet.engines.lane_memory import lane_table, new_lanes
from driblet.engines.lanes import advance_lanes
from driblet.engines.recorders import recorders_for
from driblet.engines.scalar import advance_scalar, needs_compiler
from driblet.engines.sums import Refresh, SumRows, refresh_plan, select, sum_rows

PATIENCE_S = 3.0  # about what it takes to compile the scalar kernel
Table = TypeVar("Table", NetworkArrays, SumRows, Refresh)

__all__ = ["METHODS", "ExactEngine", "advance", "choose_method", "fewest_lanes", "select"]


def _compact(table: Table) -> Table:
    """The same table in 32 bits, whole numbers all: a large network then misses the caches half as often."""
    narrow = {np.dtype(np.int64): np.int32, np.dtype(np.float64): np.float32}
    arrays = {k: a for k, a in table._asdict().items() if getattr(a, "dtype", None) in narrow}
    return table._replace(**{k: a.astype(narrow[a.dtype]) for k, a in arrays.items()})


class ExactEngine:
    """A network of `species` free species laid out for one method; `method` None lets `choose_method` decide each call."""

    def __init__(self, network: NetworkArrays, species: int, method: str | None = None, lanes: int = LANES) -> None:
        if method not in (None, *METHODS):
            raise ValueError(f"{method!r} is not a method; known: {', '.join(METHODS)}")
        self.network, self.method, self.lanes = network, method, lanes
        self.rows = sum_rows(len(network.reactant))
        self.refresh = refresh_plan(network, self.rows)
        self.table = lane_table(network, species, lanes)
        self.compact = (_compact(network), _compact(self.rows), _compact(self.refresh))
        self.nodes = most_nodes(network)
        # None has kernels compiled without a trace of factors
        self.factor_row = factor_rows(network) if self.nodes else None
        self.ran_lanes, self.straggling_s = False, 0.0

    def _keep_in_lanes(self) -> bool:
        """Whether stragglers go on in lanes: in a first run their kernel would have to be compiled, which takes longer."""
        return self.ran_lanes and self.straggling_s < PATIENCE_S and needs_compiler()

    def advance(
        self,
        rates: NDArray[np.float64],
        state: EnsembleState,
        samples: Samples,
        budget: int,
        recorders: Recorders | None = None,
    ) -> int:
        """See contract.py. rates : float64, (R, M + 2 T), 1/s per product of falling factorials, then coefficients."""
        recorders = recorders or recorders_for(state)
        running = int(np.count_nonzero(state.reason == RUNNING))
        logging = recorders.log.time.shape[1] > 0
        method = self.method or choose_method(state.firings.shape[1], running, logging)
        straggling = method == "scalar" and not self.method and not logging and self._keep_in_lanes()
        if straggling:
            started = time.monotonic()
            fired = self._advance("lanes", 1, rates, state, samples, budget, recorders)
            self.straggling_s += time.monotonic() - started
            return fired
        fewest = 1 if self.method else fewest_lanes(state.firings.shape[1])
        return self._advance(method, fewest, rates, state, samples, budget, recorders)

    def _advance(
        self,
        method: str,
        fewest: int,
        rates: NDArray[np.float64],
        state: EnsembleState,
        samples: Samples,
        budget: int,
        recorders: Recorders,
    ) -> int:
        judging, plain = recorders.requirements, recorders._replace(requirements=None)
        with np.errstate(all="ignore"):  # for kernels that run as plain Python
            if method == "lanes":
                if recorders.log.time.shape[1] > 0:
                    raise ValueError("an event log is kept by the scalar method only")
                self.ran_lanes = True
                lanes = new_lanes(self.network, state, self.rows, recorders, self.lanes)
                lanes.common_rate[:] = rates[0]
                shared = bool((rates == rates[0]).all())
                return int(
                    advance_lanes(
                        self.network,
                        self.table,
                        self.rows,
                        self.factor_row,
                        lanes,
                        shared,
                        fewest,
                        rates,
                        state,
                        samples,
                        budget,
                        plain,
                        judging,
                    )
                )
            return int(
                advance_scalar(
                    *self.compact,
                    self.factor_row,
                    self.nodes,
                    rates,
                    state,
                    samples,
                    budget,
                    plain,
                    judging,
                )
            )


def advance(
    network: NetworkArrays,
    rates: NDArray[np.float64],
    state: EnsembleState,
    samples: Samples,
    budget: int,
    recorders: Recorders | None = None,
    method: str | None = None,
) -> int:
    """One call of the contract for a network that is not laid out yet."""
    engine = ExactEngine(network, state.counts.shape[1] - 1, method)
    return engine.advance(rates, state, samples, budget, recorders)
