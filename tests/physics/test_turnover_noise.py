"""Mean and covariance of an enzyme's turnovers: against matrices, against eigenvalues, against long exact simulations.

For random mechanisms no formula is published; they are held against a second, independent computation: second-order
perturbation of the largest eigenvalue of the tilted generator, and numerical differences of that eigenvalue. For one
irreversible cycle the Fano factor of Kou, Cherayil, Min, English & Xie (J. Phys. Chem. B 109:19068, 2005, from memory) holds.
"""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.stats import chi2, norm

import driblet
from driblet.system.mechanisms import Activity, ActivitySpec, Assembler, Enzyme, EnzymeState, EnzymeStep
from driblet.system.mechanisms.steady_state import generator as step_rates
from driblet.system.mechanisms.turnover_noise import turnover_noise
from tests.physics.support import FALSE_ALARM

Array = NDArray[np.float64]
MECHANISMS_TESTED = 200


def random_mechanism(rng: np.random.Generator) -> tuple[Enzyme, dict[str, float]]:
    """A connected graph of 3 to 7 states, constants over four decades, one to three counted steps, closed or not."""
    n = int(rng.integers(3, 8))
    pairs = [(int(rng.integers(i)), i) for i in range(1, n)]
    others = [(i, j) for i in range(n) for j in range(i + 1, n) if (i, j) not in pairs]
    extra = int(rng.integers(1, min(len(others), 4) + 1)) if others else 0
    pairs += [others[k] for k in rng.choice(len(others), extra, replace=False)] if extra else []
    steps = []
    for k, (i, j) in enumerate(pairs):
        ligand = f"L{rng.integers(4)}" if rng.random() < 0.6 else None
        binds, releases = (ligand, None) if rng.random() < 0.5 else (None, ligand)
        source, target = (i, j) if rng.random() < 0.5 else (j, i)
        a, b = 10 ** rng.uniform(-2, 2, 2)
        steps.append(EnzymeStep(f"E.s{k}", source, target, binds, releases, float(a), float(b), "random"))
    counted = rng.choice(len(steps), min(len(steps), int(rng.integers(1, 4))), replace=False)
    activities = tuple(
        Activity(f"r{a}", "random", int(rng.choice([-1, 1])), (), (), None, (), (), (), (), int(k))
        for a, k in enumerate(counted)
    )
    enzyme = Enzyme(
        "E", "E", tuple(EnzymeState("E" if i == 0 else f"E.s{i}") for i in range(n)), tuple(steps), activities
    )
    return enzyme, {f"L{i}": float(10 ** rng.uniform(-1, 1)) for i in range(4)}


def tilted(enzyme: Enzyme, c: dict[str, float], chi: Array) -> Array:
    """M(chi), [to, from]: the generator with exp(+-chi) on counted steps."""
    rates = step_rates(enzyme, c)
    M = rates.T - np.diag(rates.sum(axis=1))
    for a, activity in enumerate(enzyme.activities):
        step = enzyme.steps[activity.counted]
        c_on = c[step.binds] if step.binds else 1.0
        c_off = c[step.releases] if step.releases else 1.0
        tilt = activity.direction * chi[a]
        M[step.target, step.source] += step.forward * c_on * np.expm1(tilt)
        M[step.source, step.target] += step.backward * c_off * np.expm1(-tilt)
    return M


def by_perturbation(enzyme: Enzyme, c: dict[str, float]) -> tuple[Array, Array]:
    """J and C from derivatives of the tilted generator and the pseudo-inverse of the plain one."""
    count = len(enzyme.activities)
    zero = np.zeros(count)
    M = tilted(enzyme, c, zero)
    one = np.ones(len(M))
    p = np.linalg.lstsq(np.vstack([M, one]), np.append(np.zeros(len(M)), 1.0), rcond=None)[0]
    first, second = [], []
    for activity in enzyme.activities:
        step = enzyme.steps[activity.counted]
        there = step.forward * (c[step.binds] if step.binds else 1.0)
        back = step.backward * (c[step.releases] if step.releases else 1.0)
        D, DD = np.zeros_like(M), np.zeros_like(M)
        D[step.target, step.source], D[step.source, step.target] = (
            activity.direction * there,
            -activity.direction * back,
        )
        DD[step.target, step.source], DD[step.source, step.target] = there, back
        first.append(D)
        second.append(DD)
    J = np.array([one @ D @ p for D in first])
    y = [
        np.linalg.lstsq(np.vstack([M, one]), np.append(J[a] * p - first[a] @ p, 0.0), rcond=None)[0]
        for a in range(count)
    ]
    C = np.array([[one @ first[a] @ y[b] + one @ first[b] @ y[a] for b in range(count)] for a in range(count)])
    return J, C + np.diag([one @ DD @ p for DD in second])


def test_two_hundred_random_mechanisms() -> None:
    rng = np.random.default_rng(17)
    smallest = np.inf
    for _ in range(MECHANISMS_TESTED):
        enzyme, c = random_mechanism(rng)
        noise = turnover_noise(enzyme)
        x = noise.ligands(c)
        J, C = by_perturbation(enzyme, c)
        fastest = float(step_rates(enzyme, c).max())  # the matrices lose as much to rounding as this is large
        np.testing.assert_allclose(noise.rates(x), J, rtol=1e-8, atol=1e-12 * fastest)
        np.testing.assert_allclose(noise.covariances(x), C, rtol=1e-7, atol=1e-11 * fastest)
        smallest = min(smallest, float(np.linalg.eigvalsh(noise.covariances(x))[0] / fastest))
    assert smallest > -1e-14  # positive semi-definite, every one


