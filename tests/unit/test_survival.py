"""Shares, survival curves and contrasts against published worked examples and scipy.stats."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from driblet.survival import contrast, kaplan_meier, trials_to_tell, wilson

# remission of acute leukaemia in weeks, + censored: Freireich et al., Blood 21:699 (1963), as in Kalbfleisch & Prentice
# (1980), Cox & Oakes (1984) and most handbooks since
TREATED = "6 6 6 6+ 7 9+ 10 10+ 11+ 13 16 17+ 19+ 20+ 22 23 25+ 32+ 32+ 34+ 35+"
PLACEBO = "1 1 2 2 3 4 4 5 5 8 8 8 8 11 11 12 12 15 17 22 23"


def remission(text: str) -> tuple[np.ndarray, np.ndarray]:
    words = text.split()
    return np.array([float(w.rstrip("+")) for w in words]), np.array([not w.endswith("+") for w in words])


# Newcombe, Stat. Med. 17:857 (1998), Table I, method 3 (score without continuity correction)
@pytest.mark.parametrize(
    ("successes", "trials", "low", "high"),
    [(81, 263, 0.2553, 0.3662), (15, 148, 0.0624, 0.1605), (0, 20, 0.0, 0.1611), (1, 29, 0.0061, 0.1718)],
)
def test_wilson_interval_of_newcombes_table(successes: int, trials: int, low: float, high: float) -> None:
    share = wilson(successes, trials)
    assert share.value == successes / trials
    assert share.low == pytest.approx(low, abs=5e-5)
    assert share.high == pytest.approx(high, abs=5e-5)


@given(st.integers(0, 300), st.integers(1, 300), st.sampled_from([0.8, 0.95, 0.99]))
def test_wilson_interval_equals_scipy(successes: int, trials: int, level: float) -> None:
    successes = min(successes, trials)
    expected = stats.binomtest(successes, trials).proportion_ci(level, method="wilson")
    got = wilson(successes, trials, level)
    assert got.low == pytest.approx(expected.low, abs=1e-12)
    assert got.high == pytest.approx(expected.high, abs=1e-12)


def test_no_trials_say_nothing() -> None:
    assert wilson(0, 0)[1:] == (0.0, 1.0)


@pytest.mark.parametrize(("share", "asked"), [(0.96, 0.95), (0.9, 0.95), (0.5, 0.6)])
def test_as_many_trials_as_said_part_a_share_from_the_asked_one(share: float, asked: float) -> None:
    n = trials_to_tell(share, asked)
    assert n is not None
    more, fewer = wilson(round(share * 4 * n), 4 * n), wilson(round(share * n / 4), n // 4)
    assert not more.low <= asked <= more.high
    assert fewer.low <= asked <= fewer.high
    assert trials_to_tell(0.95, 0.95) is None
    assert trials_to_tell(0.99, 1.0) is None


def test_kaplan_meier_of_the_treated() -> None:
    """Survival and Greenwood's standard errors as tabulated in the handbooks (Collett, Modelling Survival Data in Medical
    Research, and others; from memory)."""
    curve = kaplan_meier(*remission(TREATED))
    np.testing.assert_array_equal(curve.time, [6, 7, 10, 13, 16, 22, 23])
    np.testing.assert_array_equal(curve.at_risk, [21, 17, 15, 12, 11, 7, 6])
    np.testing.assert_array_equal(curve.failures, [3, 1, 1, 1, 1, 1, 1])
    np.testing.assert_allclose(curve.survival, [0.857, 0.807, 0.753, 0.690, 0.627, 0.538, 0.448], atol=5e-4)
    errors = [0.0764, 0.0869, 0.0963, 0.1068, 0.1141, 0.1282, 0.1346]
    np.testing.assert_allclose(curve.standard_error, errors, atol=5e-5)
    assert curve.quantile(0.5).value == 23.0
    assert curve.quantile(0.9).value == np.inf
    assert curve.at(5.9).value == 1.0
    assert curve.at(6.0).value == pytest.approx(18 / 21)


def test_kaplan_meier_of_the_placebo_group() -> None:
    """Median 8 weeks; its limits 4 and 11 by the log-log curve are those statistics programs print (from memory)."""
    median = kaplan_meier(*remission(PLACEBO)).quantile(0.5)
    assert median == (8.0, 4.0, 11.0)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.integers(1, 30), st.booleans()), min_size=2, max_size=60))
def test_kaplan_meier_equals_scipy(rows: list[tuple[int, bool]]) -> None:
    time = np.array([float(t) for t, _ in rows])
    failed = np.array([f for _, f in rows])
    if not failed.any():
        assert len(kaplan_meier(time, failed).time) == 0
        return
    with np.errstate(all="ignore"), warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # scipy's, about limits once nothing survives
        reference = stats.ecdf(stats.CensoredData(uncensored=time[failed], right=time[~failed])).sf
        limits = reference.confidence_interval(0.95, method="log-log")
    curve = kaplan_meier(time, failed)
    np.testing.assert_allclose(curve.survival, reference.evaluate(curve.time), rtol=1e-12, atol=1e-14)
    inside = (curve.survival > 0) & (curve.survival < 1)
    np.testing.assert_allclose(curve.low[inside], limits.low.evaluate(curve.time)[inside], rtol=1e-9)
    np.testing.assert_allclose(curve.high[inside], limits.high.evaluate(curve.time)[inside], rtol=1e-9)


def test_limits_of_survival_cover_the_truth_about_as_often_as_stated() -> None:
    """95 % limits of an exponential's survival at its median, half of the subjects censored at random: coverage over 400
    samples of 80 within three binomial standard errors (3.3 %) of the stated one; half of the width misses it (twin)."""
    generator = np.random.default_rng(5)
    inside = narrow = 0
    for _ in range(400):
        life, censor = generator.exponential(1.0, 80), generator.exponential(1.0, 80)
        share = kaplan_meier(np.minimum(life, censor), life <= censor).at(np.log(2.0))
        inside += share.low <= 0.5 <= share.high
        middle = (share.low + share.high) / 2
        narrow += abs(0.5 - middle) <= (share.high - share.low) / 4
    assert abs(inside / 400 - 0.95) < 0.033
    assert abs(narrow / 400 - 0.95) > 0.033


@settings(max_examples=60, deadline=None)
@given(st.lists(st.integers(0, 9), min_size=2, max_size=40), st.lists(st.integers(0, 9), min_size=2, max_size=40))
def test_contrast_equals_scipys_mann_whitney(first: list[int], second: list[int]) -> None:
    if len({*first, *second}) == 1:
        assert contrast(first, second) == (0.0, 1.0)
        return
    reference = stats.mannwhitneyu(first, second, method="asymptotic", use_continuity=False)
    got = contrast(first, second)
    assert got.effect == pytest.approx(2 * reference.statistic / (len(first) * len(second)) - 1, abs=1e-12)
    assert got.p == pytest.approx(reference.pvalue, rel=1e-9)


def test_contrast_at_its_ends() -> None:
    assert contrast([5, 6], [1, 2, 3]).effect == 1.0
    assert contrast([1, 2], [5, 6, 7]).effect == -1.0
    assert np.isnan(contrast([], [1.0]).effect)
