"""Lifetimes and shares against closed forms, first-passage formulas and master equations with an absorbing set.

Each test calls a right simulator wrong with probability FALSE_ALARM or less; seeds are fixed. The exact probabilities come
from scipy's matrix exponential of generators written out here, not from the project's own reference code.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats
from scipy.linalg import expm

import driblet
from driblet.requirements import judge_on_grid
from driblet.shares import shares
from driblet_analysis.lifetime import lifetimes
from tests.physics.support import FALSE_ALARM, ONE_COPY_PER_MOLAR

Matrix = NDArray[np.float64]
REPLICATES = 2000


def text(species: dict[str, str], reactions: dict[str, str], requirements: dict[str, str], duration: str) -> str:
    return "\n".join(
        [
            '[conditions]\ntemperature = "25 degC"',
            f'[compartments.drop]\nvolume = "{ONE_COPY_PER_MOLAR}"',
            "[species]",
            *(f'{name} = "{value}"' for name, value in species.items()),
            *(f"[reactions.{name}]\n{body}" for name, body in reactions.items()),
            *(f"[requirements.{name}]\n{body}" for name, body in requirements.items()),
            f'[run]\nduration = "{duration}"\nsample_every = "{duration}"',
        ]
    )


def run(file: str, seed: int, **how: object) -> driblet.Run:
    return driblet.run(driblet.loads(file), replicates=REPLICATES, seed=seed, **how)  # type: ignore[arg-type]


DEATH = {"decay": 'equation = "A -> nothing"\none_way = "leaves through a pore"\nforward = "0.5 /s"'}


def last_copy_law(copies: int, needed: int, rate: float) -> Callable[[Matrix], Matrix]:
    """P(fewer than `needed` of `copies` are left at t): each is gone with 1 - exp(-rate t) (binomial, common practice)."""
    return lambda t: np.asarray(stats.binom.cdf(needed - 1, copies, np.exp(-rate * np.asarray(t))))


@pytest.mark.parametrize("needed", [1, 4, 12])
def test_lifetime_of_a_death_process(needed: int) -> None:
    """A >= m holds until the (n - m + 1)th of n exponential lifetimes ends: an order statistic. Kolmogorov-Smirnov."""
    must = {"alive": f'must = "A >= {needed}"\nwhen = "throughout"'}
    times = run(text({"A": "12 copies"}, DEATH, must, "60 s"), 5).outcomes.first_failure_s[:, 0]
    assert not np.isnan(times).any()
    assert stats.kstest(times, last_copy_law(12, needed, 0.5)).pvalue > FALSE_ALARM
    # twin: a rate a fifth too high is told apart by 2000 compartments
    assert stats.kstest(times, last_copy_law(12, needed, 0.6)).pvalue < FALSE_ALARM


def test_quantiles_of_a_lifetime_in_closed_form() -> None:
    """The last of n exponentials: t_p = -ln(1 - p^(1/n)) / k; a run that ends before most have failed censors them, and
    quantiles that it reached keep within their 99.9 % limits."""
    must = {"alive": 'must = "A > 0"\nwhen = "throughout"\nshare = 0.5'}
    result = lifetimes(run(text({"A": "12 copies"}, DEATH, must, "5 s"), 8))
    one = result.each[0]
    assert one.survival is not None
    censored = 1 - (1 - math.exp(-2.5)) ** 12
    assert one.share.share.value == pytest.approx(censored, abs=4 * math.sqrt(censored * (1 - censored) / REPLICATES))
    for quantile in one.quantiles:
        exact = -math.log(1 - quantile.share ** (1 / 12)) / 0.5
        if exact > 5.0:
            assert quantile.time_s.value == np.inf
            continue
        # variance of a sample quantile, p (1 - p) / (n f(t)^2)
        p = quantile.share
        density = 12 * 0.5 * math.exp(-0.5 * exact) * (1 - math.exp(-0.5 * exact)) ** 11
        assert abs(quantile.time_s.value - exact) < 3.3 * math.sqrt(p * (1 - p) / REPLICATES) / density
        assert quantile.time_s.low <= quantile.time_s.value <= quantile.time_s.high


TURN = {"turn": 'equation = "A <=> B"\nK = 2\nforward = "1 /s"'}  # k+ = 1/s, k- = 0.5/s


def turn_rates(copies: int) -> tuple[Matrix, Matrix]:
    """Up (A -> B) and down rates of the number of B."""
    n = np.arange(copies + 1.0)
    return copies - n, 0.5 * n


def mean_passage(up: Matrix, down: Matrix, start: int, target: int) -> float:
    """Mean first passage of a birth-death chain from `start` up to `target`, sum over i of
    sum_(j <= i) 1/up_j prod_(k = j+1..i) down_k/up_k (Karlin & Taylor, A First Course in Stochastic Processes, 1975, ch. 4)."""
    return sum(
        sum(math.prod(down[k] / up[k] for k in range(j + 1, i + 1)) / up[j] for j in range(i + 1))
        for i in range(start, target)
    )


def generator(up: Matrix, down: Matrix) -> Matrix:
    """Q[to, from] of a birth-death chain."""
    Q = np.diag(up[:-1], -1) + np.diag(down[1:], 1)
    return np.asarray(Q - np.diag(Q.sum(axis=0)))


def absorbed(Q: Matrix, start: int, target: int, times: Matrix) -> Matrix:
    """P(the chain has reached `target` from below by t): what has left the states below it."""
    inside = Q[:target, :target]
    return np.array([1.0 - expm(inside * t)[:, start].sum() for t in times])


@pytest.mark.parametrize("target", [6, 10])
def test_first_passage_of_a_birth_death_chain(target: int) -> None:
    must = {"there": f'must = "B >= {target}"\nwhen = "once"'}
    times = run(text({"A": "12 copies", "B": "0 copies"}, TURN, must, "400 s"), 21).outcomes.first_met_s[:, 0]
    up, down = turn_rates(12)
    exact = mean_passage(up, down, 0, target)
    assert abs(times.mean() - exact) < 3.3 * times.std() / math.sqrt(REPLICATES)
    grid = np.linspace(0.0, times.max(), 400)
    law = absorbed(generator(up, down), 0, target, grid)
    assert stats.kstest(times, lambda t: np.interp(t, grid, law)).pvalue > FALSE_ALARM
    wrong = absorbed(generator(1.1 * up, down), 0, target, grid)  # twin
    assert stats.kstest(times, lambda t: np.interp(t, grid, wrong)).pvalue < FALSE_ALARM


TRANSFER = {"transfer": 'equation = "ATP + S <=> ADP + SP"\nK = 4\nforward = "0.05 /M/s"'}
SIX = {"ATP": "6 copies", "S": "6 copies", "ADP": "0 copies", "SP": "0 copies"}


def transfer_generator() -> Matrix:
    """Q of n = SP, 6 + 6 molecules in a volume where one copy is 1 mol/L: k (6 - n)^2 up, k/4 n^2 down."""
    n = np.arange(7.0)
    return generator(0.05 * (6 - n) ** 2, 0.0125 * n**2)


def holds_throughout(least: int, start_s: float, end_s: float) -> float:
    """Exact P(SP >= least all through the span), from none at time zero: the states below are absorbing."""
    Q = transfer_generator()
    at_start = expm(Q * start_s)[:, 0][least:]
    return float((expm(Q[least:, least:] * (end_s - start_s)) @ at_start).sum())


def test_at_twelve_molecules_every_event_equals_the_master_equation_and_a_grid_overstates() -> None:
    """Throughout by event equals the master equation (binomial test). On samples every 10 s excursions go unseen: the share
    is too high, and the same test must tell (twin); it is labelled an upper bound."""
    must = {"held": 'must = "SP >= 3"\nwhen = "throughout"\nduring = ["20 s", "50 s"]\nshare = 0.5'}
    file = text(SIX, TRANSFER, must, "50 s")
    result = run(file, 33, sample_every=10.0)
    exact = holds_throughout(3, 20.0, 50.0)
    assert 0.2 < exact < 0.8
    row = shares(result)[0]
    met = int((result.outcomes.met[:, 0] == 1).sum())
    assert stats.binomtest(met, REPLICATES, exact).pvalue > FALSE_ALARM
    assert row.share.value == met / REPLICATES
    assert (row.looked_at, row.bound) == ("event", "")
    omega = np.full(REPLICATES, result.system.compartment.omega)
    grid = judge_on_grid(result.system, result.system.requirements[0], result.counts, result.time_s, omega)
    on_grid = int(grid.met.sum())
    assert on_grid > met
    assert stats.binomtest(on_grid, REPLICATES, exact).pvalue < FALSE_ALARM
    # the grid never calls failing what held at every event
    assert not ((grid.met[:, 0] == 0) & (result.outcomes.met[:, 0] == 1)).any()


def test_a_share_that_only_samples_can_judge_says_that_it_is_an_upper_bound() -> None:
    """SP^7 is more than the kernel's form takes, so the same condition as SP >= 3 is judged on samples."""
    product = " * ".join(["SP"] * 7)
    must = {
        "held": 'must = "SP >= 3"\nwhen = "throughout"\nduring = ["20 s", "50 s"]',
        "same": f'must = "{product} >= 2187"\nwhen = "throughout"\nduring = ["20 s", "50 s"]',
        "once": f'must = "{product} >= 78125"\nwhen = "once"',
    }
    rows = shares(run(text(SIX, TRANSFER, must, "50 s"), 33, sample_every=10.0))
    assert [r.looked_at for r in rows] == ["event", "grid", "grid"]
    assert [r.bound for r in rows] == ["", "upper bound", "lower bound"]
    assert rows[1].share.value > rows[0].share.value


