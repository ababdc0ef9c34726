"""What an approximate run states of its own error, held against rate equations solved elsewhere."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import driblet
from driblet.error_estimate import ErrorEstimate
from driblet.lumping import treated
from driblet.network import Network
from driblet.system import System
from driblet_analysis.references.rate_equations import solve_rate_equations

CONFIGS = Path(__file__).parents[2] / "configs"
# creatine kinase that holds a tenth of the ADP: lumping it is wrong by that, and must say so
HOLDING = """
[conditions]
temperature = "37 degC"
[compartments.vesicle]
volume = "10 aL"
[species]
ATP = "4 mM"
ADP = "0.06 mM"
PCr = "10 mM"
creatine = "15 mM"
Pi = { amount = "5 mM", held = true }
[reactions.buffer]
equation = "ADP + PCr <=> creatine + ATP"
K = 150
[reactions.load]
equation = "ATP + H2O <=> ADP + Pi"
energy = "-32 kJ/mol"
forward = "0.05 /s"
[enzymes.CK]
amount = "100 copies"
catalyses = "buffer"
mechanism = "ordered bi bi"
binds = ["ADP", "PCr"]
releases = ["creatine", "ATP"]
[enzymes.CK.steps]
binds_ADP = { forward = "2e7 /M/s", backward = "1e3 /s" }
binds_PCr_with_ADP = { forward = "1e6 /M/s", backward = "3e3 /s" }
buffer = { forward = "120 /s" }
releases_creatine_with_ATP = { forward = "1.5e4 /s", backward = "1e6 /M/s" }
releases_ATP = { forward = "5e4 /s", backward = "1e7 /M/s" }
[run]
replicates = 4
duration = "0.5 s"
"""


def _courses(system: System, time_s: np.ndarray) -> np.ndarray:
    """ADP free and bound, by the rate equations of the system step by step."""
    network = Network.of(system)
    omega = system.compartment.omega
    load = [s.mean_copies(omega) for s in system.free_species]
    counts = solve_rate_equations(network, load, omega, time_s)
    column = {s.name: i for i, s in enumerate(system.free_species)}
    total = counts[:, column["ADP"]].copy()
    for s in system.free_species:
        total += dict(s.holds).get("ADP", 0) * counts[:, column[s.name]]
    return np.asarray(total)


def test_what_lumping_neglects_is_stated() -> None:
    system = driblet.loads(HOLDING)
    run = driblet.run(system, treatment="lumped")
    estimate = ErrorEstimate.read(run.provenance)
    assert estimate is not None
    assert estimate.lumping is not None
    assert estimate.leaps is None
    size, share, quantity, time_s = estimate.lumping
    assert quantity in ("ADP", "ATP", "PCr", "creatine")
    steps = _courses(system, np.array([0.0, time_s]))
    lumped = _courses(treated(system, {"CK": "lumped"}), np.array([0.0, time_s]))
    gap = abs(float(lumped[1] - steps[1]))
    assert gap > 1.0
    if quantity in ("ADP", "ATP"):  # one pool, so that both are off by as many copies
        mean = float(steps[1]) if quantity == "ADP" else share and gap / share
        assert share == pytest.approx(gap / mean, rel=1e-3)
    assert size > 0.1
    # the twin: a hundredth of the enzyme, as fast together, holds a hundredth
    rare = HOLDING.replace('"100 copies"', '"1 copies"').replace('"120 /s"', '"12000 /s"')
    small = ErrorEstimate.read(driblet.run(driblet.loads(rare), treatment="lumped").provenance)
    assert small is not None
    assert small.lumping is not None
    assert small.lumping[0] < 0.3 * size


def test_an_exact_run_has_none() -> None:
    run = driblet.run(driblet.loads(HOLDING), duration=0.01)
    assert ErrorEstimate.read(run.provenance) is None
    asked_not = driblet.run(driblet.loads(HOLDING), duration=0.01, treatment="lumped", estimate_error=False)
    assert ErrorEstimate.read(asked_not.provenance) is None


def test_a_coarse_tolerance_states_a_larger_error() -> None:
    system = driblet.load(CONFIGS / "lumped_vesicle.toml")
    found = []
    for tolerance in (0.3, 0.01):
        run = driblet.run(system, replicates=2, engine="leap", leap_tolerance=tolerance, statistics=False)
        estimate = ErrorEstimate.read(run.provenance)
        assert estimate is not None
        assert estimate.leaps is not None
        found.append(estimate.leaps[0])
    # measured: 1.7 and 0.06
    assert found[0] > 0.5 > 0.2 > found[1]


def test_additions_are_in_it() -> None:
    text = HOLDING + '\n[additions.more]\nat = "0.2 s"\nspecies = "PCr"\namount = "5 mM"\n'
    with_addition = ErrorEstimate.read(driblet.run(driblet.loads(text), treatment="lumped").provenance)
    assert with_addition is not None
    assert with_addition.lumping is not None
    assert with_addition.lumping[1] < 0.3


def test_it_reads_what_it_wrote() -> None:
    for one in (
        ErrorEstimate((0.1, 0.2, "ATP", 3.0), None),
        ErrorEstimate(None, (1.0, 0.5, "B", 2.0)),
        ErrorEstimate(None, None, "too long"),
    ):
        assert ErrorEstimate.read(dict(one.provenance())) == one
    assert ErrorEstimate.read({}) is None
