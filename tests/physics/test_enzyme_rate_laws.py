"""Each mechanism's steps against the published steady-state rate equations, and kcat, K_M and Haldane relations.

Rate equations in kinetic constants: W. W. Cleland, Biochim. Biophys. Acta 67:104 (1963), tables I to III, and I. H. Segel,
Enzyme Kinetics (1975), chapters 2, 3, 6 and 9, both from memory. The kinetic constants of the chains are written in
rate constants with the isomerisation of the central complexes kept; they are exact, so the comparison is to rounding.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st

import driblet
from driblet.network import Network
from driblet.system.mechanisms import (
    MECHANISMS,
    ActivitySpec,
    Assembler,
    Enzyme,
    MechanismError,
    measured_constants,
    turnover_rates,
)
from driblet.system.mechanisms.constants import FASTEST, FASTEST_ON
from driblet_analysis.references.rate_equations import right_hand_side

RT = 2.5
BINDING = (1e4, 1e8)  # /M/s
UNIMOLECULAR = (1.0, 1e4)  # /s
FINE = settings(max_examples=60, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.filter_too_much])


def random_constants(keys: list[str], generator: np.random.Generator) -> dict[str, tuple[float, float]]:
    def draw(span: tuple[float, float]) -> float:
        return float(10 ** generator.uniform(*np.log10(span)))

    out = {}
    for key in keys:
        forward = BINDING if key.startswith("binds") else UNIMOLECULAR
        backward = BINDING if key.startswith("releases") else UNIMOLECULAR
        out[key] = (draw(forward), draw(backward))
    return out


def built(mechanism: str, keys: list[str], steps: dict[str, tuple[float, float]]) -> tuple[Enzyme, float]:
    """An enzyme of these very constants, and the K' they mean."""
    bound, released = MECHANISMS[mechanism]
    K = math.prod(steps[key][0] / steps[key][1] for key in keys)
    assembler = Assembler("E", RT)
    assembler.add(ActivitySpec("r", mechanism, 1, ("A", "B")[:bound], ("P", "Q")[:released], K, steps=steps))
    return assembler.enzyme("E"), K


UNI_UNI = ["binds_A", "r", "releases_P"]
UNI_BI = ["binds_A", "r", "releases_P_with_Q", "releases_Q"]
BI_UNI = ["binds_A", "binds_B_with_A", "r", "releases_P"]
BI_BI = ["binds_A", "binds_B_with_A", "r", "releases_P_with_Q", "releases_Q"]
PING_PONG = ["binds_A", "r_first_half", "releases_P_with_A-P", "binds_B_with_A-P", "r", "releases_Q"]


def uni_uni(s: dict[str, tuple[float, float]], K: float, A: float, B: float, P: float, Q: float) -> float:
    (k1, k2), (k3, k4), (k5, _) = (s[key] for key in UNI_UNI)
    V1, V2 = k3 * k5 / (k3 + k4 + k5), k2 * k4 / (k2 + k3 + k4)
    c = k2 * k4 + k2 * k5 + k3 * k5
    Ka = V1 * c / (k1 * k3 * k5)
    return V1 * V2 * (A - P / K) / (V2 * Ka + V2 * A + V1 * P / K)


def ordered_uni_bi(s: dict[str, tuple[float, float]], K: float, A: float, B: float, P: float, Q: float) -> float:
    (k1, k2), (k3, k4), (k5, k6), (k7, k8) = (s[key] for key in UNI_BI)
    D1, D2 = k3 * k5 + k3 * k7 + k4 * k7 + k5 * k7, k2 + k3 + k4
    V1, V2 = k3 * k5 * k7 / D1, k2 * k4 / D2
    c = k2 * k4 + k2 * k5 + k3 * k5
    Ka, Kp, Kq, Kip = V1 * c / (k1 * k3 * k5), V2 * c / (k6 * k2 * k4), V2 / k8, D1 / (k6 * (k3 + k4))
    below = V2 * Ka + V2 * A + V1 * Kq * P / K + V1 * Kp * Q / K + V1 * P * Q / K + V2 * A * P / Kip
    return V1 * V2 * (A - P * Q / K) / below


