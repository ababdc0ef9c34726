"""Lumped enzymes against exact simulation step by step, on the system of configs/lumped_vesicle.toml in 0.02 fL."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2

import driblet
from driblet.volume import at_volume
from driblet_analysis.compare import Comparison, Way, compare

FILE = Path(__file__).parents[2] / "configs" / "lumped_vesicle.toml"
VOLUME = 0.02e-15


def compared(replicates: int, duration_s: float, text: str = "") -> Comparison:
    system = driblet.loads(text) if text else driblet.load(FILE)
    return compare(at_volume(system, VOLUME), (Way("elementary"), Way("lumped")), replicates, duration_s, seed=11)


def test_nothing_shows_in_two_hundred_compartments() -> None:
    """False-alarm rate: 5 % for all tests together; the seed is fixed."""
    result = compared(200, 4.0)
    assert result.verdict == "consistent", result.reason
    assert result.events[0] > 150 * result.events[1]


@pytest.mark.long
def test_nothing_shows_in_three_thousand_compartments() -> None:
    """Means, spreads and distributions at ten times, tested together at 5 % after Holm's correction."""
    result = compared(3000, 20.0)
    assert result.verdict == "consistent", result.reason
    assert max(abs(row.t_mean) for row in result.rows) < 4.0
    for row in result.turnovers:  # exact firing knows nothing of regular turnovers: its variance is larger by that much
        assert row.predicted is not None
    tagging = next(row for row in result.turnovers if row.reaction == "tagging")
    assert tagging.predicted is not None
    expected = tagging.predicted[1] / tagging.predicted[0]
    low, high = chi2.ppf([0.0005, 0.9995], 2999) / 2999
    assert low / high < tagging.fano[1] / tagging.fano[0] / expected < high / low


@pytest.mark.long
def test_twin_binding_taken_for_an_equilibrium_is_far_off() -> None:
    """The usual short cut, as an enzyme whose binding is 10,000 times faster: creatine kinase is then four times too fast."""
    system = at_volume(driblet.load(FILE), VOLUME)
    exact = driblet.run(
        system, treatment="elementary", duration=2.0, sample_every=2.0, replicates=100, statistics=False
    )
    text = FILE.read_text()
    for step in ("binds_ADP ", "binds_PCr_with_ADP ", "releases_creatine_with_ATP ", "releases_ATP "):
        line = next(line for line in text.split("\n") if line.startswith(step))
        faster = line
        for number in ("1e7", "1e6", "1e3", "3e3", "1.5e4", "5e3"):
            faster = faster.replace(f'"{number} ', f'"{float(number) * 1e4:g} ')
        text = text.replace(line, faster)
    quick = driblet.run(
        at_volume(driblet.loads(text), VOLUME), duration=2.0, sample_every=2.0, replicates=100, statistics=False
    )
    assert np.mean(quick.turnovers("buffer")[:, -1]) > 2.0 * np.mean(exact.turnovers("buffer")[:, -1])