def test_the_time_a_condition_holds_in_equilibrium() -> None:
    """12 molecules A <=> B with K = 2 from 4 + 8: in the long run B is binomial (12, 2/3), so the time spent at B >= 8 tends
    to P(B >= 8) of the span; compared over compartments, with the start forgotten after 5 relaxation times of 2/3 s."""
    must = {"much": 'must = "B >= 8"\nwhen = "once"\nduring = ["4 s", "14 s"]'}
    outcomes = run(text({"A": "4 copies", "B": "8 copies"}, TURN, must, "14 s"), 13).outcomes
    share = outcomes.time_met_s[:, 0] / 10.0
    exact = float(stats.binom.sf(7, 12, 2 / 3))
    assert abs(share.mean() - exact) < 3.3 * share.std() / math.sqrt(REPLICATES)
    assert abs(share.mean() - float(stats.binom.sf(8, 12, 2 / 3))) > 3.3 * share.std() / math.sqrt(REPLICATES)  # twin


def test_on_average_is_the_average_over_time() -> None:
    """The mean of B over a span of many relaxation times is normal about 8 with variance 2 var tau (T - tau (1 - e^(-T/tau)))
    / T^2, var = 8/3, tau = 2/3 s (integral of the exponential correlation; common practice): half of the compartments lie
    above 8, and Phi says how many above 8.4."""
    must = {
        name: f'must = "B > {level}"\nwhen = "on average"\nduring = ["10 s", "50 s"]'
        for name, level in [("a", 8), ("b", 8.4)]
    }
    met = run(text({"A": "4 copies", "B": "8 copies"}, TURN, must, "50 s"), 17).outcomes.met
    T, tau = 40.0, 2 / 3
    sd = math.sqrt(2 * (8 / 3) * tau * (T - tau * (1 - math.exp(-T / tau))) / T**2)
    for q, level in enumerate((8.0, 8.4)):
        p = float(stats.norm.sf((level - 8.0) / sd))
        # the mean of 60 independent stretches is not quite normal; 0.02 is left for that
        assert abs(met[:, q].mean() - p) < 0.02 + 3.3 * math.sqrt(p * (1 - p) / REPLICATES)
    assert abs(met[:, 1].mean() - 0.5) > 0.1  # twin


def test_censoring_leaves_the_curve_where_it_was() -> None:
    """The same compartments watched for 3 s and for 30 s: up to 3 s the curves are one."""
    must = {"alive": 'must = "A >= 4"\nwhen = "throughout"'}
    long = lifetimes(run(text({"A": "12 copies"}, DEATH, must, "30 s"), 5)).each[0].survival
    short = lifetimes(run(text({"A": "12 copies"}, DEATH, must, "3 s"), 5)).each[0].survival
    assert long is not None
    assert short is not None
    for t in (0.5, 1.5, 2.9):
        np.testing.assert_allclose(short.at(t), long.at(t), rtol=1e-12)
    assert short.quantile(0.9).value == np.inf