def ordered_bi_uni(s: dict[str, tuple[float, float]], K: float, A: float, B: float, P: float, Q: float) -> float:
    """The uni bi equation read backward: A is its Q, B its P, P its A."""
    turned = dict(zip(UNI_BI, [s[key][::-1] for key in reversed(BI_UNI)], strict=True))
    return -ordered_uni_bi(turned, 1.0 / K, P, 0.0, B, A)


def ordered_bi_bi(s: dict[str, tuple[float, float]], K: float, A: float, B: float, P: float, Q: float) -> float:
    (k1, k2), (k3, k4), (k5, k6), (k7, k8), (k9, k10) = (s[key] for key in BI_BI)
    D1, D2 = k5 * k7 + k5 * k9 + k6 * k9 + k7 * k9, k2 * k4 + k2 * k5 + k2 * k6 + k4 * k6
    c = k4 * k6 + k4 * k7 + k5 * k7
    V1, V2 = k5 * k7 * k9 / D1, k2 * k4 * k6 / D2
    Ka, Kb, Kp, Kq = V1 / k1, k9 * c / (k3 * D1), k2 * c / (k8 * D2), V2 / k10
    Kia, Kib, Kip, Kiq = k2 / k1, D2 / (k3 * (k5 + k6)), D1 / (k8 * (k5 + k6)), k9 / k10
    below = V2 * Kia * Kb + V2 * Kb * A + V2 * Ka * B + V2 * A * B
    below += V1 * Kq * P / K + V1 * Kp * Q / K + V1 * P * Q / K
    below += V1 * Kq * A * P / (Kia * K) + V2 * Ka * B * Q / Kiq + V2 * A * B * P / Kip + V1 * B * P * Q / (Kib * K)
    return V1 * V2 * (A * B - P * Q / K) / below


def ping_pong_bi_bi(s: dict[str, tuple[float, float]], K: float, A: float, B: float, P: float, Q: float) -> float:
    (k1, k2), (k3, k4), (k5, k6), (k7, k8), (k9, k10), (k11, k12) = (s[key] for key in PING_PONG)
    c, d = k2 * k4 + k2 * k5 + k3 * k5, k8 * k10 + k8 * k11 + k9 * k11
    V1 = 1 / ((k3 + k4 + k5) / (k3 * k5) + (k9 + k10 + k11) / (k9 * k11))
    V2 = 1 / ((k2 + k3 + k4) / (k2 * k4) + (k8 + k9 + k10) / (k8 * k10))
    Ka, Kb = V1 * c / (k1 * k3 * k5), V1 * d / (k7 * k9 * k11)
    Kp, Kq = V2 * c / (k6 * k2 * k4), V2 * d / (k12 * k8 * k10)
    Kia, Kiq = k2 * k4 / (k1 * (k3 + k4)), k9 * k11 / (k12 * (k9 + k10))
    below = V2 * Kb * A + V2 * Ka * B + V2 * A * B + V1 * Kq * P / K + V1 * Kp * Q / K + V1 * P * Q / K
    below += V1 * Kq * A * P / (Kia * K) + V2 * Ka * B * Q / Kiq
    return V1 * V2 * (A * B - P * Q / K) / below


EQUATIONS: dict[str, tuple[list[str], Callable[..., float]]] = {
    "uni uni": (UNI_UNI, uni_uni),
    "ordered uni bi": (UNI_BI, ordered_uni_bi),
    "ordered bi uni": (BI_UNI, ordered_bi_uni),
    "ordered bi bi": (BI_BI, ordered_bi_bi),
    "ping pong bi bi": (PING_PONG, ping_pong_bi_bi),
}


@pytest.mark.parametrize("mechanism", EQUATIONS)
def test_steps_follow_the_published_rate_equation(mechanism: str) -> None:
    keys, equation = EQUATIONS[mechanism]
    generator = np.random.default_rng(7)
    for _ in range(50):
        steps = random_constants(keys, generator)
        enzyme, K = built(mechanism, keys, steps)
        c = dict(zip("ABPQ", 10 ** generator.uniform(-6, -2, 4), strict=True))
        assert turnover_rates(enzyme, c)["r"] == pytest.approx(equation(steps, K, **c), rel=1e-9)


