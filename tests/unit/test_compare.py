"""Comparisons of treatments: the tests, their false alarms, and what must be seen."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.stats import ks_2samp

import driblet
from driblet.commands.main import main
from driblet.volume import at_volume
from driblet_analysis.compare import Way, compare, differences, kolmogorov_distance

TEXT = """
title = "Buffer"
[conditions]
temperature = "37 degC"
[compartments.vesicle]
volume = { median = "1 fL", cv = 0.1 }
[species]
ATP = "1 mM"
ADP = "0.1 mM"
PCr = "4 mM"
creatine = "3 mM"
[reactions.buffer]
equation = "ADP + PCr <=> creatine + ATP"
K = 15
[enzymes.CK]
amount = "COPIES copies"
catalyses = "buffer"
mechanism = "ordered bi bi"
[enzymes.CK.steps]
binds_ADP = { forward = "2e7 /M/s", backward = "2e3 /s" }
binds_PCr_with_ADP = { forward = "1e7 /M/s", backward = "5e3 /s" }
buffer = { forward = "200 /s" }
releases_creatine_with_ATP = { forward = "1.5e4 /s", backward = "1e7 /M/s" }
releases_ATP = { forward = "5e3 /s", backward = "1e7 /M/s" }
[readouts]
charge = "total(ATP) / (total(ATP) + total(ADP))"
[run]
duration = "1 s"
seed = 2
"""


def system(copies: int) -> driblet.System:
    """In 5 aL: 301 ADP."""
    return at_volume(driblet.loads(TEXT.replace("COPIES", str(copies * 200))), 5e-18)


def test_a_rare_enzyme_agrees_and_fires_far_less() -> None:
    """False-alarm rate: 5 % for all tests of a comparison together."""
    result = compare(system(1), (Way("elementary"), Way("lumped")), 150, 1.0, seed=2)
    assert result.verdict == "consistent"
    assert result.events[0] > 20 * result.events[1]
    assert {row.quantity for row in result.rows} == {
        "total(ATP)",
        "total(ADP)",
        "total(PCr)",
        "total(creatine)",
        "charge",
    }
    (row,) = result.turnovers
    assert row.reaction == "buffer"
    assert row.predicted is not None
    assert "no departure of lumped from elementary in 150 tests over 150 compartments each" in result.reason


def test_twin_an_enzyme_that_holds_a_third_of_its_ligand_is_seen() -> None:
    result = compare(system(100), (Way("elementary"), Way("lumped")), 100, 0.5, seed=2)
    assert result.verdict == "inconsistent"
    assert "is not elementary here" in result.reason


def test_false_alarms_of_the_tests_together() -> None:
    """300 comparisons of equal laws with skewed, discrete and dependent quantities: at most 5 % + 3 standard errors."""
    rng = np.random.default_rng(8)
    alarms = 0
    for _ in range(300):
        a, b = (
            {"n": np.cumsum(rng.poisson(3.0, (60, 11)), axis=1).astype(float), "x": rng.exponential(1.0, (60, 11))}
            for _ in range(2)
        )
        rows = differences(a, b, np.arange(11.0))
        alarms += min(row.smallest_p for row in rows) < 0.05
    assert alarms <= 300 * 0.05 + 3 * np.sqrt(300 * 0.05 * 0.95)


@pytest.mark.parametrize(("shift", "scale"), [(0.35, 1.0), (0.0, 1.35)])
def test_twin_a_shift_or_a_wider_spread_is_seen(shift: float, scale: float) -> None:
    rng = np.random.default_rng(9)
    a, b = {"x": rng.normal(0, 1, (400, 3))}, {"x": rng.normal(shift, scale, (400, 3))}
    assert min(row.smallest_p for row in differences(a, b, np.arange(3.0))) < 0.05


def test_the_distance_is_that_of_scipy() -> None:
    rng = np.random.default_rng(3)
    a, b = rng.poisson(9, 70).astype(float), rng.poisson(11, 90).astype(float)
    assert kolmogorov_distance(a, b) == pytest.approx(float(ks_2samp(a, b).statistic), abs=1e-12)


def test_another_volume_keeps_concentrations_and_an_enzyme() -> None:
    small = at_volume(driblet.loads(TEXT.replace("COPIES", "4")), 1e-17)
    assert small.compartment.cv == 0
    assert small.compartment.volume_L == 1e-17
    copies = {s.name: s.mean_copies(small.compartment.omega) for s in small.species if s.enzyme in (None, s.name)}
    assert copies["ATP"] == pytest.approx(6022.14, rel=1e-4)
    assert copies["CK"] == 1.0


def test_the_command(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = tmp_path / "buffer.toml"
    file.write_text(TEXT.replace("COPIES", "200"))
    common = [str(file), "--volume", "5 aL", "--duration", "0.3 s", "--replicates", "40"]
    assert main(["compare", *common, "-o", str(tmp_path / "c.png")]) == 0
    out = capsys.readouterr().out
    assert out.startswith("consistent: no departure of lumped from elementary")
    assert (tmp_path / "c.png").stat().st_size > 10_000
    assert main(["compare", *common, "--treatments", "lumped,lumped", "--json"]) == 0
    assert '"verdict": "consistent"' in capsys.readouterr().out
    assert main(["compare", *common, "--treatments", "lumped"]) == 2
    assert main(["compare", *common, "--treatments", "lumped,slow"]) == 2
    assert 'treatment: "slow" is not a treatment' in capsys.readouterr().err
    assert main(["compare", str(file), "--volume", "5 s"]) == 2
    file.write_text(TEXT[: TEXT.index("[enzymes.CK]")] + TEXT[TEXT.index("[readouts]") :].replace("COPIES", "1"))
    text = file.read_text().replace("K = 15", 'K = 15\nforward = "1 /M/s"')
    file.write_text(text)
    assert main(["compare", str(file)]) == 2
    assert "enzymes: has none" in capsys.readouterr().err
