"""Turnovers of lumped enzymes in leaps have the noise that the steps give them, regular, bursting or shared between reactions.

Exact values by turnover_noise.py, which test_turnover_noise.py holds against eigenvalues and published Fano factors; an
irreversible cycle of n equal steps turns over with a Fano factor of 1/n (a renewal process whose intervals are sums of n equal
exponential ones: Cox, Renewal Theory, 1962). Twins leave the correction out.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import chi2, norm

import driblet
from driblet.engines.leap_arrays import LEAPS, UNCORRECTED
from driblet.lumping import treated
from driblet.system.mechanisms.turnover_noise import turnover_noise
from tests.physics.support import FALSE_ALARM
from tests.physics.test_turnover_noise import HELD
from tests.unit.leap_cases import leap, lumped

Array = np.ndarray
WITHIN = 0.02

# S at 1 mM is bound at 100 /s, and each of the three steps after takes as long; nothing to speak of goes back
EQUAL = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "VOLUME"
[species]
S = { amount = "1 mM", HELD }
P = { amount = "PRODUCT", HELD }
Q = { amount = "PRODUCT", HELD }
[reactions.r]
equation = "S <=> P + Q"
K = "1e16 M"
[enzymes.e]
amount = "20 copies"
catalyses = "r"
mechanism = "ordered uni bi"
[enzymes.e.steps]
binds_S = { forward = "1e5 /M/s", backward = "1e-3 /s" }
r = { forward = "100 /s" }
releases_P_with_Q = { forward = "100 /s", backward = "1 /M/s" }
releases_Q = { forward = "100 /s", backward = "1 /M/s" }
"""
SLOWLY_INHIBITED = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "1 fL"
[species]
S = { amount = "1 mM", held = true }
P = { amount = "1 nM", held = true }
I = { amount = "1 mM", held = true }
[reactions.r]
equation = "S <=> P"
K = 1e8
[enzymes.e]
amount = "20 copies"
catalyses = "r"
mechanism = "uni uni"
kcat = "100 /s"
KM = { S = "1 mM" }
inhibitors = { I = { Ki = "1 mM", on_rate = "1e4 /M/s" } }
"""
SPAN = 8.0


def equal(held: bool, volume: str = "1 fL") -> str:
    text = EQUAL.replace("VOLUME", volume).replace("PRODUCT", "1 nM" if held else "1 uM")
    return text.replace("HELD", f"held = {str(held).lower()}")


def turned(system: driblet.System, replicates: int, correlated: bool = True, samples: int = 2) -> Array:
    """Net turnovers in SPAN, shape=(replicates, reactions that are lumped laws)."""
    made = leap(system, np.linspace(0.0, SPAN, samples), replicates, correlated=correlated, tolerance=0.03)
    assert (made.work[:, LEAPS] > 0).all()
    if correlated:
        assert made.work[:, UNCORRECTED].max() <= 0.1 * made.work[:, LEAPS].max()
    net = np.zeros((replicates, len(made.network.reactions)))
    for j, channel in enumerate(made.network.channels):
        net[:, channel.reaction] += channel.direction * made.samples.firings[:, -1, j]
    return net


def predicted(system: driblet.System, copies: int = 20) -> tuple[Array, Array]:
    """Means and covariances of turnovers in SPAN at the concentrations of the file."""
    (enzyme,) = system.enzymes
    noise = turnover_noise(enzyme)
    x = noise.ligands({s.name: s.concentration_M or 0.0 for s in system.species if s.enzyme is None})
    return noise.rates(x) * copies * SPAN, noise.covariances(x) * copies * SPAN


def fano(net: Array) -> float:
    return float(net.var(ddof=1) / net.mean())


def test_four_equal_steps_at_saturation() -> None:
    """The standard error of the Fano factor is .0025: within .02 fails by chance in 1e-15 of runs."""
    system = lumped(equal(held=True))
    J, C = predicted(system)
    assert C[0, 0] / J[0] == pytest.approx(0.25, abs=1e-3)
    net = turned(system, 20_000, samples=9)[:, 0]
    assert net.mean() == pytest.approx(J[0], abs=norm.isf(FALSE_ALARM / 2) * np.sqrt(C[0, 0] / len(net)))
    assert abs(fano(net) - C[0, 0] / J[0]) < WITHIN


def test_twin_without_the_correction_turns_over_like_a_poisson_process() -> None:
    net = turned(lumped(equal(held=True)), 5_000, correlated=False)[:, 0]
    assert fano(net) == pytest.approx(1.0, abs=0.1)
    assert abs(fano(net) - 0.25) > 10 * WITHIN


def test_four_equal_steps_while_ligands_change() -> None:
    """S free, 602,000 copies of which 4,000 turn over; leaps of few and of many turnovers."""
    system = lumped(equal(held=False))
    J, C = predicted(system)
    for samples in (2, 161):  # 160 leaps of 25 turnovers
        net = turned(system, 10_000, samples=samples)[:, 0]
        assert net.mean() == pytest.approx(J[0], rel=0.01)  # S falls by .7 %
        assert abs(fano(net) - C[0, 0] / J[0]) < WITHIN


def test_the_same_enzyme_simulated_step_by_step() -> None:
    """1,000 compartments, exactly: the interval of its Fano factor at a false-alarm rate of 1e-3 holds the leaps' one."""
    text = equal(held=True)
    system = driblet.loads(text)
    run = driblet.run(system, replicates=1000, duration=SPAN + 1.0, sample_every=1.0, seed=5, treatment="elementary")
    net = (run.turnovers("r")[:, -1] - run.turnovers("r")[:, 1]).astype(float)  # the first second fills the enzymes
    low, high = chi2.ppf([FALSE_ALARM / 2, 1 - FALSE_ALARM / 2], len(net) - 1) / (len(net) - 1)
    assert low * 0.25 < fano(net) < high * 0.25
    assert fano(net) / high < fano(turned(treated(system, {"e": "lumped"}), 5000, samples=9)[:, 0]) < fano(net) / low


