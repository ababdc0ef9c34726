"""The expected course of a compartment by its rate equations: firings, where counts end, how long a start is felt."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from driblet.drive import ln_constants, runnable
from driblet.energetics.equilibrium import equilibrium_composition
from driblet.network import Network
from driblet.system import System

Array = NDArray[np.float64]


def expected_course(network: Network, copies: Array, omega: float, duration_s: float) -> tuple[Array, Array]:
    """Expected firings of each channel, shape=(channels,), and copies at the end, shape=(species,).

    copies : at the start, shape=(species,); omega : copies per mol/L. Propensities are taken at the mean counts, which is
    exact for first-order reactions and an estimate for the others. Raises ArithmeticError where the integration fails.
    """
    from scipy.integrate import solve_ivp

    n = len(network.species)
    rates = network.rates(np.array([omega]))[0]
    change = np.zeros((n, len(network.channels)))
    for j, channel in enumerate(network.channels):
        for i, amount in channel.change:
            change[i, j] = amount

    def slope(_: float, y: Array) -> Array:
        # below one molecule a falling factorial of the mean would be negative
        propensity = np.maximum(network.propensities(np.maximum(y[:n], 0.0), rates), 0.0)
        return np.concatenate([change @ propensity, propensity])

    start = np.concatenate([copies, np.zeros(len(network.channels))])
    result = solve_ivp(slope, (0.0, duration_s), start, method="LSODA", rtol=1e-6, atol=1e-6)
    if not result.success:
        raise ArithmeticError(f"the rate equations could not be integrated: {result.message}")
    final = result.y[:, -1]
    return np.maximum(final[n:], 0.0), np.maximum(final[:n], 0.0)


def relaxation_time(system: System) -> float | None:
    """Slowest relaxation time in s of the rate equations, linearised at the equilibrium of the mean load.

    None when no reaction can run. Raises NoEquilibriumError for a driven system.
    """
    network = Network.of(system)
    active = runnable(system)
    touched = np.abs(network.stoichiometry[:, active]).sum(axis=1) > 0
    if not touched.any():
        return None
    omega = system.compartment.omega
    load = np.array([s.mean_copies(omega) for s in system.free_species])
    composition = load / omega
    composition[touched] = equilibrium_composition(
        network.stoichiometry[np.ix_(touched, active)], ln_constants(system)[active], composition[touched]
    )
    rates = network.rates(np.array([omega]))[0]
    jacobian = np.zeros((len(load), len(load)))
    for j, channel in enumerate(network.channels):
        if not active[channel.reaction]:
            continue
        propensity = rates[j] * np.prod([(composition[i] * omega) ** k for i, k in channel.reactants])
        for i, k in channel.reactants:
            slope = propensity * k / (composition[i] * omega)
            for changed, amount in channel.change:
                jacobian[changed, i] += amount * slope
    speeds = np.abs(np.linalg.eigvals(jacobian).real)
    independent = np.linalg.matrix_rank(network.stoichiometry[:, active].astype(float))
    return float(1.0 / np.sort(speeds)[::-1][independent - 1]) if independent else None
