"""The vesicle of configs/lumped_vesicle.toml by leaps, against exact events; what is wrong on purpose is exposed by compare.

False-alarm rate of a comparison: 5 % for all its tests together; seeds are fixed.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from numba import njit

import driblet
from driblet import engine_choice
from driblet.engines import leap as leap_module
from driblet.engines import leaps
from driblet.engines.leap_arrays import no_turnover
from driblet.engines.leap_steps import all_propensities, clipped
from driblet.network import Network
from driblet.turnover_arrays import TurnoverTable
from driblet.volume import at_volume
from driblet_analysis.compare import Comparison, Way, compare
from tests.physics.leap_problems import stiff_dimerising
from tests.physics.test_leaps_turnovers import equal
from tests.unit.leap_cases import HEAD, leaps_that_need_not_pay, lumped

FILE = Path(__file__).parents[2] / "configs" / "lumped_vesicle.toml"
SMALL = 0.02e-15
EXACT, LEAPS = Way("lumped", "exact"), Way("lumped", "leap")


@pytest.fixture(autouse=True)
def _leaps() -> Iterator[None]:
    with leaps_that_need_not_pay():
        yield


def compared(
    system: driblet.System, ways: tuple[Way, Way], replicates: int, duration_s: float, seed: int = 11
) -> Comparison:
    result = compare(system, ways, replicates, duration_s, seed=seed)
    assert result.runs[1].provenance["engine_taken"] == "leap"
    return result


def test_an_hour_in_which_the_sugar_runs_out() -> None:
    """0.02 fL, one sugar kinase: 60,000 molecules of sugar are down to the last ones within the hour."""
    result = compared(at_volume(driblet.load(FILE), SMALL), (EXACT, LEAPS), 200, 3600.0)
    assert result.verdict == "consistent", result.reason
    sugar = result.runs[1].counts[:, :, result.runs[1].species.index("sugar")]
    assert sugar[:, 0].min() > 60_000
    assert sugar[:, -1].max() < 30
    assert sugar[:, -1].std() > 0


def test_minutes_of_the_vesicle_itself() -> None:
    """1 fL, four minutes, 40 compartments."""
    result = compared(driblet.load(FILE), (EXACT, LEAPS), 40, 240.0)
    assert result.verdict == "consistent", result.reason


@pytest.mark.long
def test_the_hour_of_four_hundred_vesicles() -> None:
    result = compared(driblet.load(FILE), (EXACT, LEAPS), 400, 3600.0)
    assert result.verdict == "consistent", result.reason


@pytest.mark.long
def test_three_thousand_small_ones_against_every_step() -> None:
    """0.02 fL, 20 s, against exact events of every binding and release."""
    result = compared(at_volume(driblet.load(FILE), SMALL), (Way("elementary", "exact"), LEAPS), 3000, 20.0)
    assert result.verdict == "consistent", result.reason


def test_twin_turnovers_taken_for_independent(monkeypatch: pytest.MonkeyPatch) -> None:
    """An enzyme of four equal steps against itself step by step: the spread of what it has made tells. Means are not asked:
    some twenty molecules on their way are made by the time a lumped enzyme counts them as used."""
    system = driblet.loads(equal(held=False, volume="0.2 fL"))
    ways = (Way("elementary", "exact"), LEAPS)
    right = compared(system, ways, 300, 4.0)
    assert min(row.p_variance for row in right.rows) > 0.05
    none = TurnoverTable(no_turnover(), np.zeros(0), np.zeros(0))
    monkeypatch.setattr(TurnoverTable, "of", lambda system, network: none)
    wrong = compared(system, ways, 300, 4.0)
    assert wrong.verdict == "inconsistent"
    assert min(row.p_variance for row in wrong.rows) < 1e-12


FEW_LIGANDS = (
    HEAD
    + """S = "8 copies"
P = "0 copies"
X = "50000 copies"
Y = "50000 copies"
[reactions.r]
equation = "S <=> P"
K = 1
[reactions.leaping]
equation = "X <=> Y"
K = 1
forward = "0.2 /s"
[enzymes.e]
amount = "1 copies"
catalyses = "r"
mechanism = "uni uni"
kcat = "3 /s"
KM = { S = "1 M" }
"""
)


def test_twin_denominators_at_the_state_of_each_channel(monkeypatch: pytest.MonkeyPatch) -> None:
    """Eight ligands with a K_M of one copy, beside many molecules that leap."""
    system = lumped(FEW_LIGANDS)
    right = compared(system, (EXACT, LEAPS), 4000, 4.0)
    assert right.verdict == "consistent", right.reason
    made = engine_choice.leap_engine

    def own_state(system: driblet.System, network: Network, tolerance: float, stiffness: float):  # type: ignore[no-untyped-def]
        engine, table = made(system, network, tolerance, stiffness)
        engine.network = engine.network._replace(node_offset=0.0 * engine.network.node_offset)
        return engine, table

    monkeypatch.setattr(engine_choice, "leap_engine", own_state)
    monkeypatch.setattr("driblet.packs.leap_engine", own_state)
    wrong = compared(system, (EXACT, LEAPS), 4000, 4.0)
    assert wrong.verdict == "inconsistent"


@njit(error_model="numpy")
def _explicit(  # type: ignore[no-untyped-def]
    newton, shrinks, step, reactant, offset, rows, start, parent, node, less, constants, counts, scratch, forward, backward,
    critical, change_start, change_species, change_amount, there, back, more, fewer, matrix, lu, pivot, end, end_w, end_pace,
    rest, fix,
):  # fmt: skip
    """leap_steps.correct without any correction: rates of the start alone."""
    fix[:] = 0.0
    for i in range(end.size):
        end[i] = counts[i]
    for k in range(fix.size):
        for c in range(change_start[k], change_start[k + 1]):
            end[change_species[c]] += change_amount[c] * (more[k] - fewer[k])
    for i in range(end.size):
        end[i] = clipped(end[i])
    all_propensities(reactant, offset, rows, start, parent, node, less, constants, end, scratch, end_w, end_pace)


@pytest.mark.long
def test_twin_explicit_steps_beyond_their_bound(monkeypatch: pytest.MonkeyPatch) -> None:
    """The kernel compiled anew around no correction: leaps of five relaxation times."""
    system = stiff_dimerising()
    ways = (Way(engine="exact"), Way(engine="leap"))
    right = compared(system, ways, 100, 0.05)
    assert right.verdict == "consistent", right.reason
    monkeypatch.setattr(leaps, "correct", _explicit)
    kernel = njit(nogil=True, error_model="numpy")(leaps.advance_leaps.py_func)
    monkeypatch.setattr(leap_module, "advance_leaps", kernel)
    wrong = compared(system, ways, 100, 0.05)
    assert wrong.verdict == "inconsistent"
