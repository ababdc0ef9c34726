"""The master equation dp/dt = G p on enumerated states: exact transients and stationary laws, driven or not.

Where caps cut states off, probability that leaves is lost to the transient, which bounds the error: what remains differs
from the truth by at most what was lost (finite state projection; Munsky & Khammash, J. Chem. Phys. 124:044104, 2006).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy import sparse
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import expm_multiply, spsolve

from driblet.errors import CannotAnswerError
from driblet.network import Network
from driblet_analysis.references.count_equilibrium import CountLaw
from driblet_analysis.references.state_space import (
    ENABLED_BUT_OUTSIDE,
    LIMIT,
    Array,
    States,
    enumerate_class,
    neighbours,
)


@dataclass(frozen=True)
class Transient:
    """The law of counts at several times.

    Attributes: time_s : shape=(times,); states : int64, shape=(states, species); probability : shape=(times, states);
    lost : shape=(times,), the probability that has left through the caps by then.
    """

    time_s: Array
    states: States
    probability: Array
    lost: Array

    def mean(self) -> Array:
        """Mean counts, shape=(times, species)."""
        return np.asarray(self.probability @ self.states)

    def variance(self) -> Array:
        """Variance of counts, shape=(times, species)."""
        away = (self.states[None] - self.mean()[:, None]) ** 2
        return np.asarray(np.einsum("tk,tks->ts", self.probability, away))

    def law(self, k: int) -> CountLaw:
        """The law at `time_s[k]`, scaled to sum to 1."""
        p = self.probability[k]
        return CountLaw(self.states, p / p.sum(), complete=bool(self.lost[k] == 0))


@dataclass(frozen=True)
class MasterEquation:
    """A network's master equation on the states it can reach from one state.

    Attributes: states : int64, shape=(states, species), the initial one first; flow : sparse, 1/s, [to, from], off the
    diagonal; leaving : shape=(states,), 1/s, total propensity of channels that stay inside; leak : of those cut off.
    """

    states: States
    flow: sparse.csc_array
    leaving: Array
    leak: Array

    @classmethod
    def of(
        cls,
        network: Network,
        initial_counts: ArrayLike,
        omega: float,
        *,
        caps: ArrayLike | None = None,
        limit: int = LIMIT,
    ) -> MasterEquation:
        """Build it. omega : copies per mol/L; caps : largest count kept of each species, needed by open systems.

        Raises CannotAnswerError when there are more than `limit` states.
        """
        states = enumerate_class(network, initial_counts, limit, caps)
        if states is None:
            raise CannotAnswerError(f"more than {limit} states; fewer molecules or lower caps would do")
        propensity = network.propensities(states.astype(float), network.rates(np.array([omega]))[0])
        to = neighbours(network, states)
        source, channel = np.nonzero(to >= 0)
        target = to[source, channel]
        moving = target != source
        shape = (len(states), len(states))
        entries = (propensity[source, channel][moving], (target[moving], source[moving]))
        flow = sparse.csc_array(sparse.coo_array(entries, shape=shape))
        leak = np.where(to == ENABLED_BUT_OUTSIDE, propensity, 0.0).sum(axis=1)
        return cls(states, flow, np.asarray(flow.sum(axis=0)).ravel(), leak)

    def transient(self, times_s: ArrayLike, start: ArrayLike | None = None) -> Transient:
        """The law at increasing times, s, from probabilities `start` at t = 0, by default the initial state for certain."""
        times = np.atleast_1d(np.asarray(times_s, dtype=float))
        p = np.zeros(len(self.states))
        if start is None:
            p[0] = 1.0
        else:
            p = np.asarray(start, dtype=float)
        G = self.flow - sparse.diags_array(self.leaving + self.leak)
        trace = -float((self.leaving + self.leak).sum())
        out = np.empty((len(times), len(p)))
        before = 0.0
        for k, now in enumerate(times):
            if now > before:
                p = expm_multiply(G * (now - before), p, traceA=trace * (now - before))
            elif now < before:
                raise ValueError("the times must increase from zero")
            # what the series leaves below zero is rounding
            out[k] = np.maximum(p, 0.0)
            before = now
        return Transient(times, self.states, out, np.maximum(1.0 - out.sum(axis=1), 0.0) * bool(self.leak.any()))

    def stationary(self) -> CountLaw:
        """The stationary law, channels that lead out left aside.

        States that are left for good get probability 0. Raises CannotAnswerError when there are several stationary laws.
        """
        n, label = connected_components(self.flow.T, directed=True, connection="strong")
        target, source = self.flow.nonzero()
        left = np.zeros(n, dtype=bool)
        left[label[source[label[source] != label[target]]]] = True
        closed = np.flatnonzero(~left)
        if len(closed) > 1:
            raise CannotAnswerError(f"{len(closed)} sets of states cannot be left, so the end depends on chance")
        inside = np.flatnonzero(label == closed[0])
        flow = self.flow[inside][:, inside]
        scale = float(self.leaving[inside].max(initial=1.0)) or 1.0
        G = sparse.lil_array((flow - sparse.diags_array(self.leaving[inside])) / scale)
        G[0] = np.ones(len(inside))  # the sum of all rows is zero, so one of them can make way for the norm
        right = np.zeros(len(inside))
        right[0] = 1.0
        p = np.zeros(len(self.states))
        p[inside] = np.maximum(np.atleast_1d(spsolve(sparse.csc_array(G), right)), 0.0)
        return CountLaw(self.states, p / p.sum(), complete=not self.leak.any())
