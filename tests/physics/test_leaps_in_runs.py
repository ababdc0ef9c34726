"""Runs by leaps: requirements, early stops, additions, held species, sizes and loads, summaries, and the check of energies.

Closed forms where there are any, else the exact engine, with Holm's correction at 5 %; seeds are fixed.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy import stats

import driblet
from driblet.commands.main import main
from driblet.engine_choice import LONGEST_LEAP_IN_TIME
from driblet.outcomes import LOOKED_AT, Outcomes
from driblet.shares import shares
from driblet.statistics import holm
from driblet_analysis.compare import FALSE_ALARM_RATE, differences, quantities
from tests.physics.support import FALSE_ALARM
from tests.physics.test_lifetimes import DEATH, last_copy_law, text
from tests.texts import changed
from tests.unit.leap_cases import leaps_that_need_not_pay, lumped
from tests.unit.test_leap_bits import LOADED
from tests.unit.test_lumped_kernels import TEXT

COPIES = 5000
# an eighth of the volume and of the molecules
EIGHTH = changed(
    LOADED, ('"2 um"', '"1 um"'), ('"20000 copies"', '"2500 copies"'), ('"9000 copies"', '"1100 copies"'),
    ('"5000 copies"', '"600 copies"'),
)  # fmt: skip


def leaped(system: driblet.System, replicates: int, **how: object) -> driblet.Run:
    with leaps_that_need_not_pay():
        run = driblet.run(system, replicates=replicates, engine="leap", **how)  # type: ignore[arg-type]
    assert run.provenance["engine_taken"] == "leap", run.provenance["engine_why"]
    return run


def lifetimes(needed: int, replicates: int) -> np.ndarray:
    must = {"alive": f'must = "A >= {needed}"\nwhen = "throughout"'}
    run = leaped(driblet.loads(text({"A": f"{COPIES} copies"}, DEATH, must, "60 s")), replicates, seed=5)
    assert run.leaping["longest_leap_in_relaxation_times"].max() <= LONGEST_LEAP_IN_TIME
    (row,) = shares(run)
    assert LOOKED_AT[row.looked_at] == "leap ends"
    times = run.outcomes.first_failure_s[:, 0]
    assert not np.isnan(times).any()
    return times


@pytest.mark.parametrize("needed", [4000, 2500, 500])
def test_quantiles_of_a_lifetime_to_half_a_leap(needed: int) -> None:
    """A >= m fails at an order statistic of 5,000 exponential lifetimes (binomial, common practice). A moment between two leaps
    is taken for the middle of the leap, so a quantile is known to half a leap beside its standard error, at 1e-3 / 9 each. Twin:
    a rate 4 % off."""
    n = 400
    times = lifetimes(needed, n)
    half = 0.01  # s: in a leap of 0.02 s the rate changes by the tolerance, 1 %

    def misses(rate: float) -> list[bool]:
        law, grid = last_copy_law(COPIES, needed, rate), np.linspace(0.0, 20.0, 400_001)
        p = law(grid)
        found = []
        for share in (0.1, 0.5, 0.9):
            exact = float(np.interp(share, p, grid))
            density = float(np.interp(exact + 1e-3, grid, p) - np.interp(exact - 1e-3, grid, p)) / 2e-3
            error = np.sqrt(share * (1 - share) / n) / density
            found.append(abs(np.quantile(times, share) - exact) > half + stats.norm.isf(FALSE_ALARM / 18) * error)
        return found

    assert not any(misses(0.5))
    assert all(misses(0.52))


@pytest.mark.parametrize("needed", [20, 1])
def test_lifetime_of_the_last_molecules(needed: int) -> None:
    """Single events then: Kolmogorov-Smirnov at 1e-3. Twin: a rate a tenth off."""
    times = lifetimes(needed, 500)
    assert stats.kstest(times, last_copy_law(COPIES, needed, 0.5)).pvalue > FALSE_ALARM
    assert stats.kstest(times, last_copy_law(COPIES, needed, 0.55)).pvalue < FALSE_ALARM


MANY = {"A": "5 copies", "B": "6 copies", "C": "0 copies", "X": "100000 copies", "Y": "100000 copies"}
BESIDE = {
    **DEATH,
    "turn": 'equation = "B <=> C"\nK = 2\nforward = "1 /s"',
    "leaping": 'equation = "X <=> Y"\nK = 1\nforward = "0.02 /s"',
}


def test_few_molecules_beside_many_that_leap() -> None:
    """Five molecules that leave and six that turn over, in leaps that would be seconds long without them: lifetime of the last
    by Kolmogorov-Smirnov, time spent as any molecule, share of time with k copies of C against the binomial law; 1e-3 each."""
    must = {"alive": 'must = "A >= 1"\nwhen = "throughout"'}
    run = leaped(driblet.loads(text(MANY, BESIDE, must, "60 s")), 1000, seed=6, record="summary", burn_in=20.0)
    assert run.leaping["critical_events"].mean() > 80
    times = run.outcomes.first_failure_s[:, 0]
    times = np.where(np.isnan(times), 60.0, times)
    assert stats.kstest(times, last_copy_law(5, 1, 0.5)).pvalue > FALSE_ALARM
    assert stats.kstest(times, last_copy_law(5, 1, 0.58)).pvalue < FALSE_ALARM
    sums = run.sums
    assert sums is not None
    lived = sums.count_time[:, :, 0].sum(axis=1)
    assert abs(lived.mean() - 10.0) < stats.norm.isf(FALSE_ALARM / 2) * np.sqrt(5 * 4.0 / len(lived))
    share = sums.occupancy_time[:, 2, :7] / 40.0
    z = (share.mean(axis=0) - stats.binom.pmf(np.arange(7), 6, 2 / 3)) / (share.std(axis=0) / np.sqrt(len(share)))
    assert np.abs(z[1:]).max() < stats.norm.isf(FALSE_ALARM / 12)  # no copy at all is too rare for a normal law


def test_a_replicate_stops_when_decided() -> None:
    must = {"alive": 'must = "A >= 2500"\nwhen = "throughout"'}
    system = driblet.loads(text({"A": f"{COPIES} copies"}, DEATH, must, "60 s") + '\n[readouts]\nhalf = "A / 2"')
    full, short = leaped(system, 50, seed=2), leaped(system, 50, seed=2, stop_when_decided=True)
    np.testing.assert_array_equal(short.outcomes.first_failure_s, full.outcomes.first_failure_s)
    np.testing.assert_array_equal(short.outcomes.met, full.outcomes.met)
    assert set(short.end_reason.tolist()) == {4}
    assert (short.counts[:, -1, 0] < 2500).all()
    assert (short.counts[:, -1, 0] > 2300).all()  # the state of that moment is held
    assert short.events.sum() < 0.6 * full.events.sum()


def against_exact(system: driblet.System, replicates: int, **how: object) -> tuple[float, driblet.Run, driblet.Run]:
    exact = driblet.run(system, replicates=replicates, engine="exact", **how)  # type: ignore[arg-type]
    other = leaped(system, replicates, key=1, **how)
    return min(r.smallest_p for r in differences(quantities(exact), quantities(other), exact.time_s)), exact, other


def test_held_species_sizes_loads_and_readouts() -> None:
    """Every kind of channel, a held species, vesicles of random size and load: the loads are those of the exact engine."""
    system = driblet.loads(EIGHTH)
    p, exact, other = against_exact(system, 150, seed=3, leap_tolerance=0.03)
    assert p > FALSE_ALARM_RATE
    assert (exact.volume_L != other.volume_L).any()  # another key, other compartments
    same = leaped(system, 20, seed=3)
    np.testing.assert_array_equal(same.volume_L, exact.volume_L[:20])
    np.testing.assert_array_equal(same.counts[:, 0], exact.counts[:20, 0])
    assert not (same.counts[:, -1] == exact.counts[:20, -1]).all()


ASKED = """
[requirements.steady]
must = "A > 3.6 * B"
when = "throughout"
averaged_over = "0.4 s"
during = ["0.5 s", "4 s"]
share = 0.5
[requirements.level]
must = "C > 400"
when = "on average"
share = 0.5
[requirements.once]
must = "C > 620"
when = "once"
share = 0.5
[requirements.last]
must = "C > 650"
when = "at end"
share = 0.5
"""


def test_shares_and_times_of_requirements_of_every_kind() -> None:
    """200 compartments each: shares by Fisher's exact test, times by Welch's t, Holm at 5 % over all. Twin: two requirements
    exchanged."""
    system = driblet.loads(EIGHTH.replace("[run]", ASKED + "[run]"))
    exact = driblet.run(system, replicates=200, engine="exact", seed=5).outcomes
    other = leaped(system, 200, seed=5, key=1).outcomes

    def smallest_p(first: Outcomes, second: Outcomes, columns: list[int]) -> float:
        p = []
        for q, c in enumerate(columns):
            table = [[int((o.met[:, k] == v).sum()) for v in (0, 1)] for o, k in ((first, q), (second, c))]
            p.append(float(stats.fisher_exact(table).pvalue))
            a, b = first.time_met_s[:, q], second.time_met_s[:, c]
            if a.std() + b.std() > 0:
                p.append(float(stats.ttest_ind(a, b, equal_var=False).pvalue))
        return float(holm(np.array(p)).min())

    shares_met = (exact.met == 1).mean(axis=0)
    assert ((shares_met > 0.1) & (shares_met < 0.98)).sum() >= 3
    assert smallest_p(exact, other, [0, 1, 2, 3]) > FALSE_ALARM_RATE
    assert smallest_p(exact, other, [3, 1, 2, 0]) < FALSE_ALARM_RATE


ADDED = """
[additions.pulse]
at = "0.7 s"
species = "B"
amount = "2 mM"
loading = "poisson"
[additions.second]
at = "1.2 s"
species = "C"
amount = "1 mM"
"""


def test_additions() -> None:
    """In the middle of a stretch between samples, poured into enzymes that are lumped."""
    system = lumped(TEXT.replace("CV", "0").replace("2 aL", "20 aL").replace("[run]", ADDED + "[run]"))
    p, _, other = against_exact(system, 200, seed=3, duration=2.0, sample_every=0.5)
    assert p > FALSE_ALARM_RATE
    plain = lumped(TEXT.replace("CV", "0").replace("2 aL", "20 aL"))
    without = leaped(plain, 200, duration=2.0, sample_every=0.5, seed=3, key=1)
    gained = quantities(other)["total(B)"].mean(axis=0) - quantities(without)["total(B)"].mean(axis=0)
    assert abs(gained[1]) < 100
    assert gained[2] > 10_000


def test_the_time_averages_of_a_summary() -> None:
    """Of every count over the second half: Welch's t over compartments against the exact engine, Holm at 5 %. Twin: averages of
    the first half."""
    system = lumped(TEXT.replace("CV", "0.1").replace("2 aL", "20 aL"))
    means = []
    for engine, key in (("exact", 0), ("leap", 1)):
        with leaps_that_need_not_pay():
            run = driblet.run(
                system, replicates=200, duration=2.0, engine=engine, record="summary", burn_in=1.0, seed=4, key=key
            )
        sums = run.sums
        assert sums is not None
        means.append(sums.count_time / np.diff(sums.edge_s)[:, None])
    assert run.provenance["engine_taken"] == "leap"

    def smallest_p(a: np.ndarray, b: np.ndarray) -> float:
        moving = a.std(axis=0) > 0
        return float(holm(stats.ttest_ind(a[:, moving], b[:, moving], equal_var=False).pvalue).min())

    exact, other = (m[:, 1:].mean(axis=1) for m in means)
    assert smallest_p(exact, other) > FALSE_ALARM_RATE
    assert smallest_p(exact, means[1][:, 0]) < FALSE_ALARM_RATE


CHECKED = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "40 aL"
[species]
A = "1 mM"
B = "0.6 mM"
C = "0 mM"
D = "0.3 mM"
[reactions.bind]
equation = "A + B <=> C"
K = "5e3 /M"
backward = "1 /s"
[reactions.turn]
equation = "C <=> D"
energy = "ENERGY kJ/mol"
FORWARD
CATALYSED
[run]
engine = "leap"
record = "RECORD"
replicates = 60
seed = 3
duration = "90 s"
sample_every = "1 s"
"""
ENZYME = """[enzymes.e]
amount = "30 copies"
catalyses = "turn"
mechanism = "uni uni"
treatment = "lumped"
kcat = "300 /s"
KM = { C = "0.3 mM" }
"""