def test_relaxation_and_curvature_are_those_of_the_largest_eigenvalue() -> None:
    rng = np.random.default_rng(23)
    for _ in range(10):
        enzyme, c = random_mechanism(rng)
        noise = turnover_noise(enzyme)
        x = noise.ligands(c)
        M = tilted(enzyme, c, np.zeros(len(enzyme.activities)))
        coefficients = np.poly(M)[::-1]  # of det(x - M), constant first
        assert noise.relaxation_s(x) == pytest.approx(coefficients[2] / coefficients[1], rel=1e-6)

        def largest(chi: float, a: int, enzyme: Enzyme = enzyme, c: dict[str, float] = c) -> float:
            tilt = np.zeros(len(enzyme.activities))
            tilt[a] = chi
            return float(np.max(np.linalg.eigvals(tilted(enzyme, c, tilt)).real))

        h = 1e-3
        for a in range(len(enzyme.activities)):
            up, down = largest(h, a), largest(-h, a)
            C = noise.covariances(x)[a, a]
            assert noise.rates(x)[a] == pytest.approx((up - down) / (2 * h), rel=1e-4, abs=1e-4 * C + 1e-12)
            assert pytest.approx((up + down) / h**2, rel=1e-3, abs=1e-7) == C


def test_one_irreversible_cycle_has_the_published_fano_factor() -> None:
    k1, k_off, k2 = 2e6, 30.0, 60.0
    steps = {"binds_S": (k1, k_off), "r": (k2, k2 / 1e12), "releases_P": (1e9, 1e-3)}
    assembler = Assembler("E", 2.5)
    K = float(np.prod([a / b for a, b in steps.values()]))
    assembler.add(ActivitySpec("r", "uni uni", 1, ("S",), ("P",), K, steps=steps))
    noise = turnover_noise(assembler.enzyme("E"))
    for S in (1e-6, 2e-5, 1e-3):
        x = noise.ligands({"S": S, "P": 1e-12})
        total = k1 * S + k_off + k2
        fano = (total**2 - 2 * k1 * k2 * S) / total**2
        assert noise.covariances(x)[0, 0] / noise.rates(x)[0] == pytest.approx(fano, rel=1e-5)


HELD = """
[conditions]
temperature = "30 degC"
[compartments.drop]
volume = "1 fL"
[species]
A = { amount = "0.4 mM", held = true }
B = { amount = "1 mM", held = true }
P = { amount = "0.2 mM", held = true }
Q = { amount = "0.1 mM", held = true }
Q2 = { amount = "0.1 mM", held = true }
B2 = { amount = "0.3 mM", held = true }
[reactions.r]
equation = "A + B <=> P + Q"
K = 30
[reactions.s]
equation = "A + B2 <=> P + Q2"
K = 8
[enzymes.e]
amount = "1 copies"
catalyses = "r"
mechanism = "MECHANISM"
kcat = "40 /s"
KM = { A = "0.2 mM", B = "0.5 mM" }
[enzymes.e.also.s]
mechanism = "MECHANISM"
kcat = "25 /s"
KM = { B2 = "0.4 mM" }
"""


@pytest.mark.parametrize("mechanism", ["ordered bi bi", "ping pong bi bi"])
def test_long_exact_simulations_have_these_means_and_covariances(mechanism: str) -> None:
    """Net turnovers of two reactions of one enzyme in 8 s, 3000 copies simulated step by step.

    False-alarm rate: six tests at 1e-3 / 6 each. The twin takes firings for independent of each other, and fails.
    """
    system = driblet.loads(HELD.replace("MECHANISM", mechanism))
    span, replicates = 8.0, 3000
    run = driblet.run(system, replicates=replicates, duration=2 * span, sample_every=span, seed=3)
    turned = np.stack([run.turnovers(name) for name in ("r", "s")], axis=-1)
    n = (turned[:, 2] - turned[:, 1]).astype(float)  # the first half lets the enzyme come to its steady state
    (enzyme,) = system.enzymes
    noise = turnover_noise(enzyme)
    x = noise.ligands(dict(system.held_concentrations()))
    J, C = noise.rates(x), noise.covariances(x)
    alpha = FALSE_ALARM / 6
    se = np.sqrt(np.diag(C) * span / replicates)
    assert (np.abs(n.mean(axis=0) - J * span) / se < norm.isf(alpha / 2)).all()
    for weights in ((1.0, 0.0), (0.0, 1.0), (1.0, 1.0), (1.0, -1.0)):
        w = np.array(weights)
        ratio = (n @ w).var(ddof=1) / (w @ C @ w * span)
        low, high = chi2.ppf([alpha / 2, 1 - alpha / 2], replicates - 1) / (replicates - 1)
        assert low < ratio < high
    independent = np.diag(np.diag(C))
    w = np.array([1.0, 1.0])
    assert not low < (n @ w).var(ddof=1) / (w @ independent @ w * span) < high
