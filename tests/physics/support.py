"""Small systems of our own and the tests of distributions that the physics tests share."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

import driblet
from driblet.network import Network

# a volume of 1/N_A litres: one copy is 1 mol/L, so that the constants of a file are constants per molecule
ONE_COPY_PER_MOLAR = "1.6605390671738466e-24 L"
FALSE_ALARM = 1e-3  # of one test on a right simulator; seeds are fixed, so a test that passes once passes always


def system(
    species: Mapping[str, str],
    reactions: Mapping[str, str],
    volume: str = ONE_COPY_PER_MOLAR,
    temperature: str = "25 degC",
    loading: str = "nearest",
) -> driblet.System:
    """A system from TOML values of [species] and inline tables of [reactions]."""
    lines = [
        'title = "test"',
        f'[conditions]\ntemperature = "{temperature}"',
        f'[compartments.drop]\nvolume = "{volume}"',
        "[species]",
        *(f"{name} = {value}" for name, value in species.items()),
        "[reactions]",
        *(f"{name} = {{ {value} }}" for name, value in reactions.items()),
        f'[run]\nloading = "{loading}"',
    ]
    return driblet.loads("\n".join(lines))


def counts_at(one: driblet.System, times_s: NDArray[np.float64], replicates: int, seed: int) -> NDArray[np.int64]:
    """Simulated counts at equally spaced times from 0, int64, shape=(replicates, times, species)."""
    run = driblet.run(
        one, replicates=replicates, duration=float(times_s[-1]), sample_every=float(times_s[1] - times_s[0]), seed=seed
    )
    np.testing.assert_allclose(run.time_s, times_s, rtol=1e-12)
    return run.counts


def chi_square(values: NDArray[np.int64], support: NDArray[np.int64], pmf: NDArray[np.float64]) -> float:
    """p value of independent whole numbers against a law; neighbouring outcomes are pooled to at least 8 expected."""
    support, pmf = np.asarray(support), np.asarray(pmf)
    assert np.isin(values, support).all(), "an impossible count"
    expected = len(values) * pmf
    edges, total = [], 0.0
    for n, e in zip(support, expected, strict=True):
        total += e
        if total >= 8:
            edges.append(n)
            total = 0.0
    groups = np.minimum(np.searchsorted(edges, support), len(edges) - 1)
    seen = np.bincount(np.minimum(np.searchsorted(edges, values), len(edges) - 1), minlength=len(edges))
    return float(stats.chisquare(seen, np.bincount(groups, expected) * (len(values) / expected.sum())).pvalue)


def z_of_mean(values: NDArray[np.int64], mean: float, variance: float) -> float:
    """How many standard errors the mean of independent values lies from `mean`."""
    return float((values.mean() - mean) / np.sqrt(variance / len(values)))


def squares_for_falling_factorials(monkeypatch: pytest.MonkeyPatch) -> None:
    """Break the engine's networks: n^2 where n(n-1) belongs."""
    arrays = Network.arrays.func  # type: ignore[attr-defined]
    monkeypatch.setattr(Network, "arrays", property(lambda self: arrays(self)._replace(offset=0 * arrays(self).offset)))
