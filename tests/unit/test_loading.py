"""What a replicate starts with: sizes and loads by inversion, against scipy.stats and closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

import driblet
from driblet.loading import poisson_quantile, prepare, volumes
from driblet.quantities import AVOGADRO
from driblet.system import Compartment
from tests.texts import MIXED, SMALL, changed


@given(st.lists(st.floats(1e-12, 1 - 1e-12), min_size=1, max_size=20), st.floats(1e-8, 1e6))
def test_poisson_inversion_is_scipys(p: list[float], mean: float) -> None:
    got = poisson_quantile(np.array(p), np.full(len(p), mean))
    np.testing.assert_array_equal(got, stats.poisson.ppf(p, mean))


@pytest.mark.parametrize("mean", [0.5, 3.0, 41.7, 1e4])
def test_poisson_inversion_just_beside_each_step(mean: float) -> None:
    """u just under and just over F(k): the quantile is the smallest k with F(k) >= u."""
    k = np.arange(max(0, int(mean - 4 * math.sqrt(mean))), int(mean + 4 * math.sqrt(mean)) + 1)
    step = stats.poisson.cdf(k, mean)
    under, over = np.nextafter(step, 0) - 1e-13 * step, step * (1 + 1e-13) + 1e-16
    got_under = poisson_quantile(under, np.full(len(k), mean))
    got_over = poisson_quantile(over, np.full(len(k), mean))
    inside = (under > 0) & (over < 1)
    np.testing.assert_array_equal(got_under[inside], k[inside])
    np.testing.assert_array_equal(got_over[inside], k[inside] + 1)


def test_poisson_of_nothing_and_of_a_great_many() -> None:
    np.testing.assert_array_equal(poisson_quantile(np.array([0.001, 0.999]), np.zeros(2)), [0, 0])
    u = np.array([1e-9, 0.0228, 0.3, 0.5, 0.7, 0.9772, 1 - 1e-9])
    for mean in (1e10, 1e12, 9e15):
        big = poisson_quantile(u, np.full(7, mean))
        np.testing.assert_allclose((big - mean) / math.sqrt(mean), stats.norm.ppf(u), atol=2e-4)
    assert (big == np.rint(big)).all()


def test_both_ways_to_invert_agree_where_they_meet() -> None:
    u = np.linspace(0.001, 0.999, 999)
    exact = stats.poisson.ppf(u, 1.000001e9)
    assert np.abs(poisson_quantile(u, np.full(999, 1.000001e9)) - exact).max() <= 1


def test_a_larger_mean_never_gives_fewer_copies() -> None:
    """Common random numbers: the same uniform number, rising means."""
    means = np.linspace(0, 60, 601)
    for u in (1e-9, 0.1, 0.5, 0.9, 1 - 1e-9):
        assert (np.diff(poisson_quantile(np.full(601, u), means)) >= 0).all()


@pytest.mark.parametrize("cv", [0.05, 0.3, 1.0])
def test_lognormal_volumes_have_their_closed_form_moments(cv: float) -> None:
    """Median m, coefficient of variation cv: sigma^2 = ln(1 + cv^2), mean m exp(sigma^2/2), by a fine quadrature in u."""
    u = (np.arange(400_000) + 0.5) / 400_000
    v = volumes(Compartment("c", 2e-18, cv), u)
    sigma2 = math.log1p(cv**2)
    assert np.median(v) == pytest.approx(2e-18, rel=1e-5)
    assert v.mean() == pytest.approx(2e-18 * math.exp(sigma2 / 2), rel=1e-3)
    assert v.std() / v.mean() == pytest.approx(cv, rel=2e-2)
    reference = stats.lognorm(math.sqrt(sigma2), scale=2e-18)
    np.testing.assert_allclose(v[::1000], reference.ppf(u[::1000]), rtol=1e-12)


def test_a_spread_of_diameters_is_one_of_outer_diameters_less_two_walls() -> None:
    compartment = Compartment("c", math.pi / 6 * (200e-9 - 8e-9) ** 3 * 1000, 0.1, 200e-9, 4e-9)
    u = np.linspace(0.001, 0.999, 999)
    outer = stats.lognorm(math.sqrt(math.log1p(0.01)), scale=200e-9).ppf(u)
    np.testing.assert_allclose(volumes(compartment, u), math.pi / 6 * (outer - 8e-9) ** 3 * 1000, rtol=1e-9)
    assert volumes(compartment, np.array([0.5]))[0] == pytest.approx(compartment.volume_L)


def test_no_vesicle_is_all_wall() -> None:
    compartment = Compartment("c", math.pi / 6 * 6e-9**3 * 1000, 0.1, 14e-9, 4e-9)
    smallest = volumes(compartment, np.array([2.0**-53, 1e-300]))
    assert (smallest >= 0).all()
    assert np.isfinite(smallest).all()


def test_without_a_spread_every_volume_is_the_stated_one() -> None:
    np.testing.assert_array_equal(volumes(Compartment("c", 3e-17), np.array([0.1, 0.9])), [3e-17, 3e-17])


def test_nearest_loading_rounds_the_mean_in_each_compartment() -> None:
    system = driblet.loads(changed(SMALL, ('A = "10 copies"', 'A = "50 uM"')))
    start = prepare(system, 0, range(4))
    assert start.counts[:, 0].tolist() == [round(50e-6 * 1e-16 * AVOGADRO)] * 4
    assert start.counts[:, 1].tolist() == [0] * 4
    np.testing.assert_allclose(start.volume_L, 1e-16)


def test_a_replicate_is_the_same_whoever_prepares_it() -> None:
    system = driblet.loads(MIXED)
    together = prepare(system, 7, range(20))
    for r in (0, 13, 19):
        alone = prepare(system, 7, [r])
        np.testing.assert_array_equal(alone.counts[0], together.counts[r])
        np.testing.assert_array_equal(alone.stream[0], together.stream[r])
        assert alone.omega[0] == together.omega[r]


def test_seeds_keys_and_replicates_all_differ() -> None:
    system = driblet.loads(MIXED)
    streams = np.vstack([prepare(system, seed, range(3), key).stream for seed in (0, 1) for key in (0, 1)])
    assert len(np.unique(streams, axis=0)) == 12
    assert (streams != 0).any(axis=1).all(), "xoshiro256++ must not start from nothing but zeros"


def test_the_stream_does_not_depend_on_what_is_loaded() -> None:
    """A species more, or another load, leaves the random stream of the events as it was."""
    one = prepare(driblet.loads(SMALL), 3, range(5))
    other = prepare(driblet.loads(changed(SMALL, ('B = "0 copies"', 'B = "0 copies"\nZ = "4 mM"'))), 3, range(5))
    np.testing.assert_array_equal(one.stream, other.stream)


def test_loads_and_sizes_of_an_ensemble_follow_their_laws() -> None:
    """Kolmogorov-Smirnov for sizes, chi-square for loads given the size, 4000 replicates; alarm below p = 1e-4 each, so
    the chance of a false alarm is 2e-4, and with this fixed seed it did not happen. The twin with a wrong cv must fail."""
    system = driblet.loads(MIXED)
    start = prepare(system, 5, range(4000))
    outer = (6 * start.volume_L / 1000 / math.pi) ** (1 / 3) + 8e-9
    law = stats.lognorm(math.sqrt(math.log1p(0.1**2)), scale=120e-9)
    assert stats.kstest(outer, law.cdf).pvalue > 1e-4
    wrong = stats.lognorm(math.sqrt(math.log1p(0.13**2)), scale=120e-9)
    assert stats.kstest(outer, wrong.cdf).pvalue < 1e-4

    mean = 60e-6 * start.omega
    v = np.random.default_rng(1).random(4000)
    pit = stats.poisson.cdf(start.counts[:, 0] - 1, mean) + v * stats.poisson.pmf(start.counts[:, 0], mean)
    assert stats.kstest(pit, "uniform").pvalue > 1e-4
    spoilt = stats.poisson.cdf(np.rint(mean) - 1, mean) + v * stats.poisson.pmf(np.rint(mean), mean)
    assert stats.kstest(spoilt, "uniform").pvalue < 1e-4
