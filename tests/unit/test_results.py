"""A Run: lazy reading, readouts, closing, what it says of itself."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import driblet
from driblet import readouts
from driblet.results import Run
from tests.texts import MIXED, SMALL, changed


def test_nothing_is_read_before_it_is_asked_for(tmp_path: Path) -> None:
    path = tmp_path / "run.h5"
    driblet.run(driblet.loads(MIXED), path, replicates=3).close()
    with Run(path) as run:
        assert not {"counts", "firings_forward", "volume_L", "system"} & set(vars(run))
        assert run.counts is run.counts
        assert "counts" in vars(run)


def test_axes_and_types(tmp_path: Path) -> None:
    run = driblet.run(driblet.loads(MIXED), replicates=3)
    assert run.counts.shape == (3, 9, 5)
    assert run.firings_forward.shape == run.firings_backward.shape == (3, 9, 6)
    assert run.volume_L.shape == run.events.shape == run.end_reason.shape == (3,)
    assert run.counts.dtype == run.firings_forward.dtype == np.int64
    np.testing.assert_allclose(run.time_s, np.arange(9) * 0.5)
    assert run.time_s[-1] == 4.0
    assert run.replicate.tolist() == [0, 1, 2]
    assert run.complete
    assert run.reactions[-1] == "leak"
    assert not run.firings_backward[..., 5].any(), "one way"


def test_firings_and_counts_agree_through_the_stoichiometry() -> None:
    run = driblet.run(driblet.loads(MIXED))
    change = driblet.Network.of(run.system).stoichiometry
    net = run.firings_forward - run.firings_backward
    np.testing.assert_array_equal(run.counts, run.counts[:, :1] + net @ change.T)
    np.testing.assert_array_equal(run.events, (run.firings_forward + run.firings_backward)[:, -1].sum(axis=1))
    assert not net[:, 0].any()


def test_readouts_are_those_of_the_file_over_the_recorded_counts() -> None:
    run = driblet.run(driblet.loads(MIXED))
    assert run.readout_units == {"pairs": "1", "level": "M", "pull": "kJ/mol"}
    for one in run.system.readouts:
        omega = run.volume_L[:, None] * 6.02214076e23
        expected = readouts.evaluate(run.system, one.expression, run.counts, omega)
        np.testing.assert_allclose(run.readout(one.name), expected, rtol=1e-12)
    with pytest.raises(KeyError, match="known: pairs, level, pull"):
        run.readout("nonsense")


def test_an_undefined_readout_is_nan_in_the_file(tmp_path: Path) -> None:
    text = changed(SMALL, ('part = "B / (A + B)"', 'ratio = "A / B"'))
    run = driblet.run(driblet.loads(text), tmp_path / "run.h5")
    assert np.isnan(run.readout("ratio")[:, 0]).all()


def test_the_system_comes_back_from_the_file(tmp_path: Path) -> None:
    system = driblet.loads(MIXED)
    run = driblet.run(system, tmp_path / "run.h5", replicates=1)
    assert run.system.reactions == system.reactions
    assert run.system.species == system.species
    assert run.system.title == "every kind of channel"


def test_a_closed_run_says_so(tmp_path: Path) -> None:
    run = driblet.run(driblet.loads(SMALL), tmp_path / "run.h5")
    counts = run.counts
    run.close()
    assert run.counts is counts, "what was read stays"
    with pytest.raises(ValueError, match="has been closed"):
        _ = run.firings_forward
    run.close()


def test_representations(tmp_path: Path) -> None:
    text = changed(
        SMALL,
        ('title = "small"', 'title = "<b>& co</b>"'),
        ('A = "10 copies"', 'A = { amount = "10 copies", label = "<A>" }'),
    )
    system = driblet.loads(text)
    run = driblet.run(system)
    assert "3 replicates" in repr(run)
    assert "5 times to 2 s" in repr(run)
    assert "<table>" in run._repr_html_()
    assert "<b>& co" not in system._repr_html_()
    assert "2 species" in repr(system)


def test_a_run_of_one_time_and_one_replicate() -> None:
    run = driblet.run(driblet.loads(SMALL), replicates=1, duration=1.0, sample_every=1.0)
    assert run.time_s.tolist() == [0.0, 1.0]
    assert run.counts.shape == (1, 2, 2)


@pytest.mark.parametrize(
    ("duration", "every", "times"),
    [
        (1.0, 0.3, [0, 0.3, 0.6, 0.9, 1.0]),
        (1.0, 0.1, [0, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0]),
        (0.3, 0.1, [0, 0.1, 0.2, 0.3]),
        (2.0, 2.0, [0, 2.0]),
        (2.0, 1.9999, [0, 1.9999, 2.0]),
        (1e-9, 5e-10, [0, 5e-10, 1e-9]),
    ],
)
def test_the_recording_grid_ends_at_the_end(duration: float, every: float, times: list[float]) -> None:
    run = driblet.run(driblet.loads(SMALL), replicates=1, duration=duration, sample_every=every)
    np.testing.assert_allclose(run.time_s, times, rtol=1e-12)
    assert run.time_s[-1] == duration


def test_progress_is_told_and_rises() -> None:
    seen: list[driblet.Progress] = []
    run = driblet.run(driblet.loads(MIXED), replicates=30, on_progress=seen.append)
    fractions = [p.fraction for p in seen]
    assert fractions == sorted(fractions)
    assert fractions[-1] == 1.0
    assert seen[-1].finished == seen[-1].replicates == 30
    assert seen[-1].events == run.events.sum()


def test_a_fault_in_the_callers_progress_is_the_callers(tmp_path: Path) -> None:
    class MineError(Exception):
        pass

    def report(_: driblet.Progress) -> None:
        raise MineError

    with pytest.raises(MineError):
        driblet.run(driblet.loads(SMALL), tmp_path / "run.h5", on_progress=report)
    assert not (tmp_path / "run.h5").exists()


def test_xarray_names_and_title() -> None:
    pytest.importorskip("xarray")
    data = driblet.run(driblet.loads(MIXED), replicates=2).to_xarray()
    assert data.attrs["title"] == "every kind of channel"
    assert float(data.time[-1]) == 4.0
    assert data.counts.sel(species="E").values.tolist() == [[5] * 9] * 2
    assert data.time.attrs["units"] == "s"


def test_the_package_knows_its_own_names() -> None:
    for name in driblet.__all__:
        assert getattr(driblet, name) is not None
    assert set(dir(driblet)) == set(driblet.__all__)
    with pytest.raises(AttributeError, match="no attribute"):
        _ = driblet.nonsense