def test_twin_a_rate_equation_with_one_constant_off() -> None:
    generator = np.random.default_rng(7)
    steps = random_constants(BI_BI, generator)
    enzyme, K = built("ordered bi bi", BI_BI, steps)
    wrong = {**steps, "binds_A": (steps["binds_A"][0] * 1.01, steps["binds_A"][1] * 1.01)}
    c = dict.fromkeys("ABPQ", 1e-3)
    assert turnover_rates(enzyme, c)["r"] != pytest.approx(ordered_bi_bi(wrong, K, **c), rel=1e-6)


def test_random_bi_bi_becomes_the_rapid_equilibrium_equation_when_binding_is_fast() -> None:
    """Segel (1975), chapter 6: v = (V1 AB/(a KA KB) - V2 PQ/(b KP KQ)) / (1 + A/KA + B/KB + AB/(a KA KB) + ...)."""
    KA, KB, KP, KQ, a, b, kf, K = 2e-4, 1e-4, 3e-4, 5e-4, 2.5, 0.4, 40.0, 20.0
    kr = kf * b * KP * KQ / (a * KA * KB * K)
    fast = 1e12

    def binding(Kd: float) -> tuple[float, float]:
        return fast, fast * Kd

    def release(Kd: float) -> tuple[float, float]:
        return fast * Kd, fast

    steps = {
        "binds_A": binding(KA), "binds_B": binding(KB), "binds_A_with_B": binding(a * KA), "binds_B_with_A": binding(a * KB),
        "r": (kf, kr),
        "releases_P": release(KP), "releases_Q": release(KQ), "releases_P_with_Q": release(b * KP),
        "releases_Q_with_P": release(b * KQ),
    }  # fmt: skip
    assembler = Assembler("E", RT)
    assembler.add(ActivitySpec("r", "random bi bi", 1, ("A", "B"), ("P", "Q"), K, steps=steps))
    enzyme = assembler.enzyme("E")
    generator = np.random.default_rng(3)
    for _ in range(20):
        A, B, P, Q = 10 ** generator.uniform(-5, -2.5, 4)
        below = 1 + A / KA + B / KB + A * B / (a * KA * KB) + P / KP + Q / KQ + P * Q / (b * KP * KQ)
        v = (kf * A * B / (a * KA * KB) - kr * P * Q / (b * KP * KQ)) / below
        assert turnover_rates(enzyme, {"A": A, "B": B, "P": P, "Q": Q})["r"] == pytest.approx(v, rel=1e-4)


def test_competitive_inhibition() -> None:
    """v = V S / (K_M (1 + I/K_i) + S), Segel (1975), chapter 3."""
    assembler = Assembler("E", RT)
    assembler.add(ActivitySpec("r", "uni uni", 1, ("S",), ("P",), 1e6, 80.0, {"S": 3e-5}))
    assembler.inhibit("I", 2e-6)
    enzyme = assembler.enzyme("E")
    for S in (1e-6, 3e-5, 1e-3):
        for inhibitor in (0.0, 2e-6, 1e-4):
            v = 80.0 * S / (3e-5 * (1 + inhibitor / 2e-6) + S)
            assert turnover_rates(enzyme, {"S": S, "P": 0.0, "I": inhibitor})["r"] == pytest.approx(v, rel=1e-9)


@st.composite
def stated(draw: st.DrawFn) -> tuple[Enzyme, float, dict[str, float], float]:
    mechanism = draw(st.sampled_from(list(MECHANISMS)))
    bound, released = MECHANISMS[mechanism]

    def log_uniform(low: float, high: float) -> float:
        return float(10 ** draw(st.floats(low, high)))

    K, kcat = log_uniform(-4, 8), log_uniform(-1, 3)
    substrates, products = ("A", "B")[:bound], ("P", "Q")[:released]
    KM = {name: log_uniform(-5, -2.5) for name in substrates}
    Kd = {name: log_uniform(-4, -1) for name in products if draw(st.booleans())}
    factor = log_uniform(-1, 1) if mechanism == "random bi bi" else 1.0
    assembler = Assembler("E", RT)
    try:
        assembler.add(ActivitySpec("r", mechanism, 1, substrates, products, K, kcat, KM, Kd, factor))
    except MechanismError:
        assume(False)
    return assembler.enzyme("E"), K, KM, kcat


