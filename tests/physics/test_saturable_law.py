"""Saturable laws without a mechanism: the published rate law, exact equilibrium at count level, and faults of its table.

Liebermeister, Uhlendorf & Klipp, Bioinformatics 26:1528 (2010), the common modular law, from memory; Michaelis and Menten's
and Haldane's relations as its limits.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

import driblet
from driblet.network import Network
from driblet.treatments import with_treatments
from driblet_analysis.audit import audit_facts
from driblet_analysis.run_check import check_run
from tests.physics.support import ONE_COPY_PER_MOLAR
from tests.physics.test_lumped_enzymes import distance

TEXT = """
title = "Saturable"
[conditions]
temperature = "30 degC"
[compartments.v]
volume = "VOLUME"
[species]
A = "6 copies"
B = "5 copies"
P = "1 copies"
Q = "0 copies"
[reactions.r]
equation = "A + B <=> P + Q"
K = 3
[reactions.s]
equation = "A <=> P"
K = 3
forward = "0.05 /s"
[enzymes.e]
law = "saturable"
amount = "2 copies"
catalyses = "r"
kcat = "10 /s"
KM = { A = "2 M", B = "3 M", P = "1 M", Q = "0.5 M" }
[run]
duration = "2 s"
"""
AMOUNTS = '[species]\nA = "6 copies"'


def text(volume: str = ONE_COPY_PER_MOLAR, **changes: str) -> str:
    out = TEXT.replace("VOLUME", volume)
    for old, new in changes.items():
        assert f"\n{old} = " in out
        lines = [new if line.startswith(f"{old} = ") else line for line in out.split("\n")]
        out = "\n".join(lines)
    return out


def modular(c: dict[str, float], K: dict[str, float], kcat: float, K_eq: float) -> float:
    there, back = c["A"] / K["A"] * c["B"] / K["B"], c["P"] * c["Q"] / K_eq / (K["A"] * K["B"])
    below = (1 + c["A"] / K["A"]) * (1 + c["B"] / K["B"]) + (1 + c["P"] / K["P"]) * (1 + c["Q"] / K["Q"]) - 1
    return kcat * (there - back) / below


def macroscopic(system: driblet.System, c: dict[str, float], copies: float = 2.0) -> float:
    network = Network.of(system)
    omega = 1e13
    n = np.array([copies if s.enzyme else c[s.name] * omega for s in system.free_species])
    w = network.propensities(n, network.rates(np.array([omega]))[0])
    r = network.reactions.index("e.r")
    return float(w[2 * r] - w[2 * r + 1])


def test_rates_are_the_published_law() -> None:
    system = driblet.loads(text())
    K = {"A": 2.0, "B": 3.0, "P": 1.0, "Q": 0.5}
    rng = np.random.default_rng(4)
    for _ in range(20):
        c = dict(zip("ABPQ", 10 ** rng.uniform(-2, 2, 4), strict=True))
        assert macroscopic(system, c) == pytest.approx(2 * modular(c, K, 10.0, 3.0), rel=1e-9)


def test_measured_backward_it_is_the_law_read_backward() -> None:
    forward = driblet.loads(text())
    backward = driblet.loads(text(kcat='kcat = "4 /s"\ndirection = "backward"'))
    K = {"A": 1.0, "B": 0.5, "P": 2.0, "Q": 3.0}
    c = {"A": 0.7, "B": 2.0, "P": 1.5, "Q": 0.3}
    swapped = {"A": c["P"], "B": c["Q"], "P": c["A"], "Q": c["B"]}
    assert macroscopic(backward, c) == pytest.approx(-2 * modular(swapped, K, 4.0, 1 / 3.0), rel=1e-9)
    assert math.copysign(1, macroscopic(backward, c)) == math.copysign(1, macroscopic(forward, c))


def test_without_product_constants_it_is_michaelis_and_menten() -> None:
    system = driblet.loads(text(KM='KM = { A = "2 M", B = "3 M" }'))
    for a in (0.1, 2.0, 50.0):
        c = {"A": a, "B": 1e6, "P": 1e-9, "Q": 1e-9}
        assert macroscopic(system, c) == pytest.approx(2 * 10.0 * a / (2.0 + a), rel=1e-5)


@pytest.mark.parametrize(
    "changes",
    [
        {},
        {"KM": 'KM = { A = "2 M", B = "3 M" }'},
        {"kcat": 'kcat = "4 /s"\ndirection = "backward"'},
        {"equation": 'equation = "2 A <=> P + Q"', "KM": 'KM = { A = "2 M", P = "1 M", Q = "1 M" }'},
    ],
)
def test_equilibrium_is_exact_at_any_copy_number(changes: dict[str, str]) -> None:
    whole = text(**changes)
    if "equation" in changes:  # the other reaction keeps its own equation
        whole = whole.replace('[reactions.s]\nequation = "2 A <=> P + Q"', '[reactions.s]\nequation = "A <=> P"')
    system = driblet.loads(whole)
    apart, flux = distance(system, Network.of(system))
    assert apart < 1e-12
    assert flux < 1e-12


def test_a_run_and_its_check() -> None:
    whole = (
        text("1 aL", A='A = "60 copies"', B='B = "50 copies"').replace(" M", " uM").replace('"2 copies"', '"4 copies"')
    )
    system = driblet.loads(whole.replace('forward = "0.05 /s"', 'forward = "5 /s"'))
    run = driblet.run(system, duration=300.0, replicates=40, seed=2)
    assert (run.turnovers("r")[:, -1] != 0).any()
    assert check_run(run).verdict == "consistent"
    assert run.treatments == {}
    made, choices = with_treatments(system, "elementary")
    assert choices == ()
    assert made.reactions == system.reactions


def test_audit_shows_it() -> None:
    facts = audit_facts(driblet.loads(text()))
    (enzyme,) = facts["enzymes"]
    assert enzyme["reactions"][0]["mechanism"] == "saturable"
    c = {"A": 6.0, "B": 5.0, "P": 1.0, "Q": 0.0}
    expected = modular(c, {"A": 2.0, "B": 3.0, "P": 1.0, "Q": 0.5}, 10.0, 3.0)
    assert enzyme["reactions"][0]["turnovers_per_s"] == pytest.approx(expected, rel=1e-9)
    assert facts["lumping"] == []


@pytest.mark.parametrize(
    ("changes", "key", "message"),
    [
        ({"law": 'law = "hill"'}, "enzymes.e.law", "saturable"),
        ({"KM": 'KM = { A = "2 M" }'}, "enzymes.e.KM", "the K_M of B is missing"),
        ({"KM": 'KM = { A = "2 M", B = "1 M", X = "1 M" }'}, "enzymes.e.KM.X", '"X" is no ligand of r'),
        ({"kcat": 'label = "E"'}, "enzymes.e.kcat", "one of kcat and activity is needed"),
        ({"catalyses": 'catalyses = "q"'}, "enzymes.e.catalyses", '"q" is not in [reactions]'),
        ({"kcat": 'kcat = "1 /s"\nmechanism = "uni uni"'}, "enzymes.e.mechanism", '"mechanism" is not a key here'),
        ({"kcat": 'kcat = "1 /s"\ntreatment = "elementary"'}, "enzymes.e.treatment", '"treatment" is not a key here'),
        (
            {"equation": 'equation = "3 A <=> P"'},
            "enzymes.e.catalyses",
            "r takes 3 molecules; a saturable law has at most 2",
        ),
    ],
)
def test_faults(changes: dict[str, str], key: str, message: str) -> None:
    whole = text(**changes)
    if "equation" in changes:
        whole = whole.replace('[reactions.s]\nequation = "3 A <=> P"', '[reactions.s]\nequation = "A <=> P"')
        whole = whole.replace("K = 3\n[reactions.s]", 'K = "3 /M^2"\n[reactions.s]')
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(whole)
    assert any(key in line and message in line for line in caught.value.lines()), caught.value.lines()