def checked(energy: str, enzyme: bool, record: str = "trajectories") -> str:
    text = CHECKED.replace("ENERGY", energy).replace("CATALYSED", ENZYME if enzyme else "")
    return text.replace("RECORD", record).replace("FORWARD", "" if enzyme else 'forward = "2 /s"')


@pytest.mark.parametrize("enzyme", [False, True])
@pytest.mark.parametrize("record", ["trajectories", "summary"])
def test_check_on_a_leaped_run(tmp_path: Path, enzyme: bool, record: str, capsys: pytest.CaptureFixture[str]) -> None:
    """Consistent with its energies, which fails by chance for 5 % of seeds; not with one of them 0.2 kJ/mol off."""
    own, other = tmp_path / "own.toml", tmp_path / "other.toml"
    own.write_text(checked("-2", enzyme, record))
    other.write_text(checked("-2.2", enzyme, record))
    run = tmp_path / "run.h5"
    with leaps_that_need_not_pay():
        assert main(["run", str(own), "-o", str(run)]) == 0
    with driblet.Run(run) as read:
        assert read.provenance["engine_taken"] == "leap"
    assert main(["check", str(run)]) == 0, capsys.readouterr().out
    assert main(["check", str(run), "--against", str(other)]) == 1, capsys.readouterr().out


@pytest.mark.long
@pytest.mark.parametrize("enzyme", [False, True])
def test_the_check_is_wrong_as_rarely_on_leaped_runs(enzyme: bool) -> None:
    """Called inconsistent in at most 5 % of 200 runs: binomial at 1e-3."""
    from driblet_analysis.run_check import check_run

    system = driblet.loads(checked("-2", enzyme))
    verdicts = [check_run(leaped(system, 60, seed=s)).verdict for s in range(200)]
    assert verdicts.count("inconsistent") <= stats.binom.isf(FALSE_ALARM, 200, FALSE_ALARM_RATE)
