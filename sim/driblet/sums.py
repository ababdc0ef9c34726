"""What a run sums up while it runs, so that statistics need no dense trajectory.

Exact time integrals over windows of the run, of each channel's monomial (for firings against propensities) and of counts
(for time-weighted means), and the time spent at each count after the burn-in (histograms). A run that keeps trajectories
takes its histograms from their samples. Covariances are always taken from samples after the burn-in: a sum of every pair
of counts at every event would cost more than the simulation.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.energetics.cycles import conservation_laws
from driblet.engines.contract import EnsembleState, Recorders
from driblet.engines.factors import factored_channels
from driblet.engines.recorders import Ints, new_averages, new_occupancy, recorders_for, settle_plan
from driblet.network import Network
from driblet.run_file import PerReplicate
from driblet.samples import BINS, covariance, occupancy
from driblet.system import System

WINDOWS = 10
HIDDEN_SAMPLES = 257
MOST_WITH_LAWS = 2000  # channels


@dataclass(frozen=True)
class SumsPlan:
    """Which sums a run keeps.

    Attributes: edge_s : (E,), window edges; factor : int64, (Q, 3), offset : (Q, 3), the distinct monomials; row : int64,
    which of them each channel and then each species has; kept : whether there is any of this; histograms : whether time
    is counted at every event, which can cost more than the simulation itself, or taken from the samples; bin_width : int64,
    (N,), counts per bin of the histograms; span_s : when histograms are gathered; paced : of contract.Averages, monomials
    that are integrated together with the factor of their channel; settle : which of them a firing changes, where only
    those are added to; covariances : whether those of counts are kept, for a run that does not keep its samples.
    """

    edge_s: NDArray[np.float64]
    factor: NDArray[np.int64]
    offset: NDArray[np.float64]
    row: NDArray[np.int64]
    kept: bool
    histograms: bool
    bin_width: NDArray[np.int64]
    span_s: tuple[float, float]
    channels: int
    species: int
    paced: NDArray[np.int64] | None = None
    settle: tuple[Ints, Ints] | None = None
    covariances: bool = False

    @classmethod
    def of(
        cls,
        system: System,
        network: Network,
        duration_s: float,
        burn_in_s: float | None,
        *,
        kept: bool = True,
        histograms: bool = True,
        covariances: bool = False,
    ) -> SumsPlan:
        """The sums for a run of `duration_s`; a stated burn-in is an edge of its own."""
        if burn_in_s is None:
            edges = np.linspace(0.0, duration_s, WINDOWS + 1)
            begin = 0.5 * duration_s
        else:
            edges = np.concatenate([[0.0], np.linspace(burn_in_s, duration_s, WINDOWS + 1)])
            begin = burn_in_s
            if burn_in_s == 0.0:
                edges = edges[1:]
        edges[-1] = duration_s
        n = len(network.species)
        singles = np.column_stack([np.arange(n), np.full(n, n), np.full(n, n)])
        arrays = network.arrays
        reactant, shift = arrays.reactant.copy(), arrays.offset.copy()
        factored = factored_channels(arrays)
        # zero, and each of its own, so that no two of them are taken for one
        reactant[factored] = n
        shift[factored] = np.column_stack([np.ones(len(factored)), np.arange(len(factored)), np.zeros(len(factored))])
        factor, offset = np.vstack([reactant, singles]), np.vstack([shift, np.zeros((n, 3))])
        distinct, row = np.unique(np.hstack([factor, offset]), axis=0, return_inverse=True)
        order = np.argsort((distinct[:, :3] < n).sum(axis=1), kind="stable")  # those of one factor go together in lanes
        distinct, row = distinct[order], np.argsort(order)[row.reshape(-1)]
        chosen = distinct[:, :3].astype(np.int64)
        paced = np.column_stack([row.reshape(-1)[factored], np.arange(len(factored))])
        return cls(
            edges,
            chosen,
            distinct[:, 3:],
            row,
            kept,
            histograms,
            _bin_widths(system, network) if kept else np.ones(n, dtype=np.int64),
            (begin, duration_s),
            len(network.channels),
            n,
            paced,
            settle_plan(arrays, chosen, paced) if kept else None,
            covariances,
        )

    def recorders(self, state: EnsembleState, start_s: float, end_s: float) -> Recorders:
        """Fresh recorders for the replicates of `state` over a stretch of the run."""
        if not self.kept:
            return recorders_for(state)
        replicates = len(state.reason)
        inside = self.edge_s[(self.edge_s > start_s) & (self.edge_s < end_s)]
        edges = np.concatenate([[start_s], inside, [end_s]])
        averages = new_averages(edges, self.factor, self.offset, replicates, self.channels, self.paced, self.settle)
        span = (max(start_s, self.span_s[0]), min(end_s, self.span_s[1]))
        if not self.histograms:
            return recorders_for(state, averages)
        occupancy = new_occupancy(np.arange(self.species), self.bin_width, BINS, span, replicates, self.species)
        occupancy.since[:] = start_s
        return recorders_for(state, averages, occupancy)

    def empty(self, replicates: int) -> dict[str, NDArray[Any]]:
        """Sums of nothing yet, by the names they have in a run file, replicates first."""
        return {
            one.path: np.zeros((replicates, *one.shape), dtype=one.dtype) for one in self.per_replicate if one.shape
        }

    def collect(self, recorders: Recorders, into: dict[str, NDArray[Any]]) -> None:
        """Add what the recorders of one stretch gathered."""
        if not self.kept:
            return
        averages = recorders.averages
        for k, start in enumerate(averages.edge[:-1]):
            window = int(np.searchsorted(self.edge_s, start, side="right")) - 1
            into["stationary/monomial_time"][:, window] += averages.integral[:, k, self.row[: self.channels]]
            into["stationary/count_time"][:, window] += averages.integral[:, k, self.row[self.channels :]]
        for k, edge in enumerate(averages.edge):
            for at in np.flatnonzero(self.edge_s == edge):
                into["stationary/window_firings"][:, int(at)] = averages.firings[:, k]
        if self.histograms:
            into["stationary/occupancy_time"] += recorders.occupancy.seconds

    @property
    def per_replicate(self) -> tuple[PerReplicate, ...]:
        """The arrays as the run file declares them."""
        if not self.kept:
            return ()
        edges, n, m = len(self.edge_s), self.species, self.channels
        return (
            PerReplicate("stationary/monomial_time", (edges - 1, m), np.float64, "s"),
            PerReplicate("stationary/count_time", (edges - 1, n), np.float64, "s"),
            PerReplicate("stationary/window_firings", (edges, m), np.int64, "1"),
            PerReplicate("stationary/occupancy_time", (n, BINS), np.float64, "s"),
            *([PerReplicate("stationary/covariance", (n, n), np.float64, "1")] if self.covariances else []),
        )

    @property
    def fixed(self) -> dict[str, NDArray[Any]]:
        """What all replicates share, as the run file declares it."""
        if not self.kept:
            return {}
        return {
            "stationary/window_edge": self.edge_s,
            "stationary/bin_width": self.bin_width,
            "stationary/span": np.array(self.span_s),
        }

    def hidden_grid(self) -> NDArray[np.float64]:
        """Times, s, at which a run without trajectories is sampled for its covariances; the end is the last."""
        return np.linspace(self.span_s[0], self.span_s[1], HIDDEN_SAMPLES)

    def sampled(self, time_s: NDArray[np.float64], counts: NDArray[np.int64]) -> dict[str, NDArray[Any]]:
        """What is taken from samples, by the names it has in a run file; counts : (replicates, times, species)."""
        if not self.kept:
            return {}
        taken: dict[str, NDArray[Any]] = {}
        if self.covariances:
            taken["stationary/covariance"] = covariance(time_s, counts, self.span_s)
        if not self.histograms:
            taken["stationary/occupancy_time"] = occupancy(time_s, counts, self.span_s, self.bin_width)
        return taken


def _bin_widths(system: System, network: Network) -> NDArray[np.int64]:
    """Counts per bin so that BINS bins hold what a species can reach: its conserved sums, else twice its load and more.

    Conserved sums take time with the cube of a network's size: of a large one the largest load stands for them.
    """
    omega = system.compartment.omega * (1.0 + 4.0 * system.compartment.cv) ** (
        3 if system.compartment.by_diameter else 1
    )
    load = np.array([s.mean_copies(omega) for s in system.free_species])
    poisson = np.array([s.loading == "poisson" for s in system.free_species])
    load = load + np.where(poisson, 6.0 * np.sqrt(load) + 6.0, 0.0)
    top = np.full(len(load), np.inf)
    large = len(network.channels) > MOST_WITH_LAWS
    if large:
        load[:] = load.max(initial=0.0)
    for law in [] if large else conservation_laws(network.stoichiometry):
        if (law >= 0).all():
            held = law > 0
            top[held] = np.minimum(top[held], (law @ load) / law[held])
    open_ended = ~np.isfinite(top)
    top[open_ended] = 2.0 * load[open_ended] + 50.0
    return np.maximum(1, np.ceil((top + 1.0) / BINS)).astype(np.int64)
