"""A sweep's table against exact laws: every point must hold the numbers of its own values, with independent streams.

An isomerisation A <=> B of N molecules is binomial at equilibrium, B with p = K/(1 + K); scipy.stats is the reference.
False-alarm rate 1e-3 a test, fixed seeds.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from driblet_analysis.sweep import collect, make_plan, read_table, work_locally
from driblet_analysis.sweep.table import Table
from tests.physics.support import FALSE_ALARM
from tests.sweep_texts import write_sweep
from tests.texts import SMALL, changed

COPIES, REPLICATES = 30, 60
BASE = (
    changed(
        SMALL,
        ('A = "10 copies"', f'A = "{COPIES} copies"'),
        ('forward = "1 /s"', 'forward = "10 /s"'),
        ('sample_every = "0.5 s"', 'sample_every = "0.02 s"'),
    )
    + """
[requirements.many]
must = "B >= 15"
when = "at end"
share = 0.5
"""
)
SWEEP = f"""
system = "base.toml"
replicates = {REPLICATES}
[axes]
"reactions.turn.K" = {{ from = 0.25, to = 4, points = 40, spacing = "log" }}
"""


@pytest.fixture(scope="module")
def table(tmp_path_factory: pytest.TempPathFactory) -> Table:
    folder = tmp_path_factory.mktemp("sweep")
    make_plan(write_sweep(folder, SWEEP, BASE), folder / "sweep")
    assert work_locally(folder / "sweep", workers=1).failed == 0
    collect(folder / "sweep", folder / "t.h5")
    return read_table(folder / "t.h5")


def p_of_end_means(table: Table, shift: int = 0) -> float:
    """Chi-square of the mean B at the end over points; with a shift the rows are held against their neighbours' values."""
    K = np.roll(table.values["reactions.turn.K"], shift)
    law = stats.binom(COPIES, K / (1 + K))
    z = (table.values["B.end_mean"] - law.mean()) / (law.std() / np.sqrt(REPLICATES))
    return float(stats.chi2.sf(np.sum(z**2), len(z)))


def test_every_point_has_the_law_of_its_own_values(table: Table) -> None:
    assert p_of_end_means(table) > FALSE_ALARM


def test_rows_mixed_up_would_be_seen(table: Table) -> None:
    assert p_of_end_means(table, shift=1) < 1e-6


def test_shares_of_requirements_are_binomial(table: Table) -> None:
    K = table.values["reactions.turn.K"]
    expected = stats.binom(COPIES, K / (1 + K)).sf(14)
    met = np.rint(table.values["many.share"] * REPLICATES)
    z = (met - REPLICATES * expected) / np.sqrt(REPLICATES * expected * (1 - expected))
    inner = (expected > 0.1) & (expected < 0.9)
    assert inner.sum() >= 8
    assert stats.chi2.sf(np.sum(z[inner] ** 2), inner.sum()) > FALSE_ALARM
    covered = (table.values["many.share_low"] <= expected) & (expected <= table.values["many.share_high"])
    # Wilson's interval at 95 %: of 40 at least 32 with a chance beyond 1 - 1e-3
    assert covered.sum() >= 32


def test_standard_errors_are_those_of_the_means(table: Table) -> None:
    """Time averages over the second half: their deviations from the exact mean are as large as their standard errors say."""
    K = table.values["reactions.turn.K"]
    t = (table.values["B.mean"] - COPIES * K / (1 + K)) / table.values["B.se"]
    # the square of t with n - 1 degrees of freedom has mean n'/(n' - 2) and a known spread; 40 of them
    n = REPLICATES - 1
    mean, variance = stats.f(1, n).stats("mv")
    assert abs(np.mean(t**2) - mean) / np.sqrt(variance / len(t)) < stats.norm.isf(FALSE_ALARM / 2)


def test_points_have_streams_of_their_own_unless_shared(tmp_path: Path) -> None:
    """Two loads 5 % apart, thirty seeds: shared streams take most of the noise out of their difference."""
    base = changed(BASE, ("seed = 1", 'seed = 1\nloading = "poisson"'), ('duration = "2 s"', 'duration = "0.02 s"'))
    seeds = '"run.seed" = { from = 1, to = 30, points = 30 }'
    text = f'system = "base.toml"\nreplicates = 20\n[axes]\n"species.A" = ["40 copies", "42 copies"]\n{seeds}\n'
    spread = {}
    for name, more in (("own", ""), ("shared", "shared_streams = true\n")):
        folder = tmp_path / name
        make_plan(write_sweep(folder, more + text, base), folder / "sweep")
        work_locally(folder / "sweep", workers=1)
        collect(folder / "sweep", folder / "t.h5")
        values = read_table(folder / "t.h5").values
        total = values["A.mean"] + values["B.mean"]
        difference = total[values["species.A"] == 42] - total[values["species.A"] == 40]
        spread[name] = np.var(difference, ddof=1)
        assert abs(difference.mean() - 2) < 4 * np.sqrt(spread[name] / 30)
    assert stats.f.sf(spread["own"] / spread["shared"], 29, 29) < 1e-6
    # own streams: the variance of the difference of two independent means of 20 Poisson numbers
    expected = 82 / 20
    assert stats.chi2.sf(29 * spread["own"] / expected, 29) > FALSE_ALARM / 2
    assert stats.chi2.cdf(29 * spread["own"] / expected, 29) > FALSE_ALARM / 2