@FINE
@given(stated())
def test_kcat_and_K_M_from_the_steps_equal_what_is_stated(one: tuple[Enzyme, float, dict[str, float], float]) -> None:
    enzyme, _, KM, kcat = one
    found = measured_constants(enzyme, enzyme.activities[0])
    assert found.kcat_per_s == pytest.approx(kcat, rel=1e-9)
    assert pytest.approx(tuple(KM.values()), rel=1e-9) == found.KM_M


@FINE
@given(stated())
def test_haldane_relation_and_limits(one: tuple[Enzyme, float, dict[str, float], float]) -> None:
    enzyme, K, _, _ = one
    steps, activity = enzyme.steps, enzyme.activities[0]
    if activity.mechanism == "random bi bi":
        names = {step.name.removeprefix("E."): step for step in steps}
        for first, second in (("A", "B"), ("B", "A")):
            for one_off, last in (("P", "Q"), ("Q", "P")):
                path = [
                    names[f"binds_{first}"], names[f"binds_{second}_with_{first}"], names["r"],
                    names[f"releases_{one_off}_with_{last}"], names[f"releases_{last}"],
                ]  # fmt: skip
                assert math.prod(s.forward / s.backward for s in path) == pytest.approx(K, rel=1e-12)
    else:
        assert math.prod(s.forward / s.backward for s in steps) == pytest.approx(K, rel=1e-12)
    for step in steps:
        for value, binds in ((step.forward, step.binds), (step.backward, step.releases)):
            assert 0 < value <= (FASTEST_ON if binds else FASTEST) * (1 + 1e-9)


@pytest.mark.parametrize("mechanism", [m for m in MECHANISMS if m != "ordered bi uni"])
def test_the_largest_kcat_is_told_and_is_the_largest(mechanism: str) -> None:
    """K' = 3e-6 would ask for on-rates beyond diffusion; the message's kcat works and a per mille more does not."""
    bound, released = MECHANISMS[mechanism]
    KM = {"A": 2e-4, "B": 1e-4}

    def make(kcat: float) -> None:
        substrates, products = ("A", "B")[:bound], ("P", "Q")[:released]
        some = {name: KM[name] for name in substrates}
        Assembler("E", RT).add(ActivitySpec("r", mechanism, 1, substrates, products, 3e-6, kcat, some))

    with pytest.raises(MechanismError, match="more than this energy allows") as caught:
        make(2e4)
    largest = caught.value.largest
    assert largest is not None
    make(largest * 0.999)
    with pytest.raises(MechanismError):
        make(largest * 1.001)


def test_products_bind_as_weakly_as_the_limits_allow() -> None:
    """Weaker by a per cent, one limit is broken."""
    spec = ActivitySpec("r", "ordered bi bi", 1, ("A", "B"), ("P", "Q"), 750.0, 120.0, {"A": 2e-4, "B": 1e-4})
    assembler = Assembler("E", RT)
    assembler.add(spec)
    Kd = {s.releases: s.forward / s.backward for s in assembler.steps if s.releases}
    assert Kd["P"] == pytest.approx(Kd["Q"], rel=1e-9)
    weaker = replace(spec, Kd_M={name: value * 1.01 for name, value in Kd.items() if name})
    with pytest.raises(MechanismError, match="more than this energy allows"):
        Assembler("E", RT).add(weaker)


def test_products_hardly_inhibit_by_default() -> None:
    """With a K' of 750 there is room for products that bind at half a molar: 1 mM of one slows the enzyme by under 1 %."""
    assembler = Assembler("E", RT)
    assembler.add(ActivitySpec("r", "ordered bi bi", 1, ("A", "B"), ("P", "Q"), 750.0, 14.0, {"A": 2e-4, "B": 1e-4}))
    enzyme = assembler.enzyme("E")
    here = {"A": 1e-3, "B": 1e-3, "P": 0.0, "Q": 0.0}
    alone = turnover_rates(enzyme, here)["r"]
    for product in "PQ":
        assert 0.99 < turnover_rates(enzyme, {**here, product: 1e-3})["r"] / alone < 1


