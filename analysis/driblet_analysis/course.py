"""The expected course of a compartment by its rate equations: how often each channel fires, where counts end."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driblet.network import Network
from driblet_analysis.references.state_space import channel_matrices

Array = NDArray[np.float64]


def expected_course(network: Network, copies: Array, omega: float, duration_s: float) -> tuple[Array, Array]:
    """Expected firings of each channel, shape=(channels,), and copies at the end, shape=(species,).

    copies : at the start, shape=(species,); omega : copies per mol/L. Propensities are taken at the mean counts, which is
    exact for first-order reactions and an estimate for the others. Raises ArithmeticError where the integration fails.
    """
    from scipy.integrate import solve_ivp

    n = len(network.species)
    rates = network.rates(np.array([omega]))[0]
    _, change = channel_matrices(network)

    def slope(_: float, y: Array) -> Array:
        # below one molecule a falling factorial of the mean would be negative
        propensity = np.maximum(network.propensities(np.maximum(y[:n], 0.0), rates), 0.0)
        return np.concatenate([propensity @ change, propensity])

    start = np.concatenate([copies, np.zeros(len(network.channels))])
    result = solve_ivp(slope, (0.0, duration_s), start, method="LSODA", rtol=1e-6, atol=1e-6)
    if not result.success:
        raise ArithmeticError(f"the rate equations could not be integrated: {result.message}")
    final = result.y[:, -1]
    return np.maximum(final[n:], 0.0), np.maximum(final[:n], 0.0)