def test_a_slow_inhibitor_makes_turnovers_come_in_bursts() -> None:
    system = lumped(SLOWLY_INHIBITED)
    J, C = predicted(system)
    exact = C[0, 0] / J[0]
    assert exact > 1.5
    n = 20_000
    net = turned(system, n, samples=9)[:, 0]
    assert abs(fano(net) / exact - 1) < norm.isf(FALSE_ALARM / 2) * np.sqrt(2 / n)
    twin = turned(system, n, correlated=False)[:, 0]
    assert abs(fano(twin) / exact - 1) > 5 * norm.isf(FALSE_ALARM / 2) * np.sqrt(2 / n)


@pytest.mark.parametrize("mechanism", ["ordered bi bi", "ping pong bi bi"])
@pytest.mark.parametrize("samples", [2, 33])
def test_two_reactions_of_one_enzyme_turn_over_together(mechanism: str, samples: int) -> None:
    """Means and the covariance matrix along four directions: six tests at 1e-3 / 6. Twin: independent firings."""
    system = lumped(HELD.replace("MECHANISM", mechanism).replace('"1 copies"', '"20 copies"'))
    J, C = predicted(system)
    n = 10_000
    own = _by_activity(system, turned(system, n, samples=samples))
    alpha = FALSE_ALARM / 6
    assert (np.abs(own.mean(axis=0) - J) / np.sqrt(np.diag(C) / n) < norm.isf(alpha / 2)).all()
    low, high = chi2.ppf([alpha / 2, 1 - alpha / 2], n - 1) / (n - 1)
    ratios = []
    for weights in ((1.0, 0.0), (0.0, 1.0), (1.0, 1.0), (1.0, -1.0)):
        w = np.array(weights)
        ratios.append((own @ w).var(ddof=1) / (w @ C @ w))
    assert min(ratios) > low
    assert max(ratios) < high
    twin = _by_activity(system, turned(system, n, correlated=False))
    w = np.array([1.0, 1.0])
    assert not low < (twin @ w).var(ddof=1) / (w @ C @ w) < high


def _by_activity(system: driblet.System, net: Array) -> Array:
    """Turnovers of each activity: an exchange turns one forwards and one backwards."""
    from driblet.system.mechanisms.king_altman import flux_laws

    (enzyme,) = system.enzymes
    turns = np.array([law.turns for law in flux_laws(enzyme)], dtype=float)
    assert net.shape[1] == len(turns)
    return net @ turns