def test_leading_substrate_defaults_of_an_ordered_mechanism() -> None:
    """k_on of the leading substrate is kcat/K_M (Cleland 1963), and its K_i is its K_M by default."""
    assembler = Assembler("E", RT)
    assembler.add(ActivitySpec("r", "ordered bi bi", 1, ("A", "B"), ("P", "Q"), 750.0, 120.0, {"A": 2e-4, "B": 1e-4}))
    first = assembler.steps[0]
    assert first.forward == pytest.approx(120.0 / 2e-4, rel=1e-12)
    assert first.backward / first.forward == pytest.approx(2e-4, rel=1e-12)


def test_one_species_that_binds_twice() -> None:
    """Adenylate kinase: 2 ADP <=> ATP + AMP; with K_a = K_b the equation is v = V S^2 / (Kia Kb + 2 K S + S^2)."""
    for mechanism in ("ordered bi bi", "random bi bi"):
        assembler = Assembler("adk", RT)
        assembler.add(ActivitySpec("r", mechanism, 1, ("ADP", "ADP"), ("ATP", "AMP"), 1.0, 500.0, {"ADP": 5e-5}))
        enzyme = assembler.enzyme("adk")
        found = measured_constants(enzyme, enzyme.activities[0])
        assert found.kcat_per_s == pytest.approx(500.0, rel=1e-9)
        assert pytest.approx((5e-5, 5e-5), rel=1e-9) == found.KM_M
        assert max(dict(state.holds).get("ADP", 0) for state in enzyme.states) == 2
        if mechanism == "ordered bi bi":
            Kia = enzyme.steps[0].backward / enzyme.steps[0].forward
            for S in (1e-5, 1e-4):
                v = 500.0 * S**2 / (Kia * 5e-5 + 2 * 5e-5 * S + S**2)
                assert turnover_rates(enzyme, {"ADP": S, "ATP": 0.0, "AMP": 0.0})["r"] == pytest.approx(v, rel=1e-9)


TEXT = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "1 fL"
[species]
A = {{ amount = "0.2 mM", held = true }}
B = {{ amount = "0.3 mM", held = true }}
P = {{ amount = "0.1 mM", held = true }}
Q = {{ amount = "0.05 mM", held = true }}
[reactions.r]
equation = "{equation}"
K = "{K}"
[enzymes.E]
amount = "10 nM"
catalyses = "r"
mechanism = "{mechanism}"
kcat = "50 /s"
KM = {{ {KM} }}
"""


@pytest.mark.parametrize("mechanism", MECHANISMS)
def test_the_network_has_the_same_flux_in_the_macroscopic_limit(mechanism: str) -> None:
    """The steady state of the network's own rate equations, ligands held, against the enzyme's generator."""
    bound, released = MECHANISMS[mechanism]
    equation = f"{' + '.join('AB'[:bound])} <=> {' + '.join('PQ'[:released])}"
    order = released - bound
    K = "50" if not order else "50 M" if order > 0 else "5e6 /M"
    KM = ", ".join(f'{name} = "0.1 mM"' for name in "AB"[:bound])
    system = driblet.loads(TEXT.format(equation=equation, K=K, mechanism=mechanism, KM=KM))
    network, omega = Network.of(system), system.compartment.omega
    slope, _ = right_hand_side(network, omega)
    n = len(network.species)
    matrix = np.array([slope(0.0, row) for row in np.eye(n)]).T  # linear in the states: ligands are held
    copies = np.linalg.lstsq(np.vstack([matrix, np.ones(n)]), np.append(np.zeros(n), 1.0), rcond=None)[0]
    rates = network.rates(np.array([omega]))[0]
    speeds = network.propensities(copies, rates)
    r = network.reactions.index("E.r")
    net = speeds[network.channel_index(1)[r]] - speeds[network.channel_index(-1)[r]]
    here = {name: system.held_concentrations()[name] for name in "ABPQ"}
    assert net == pytest.approx(turnover_rates(system.enzymes[0], here)["r"], rel=1e-6)
