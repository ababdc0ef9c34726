"""The deterministic rate equations of a network: what counts become in a compartment large enough.

Falling factorials become powers: dN_i/dt = sum_j change_ij r_j prod_k N_k^nu_kj with N = c Omega, the law of mass action
v = k prod c^nu (Kurtz, J. Chem. Phys. 57:2976, 1972, for the limit).
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike, NDArray

from driblet.drive import ln_constants, runnable
from driblet.energetics.equilibrium import NoEquilibriumError, equilibrium_composition
from driblet.network import Network
from driblet.system import System
from driblet_analysis.references.state_space import channel_matrices

Array = NDArray[np.float64]


def right_hand_side(
    network: Network, omega: float
) -> tuple[Callable[[float, Array], Array], Callable[[float, Array], Array]]:
    """f(t, copies) in copies/s, shape=(species,), and its Jacobian in 1/s; omega : copies per mol/L."""
    need, change = channel_matrices(network)
    rates = network.rates(np.array([omega]))[0]

    constants = rates[: len(network.channels)]

    def speeds(copies: Array) -> Array:
        gross = np.asarray(constants * np.prod(copies**need, axis=1))
        return gross * network.factors(copies, rates, exact=False) if network.factored else gross

    def slope(_: float, copies: Array) -> Array:
        return np.asarray(speeds(copies) @ change)

    def jacobian(_: float, copies: Array) -> Array:
        out = np.zeros((len(copies), len(copies)))
        if network.factored:
            for i in range(len(copies)):
                step = 1e-6 * max(1.0, abs(copies[i]))
                up, down = copies.copy(), copies.copy()
                up[i], down[i] = copies[i] + step, max(0.0, copies[i] - step)
                out[:, i] = (slope(0.0, up) - slope(0.0, down)) / (up[i] - down[i])
            return out
        for i in range(len(copies)):
            less = need.copy()
            less[:, i] = np.maximum(less[:, i] - 1, 0)
            out[:, i] = (constants * need[:, i] * np.prod(copies**less, axis=1)) @ change
        return out

    return slope, jacobian


def solve_rate_equations(
    network: Network, initial_counts: ArrayLike, omega: float, times_s: ArrayLike, rtol: float = 1e-10
) -> Array:
    """Copies at the given times, shape=(times, species); initial_counts at t = 0 may be fractional.

    times_s : increasing, from 0 on. Raises ArithmeticError where the integration fails.
    """
    from scipy.integrate import solve_ivp

    start = np.asarray(initial_counts, dtype=float)
    times = np.atleast_1d(np.asarray(times_s, dtype=float))
    if times[-1] == 0:
        return np.tile(start, (len(times), 1))
    slope, jacobian = right_hand_side(network, omega)
    scale = max(1.0, float(start.max(initial=0.0)))
    result = solve_ivp(
        slope, (0.0, times[-1]), start, method="LSODA", t_eval=times, jac=jacobian, rtol=rtol, atol=1e-3 * rtol * scale
    )
    if not result.success:
        raise ArithmeticError(f"the rate equations could not be integrated: {result.message}")
    return np.asarray(result.y.T)


def relaxation_times(system: System) -> Array:
    """Relaxation times in s of the rate equations linearised at the equilibrium of the mean load, slowest first.

    One per independent reaction that can run; empty when none can. At detailed balance the Jacobian is similar to
    -M M^T with M = C^(-1/2) S V^(1/2) (C concentrations, V one-way fluxes), so the rates are squared singular values, which
    keeps rates accurate that lie many powers of ten below the fastest.
    Raises NoEquilibriumError for a driven system and for one-way reactions.
    """
    network = Network.of(system)
    active = runnable(system)
    S = network.stoichiometry[:, active]
    touched = (S != 0).any(axis=1)
    if not touched.any():
        return np.zeros(0)
    ln_K = ln_constants(system)[active]
    if np.isnan(ln_K).any():
        raise NoEquilibriumError("one-way reactions run, so there is no equilibrium to relax to")
    S = S[touched]
    omega = system.compartment.omega
    load = np.array([s.mean_copies(omega) for s in system.free_species]) / omega
    load[touched] = equilibrium_composition(S, ln_K, load[touched])
    rates = network.rates(np.array([omega]))[0]
    need, _ = channel_matrices(network)
    forward = network.channel_index(1)[active]
    flux = rates[forward] * np.prod((load * omega) ** need[forward], axis=1)
    if network.factored:
        flux = flux * network.factors(load * omega, rates, exact=False)[forward]
    M = S * np.sqrt(flux) / np.sqrt(load[touched] * omega)[:, None]
    independent = int(np.linalg.matrix_rank(S.astype(float)))
    singular = np.linalg.svd(M, compute_uv=False)[:independent]
    return np.asarray(np.sort(1.0 / singular**2)[::-1])


def relaxation_time(system: System) -> float | None:
    """The slowest of `relaxation_times`, s; None when no reaction can run."""
    times = relaxation_times(system)
    return float(times[0]) if len(times) else None
