"""From counts to concentrations: means by master equation approach the rate equations as 1/volume.

A + B <=> C at fixed concentrations, with 5, 10, 20, 40 and 80 copies of A and of B in volumes in proportion. The leading
correction to the macroscopic law falls as 1/Omega (van Kampen, Can. J. Phys. 39:551, 1961); the rate equations are solved by
scipy's solve_ivp, the master equation by its expm_multiply.
"""

import numpy as np
import pytest
from scipy import stats
from scipy.integrate import solve_ivp

import driblet
from driblet.network import Network
from driblet.quantities import copies_per_molar
from driblet_analysis.references.master_equation import MasterEquation, Transient
from driblet_analysis.references.rate_equations import solve_rate_equations
from tests.physics.support import FALSE_ALARM, counts_at, system, z_of_mean

COPIES = [5, 10, 20, 40, 80]
LITRES_A_COPY = 1e6 / copies_per_molar(1.0)  # n copies in n times this volume are 1 uM
K, FORWARD = 1e6, 2e6  # /M, /M/s: at 1 uM of each 38 % is bound in the end, within half a second
TIMES = np.array([0.0, 0.2, 0.4, 0.6, 0.8, 1.0])


def binding(copies: int, constant: float = K) -> driblet.System:
    return system(
        {"A": f'"{copies} copies"', "B": f'"{copies} copies"', "C": '"0 copies"'},
        {"bind": f'equation = "A + B <=> C", K = "{constant} /M", forward = "{FORWARD} /M/s"'},
        volume=f"{LITRES_A_COPY * copies!r} L",
    )


def exact(copies: int) -> Transient:
    one = binding(copies)
    return MasterEquation.of(Network.of(one), [copies, copies, 0], one.compartment.omega).transient(TIMES)


def concentrations() -> np.ndarray:
    """c(t)/1 uM of A, B, C by the law of mass action, written out, by solve_ivp."""

    def slope(_: float, c: np.ndarray) -> np.ndarray:
        v = FORWARD * 1e-6 * c[0] * c[1] - FORWARD / K * c[2]
        return v * np.array([-1.0, -1.0, 1.0])

    return solve_ivp(slope, (0, TIMES[-1]), [1.0, 1.0, 0.0], t_eval=TIMES, rtol=1e-11, atol=1e-13).y.T


def errors() -> np.ndarray:
    """Mean concentration minus the macroscopic one, in units of 1 uM, shape=(sizes, times after 0)."""
    macroscopic = concentrations()[1:, 2]
    return np.array([exact(n).mean()[1:, 2] / n - macroscopic for n in COPIES])


def test_the_error_falls_as_one_over_volume() -> None:
    size = np.abs(errors())
    assert size.min() > 1e-4  # there is an error to speak of
    slopes = np.polyfit(np.log(COPIES), np.log(size), 1)[0]
    np.testing.assert_allclose(slopes, -1, atol=0.05)
    # from 40 to 80 copies the next order hardly counts
    np.testing.assert_allclose(size[3] / size[4], 2, rtol=0.02)


def test_twin_a_volume_a_fifth_too_large() -> None:
    """With propensities of another volume the means converge to something else."""
    macroscopic = concentrations()[1:, 2]
    wrong = [
        MasterEquation.of(Network.of(binding(n)), [n, n, 0], 1.2 * binding(n).compartment.omega).transient(TIMES)
        for n in COPIES
    ]
    size = np.abs([law.mean()[1:, 2] / n - macroscopic for law, n in zip(wrong, COPIES, strict=True)])
    assert (np.polyfit(np.log(COPIES), np.log(size), 1)[0] > -0.7).any()


def test_our_rate_equations_are_the_law_of_mass_action() -> None:
    one = binding(80)
    copies = solve_rate_equations(Network.of(one), [80, 80, 0], one.compartment.omega, TIMES)
    np.testing.assert_allclose(copies / 80, concentrations(), atol=1e-9)


@pytest.mark.parametrize("copies", COPIES)
def test_simulated_means_agree_with_the_master_equation(copies: int) -> None:
    """5 times a size, two-sided z by Bonferroni, false-alarm rate 1e-3 a size."""
    law = exact(copies)
    simulated = counts_at(binding(copies), TIMES, 4000, seed=8)[:, 1:, 2]
    z = [z_of_mean(simulated[:, k], law.mean()[k + 1, 2], law.variance()[k + 1, 2]) for k in range(5)]
    assert np.max(np.abs(z)) < stats.norm.isf(FALSE_ALARM / 2 / 5)


def test_twin_the_macroscopic_law_is_not_the_mean_of_five() -> None:
    """At 5 copies the rate equations are off by per cents; 4,000 compartments show it."""
    law = exact(5)
    simulated = counts_at(binding(5), TIMES, 4000, seed=8)[:, 1:, 2]
    macroscopic = 5 * concentrations()[1:, 2]
    z = [z_of_mean(simulated[:, k], macroscopic[k], law.variance()[k + 1, 2]) for k in range(5)]
    assert np.max(np.abs(z)) > stats.norm.isf(FALSE_ALARM / 2 / 5)


def test_twin_a_reverse_rate_off_by_half_a_kilojoule() -> None:
    law = exact(40)
    simulated = counts_at(binding(40, K * np.exp(0.5 / 2.479)), TIMES, 4000, seed=8)[:, 1:, 2]
    z = [z_of_mean(simulated[:, k], law.mean()[k + 1, 2], law.variance()[k + 1, 2]) for k in range(5)]
    assert np.max(np.abs(z)) > stats.norm.isf(FALSE_ALARM / 2 / 5)
