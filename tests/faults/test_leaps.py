"""What is asked of leaps that they cannot do: one line each, with the reason; what cannot be leaped runs as exact and says so."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import driblet
from driblet.commands.main import main
from tests.texts import SMALL, changed
from tests.unit.leap_cases import HEAD, leap, leaps_that_need_not_pay

ASKED = changed(SMALL, ("seed = 1", 'seed = 1\nengine = "leap"'))
MANY = changed(ASKED, ('A = "10 copies"', 'A = "100000 copies"'))


@pytest.mark.parametrize("value", ["0", "-0.03", "0.9", "1e-5", '"3 %"', "nan", "true"])
def test_a_tolerance_out_of_range(value: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "system.toml"
    path.write_text(changed(ASKED, ("seed = 1", f"seed = 1\nleap_tolerance = {value}")))
    assert main(["run", str(path), "-o", str(tmp_path / "run.h5")]) == 2
    told = capsys.readouterr().err.strip()
    assert told.count("\n") == 0
    assert "run.leap_tolerance: " in told
    assert "0.001" in told
    assert "0.3" in told
    assert not (tmp_path / "run.h5").exists()


@pytest.mark.parametrize("value", [0.0, -1.0, 0.5, float("nan"), True, "small"])
def test_a_tolerance_given_to_run(value: object) -> None:
    with pytest.raises(driblet.InputError, match=r"leap_tolerance: .* will not do: a number from 0.001 to 0.3"):
        driblet.run(driblet.loads(ASKED), leap_tolerance=value)  # type: ignore[arg-type]


def test_events_cannot_be_recorded_of_leaps(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "system.toml"
    path.write_text(changed(MANY, ("seed = 1", 'seed = 1\nrecord = "events"')))
    assert main(["run", str(path), "-o", str(tmp_path / "run.h5")]) == 2
    told = capsys.readouterr().err
    assert 'run.record: a leap has no single events to record: take engine = "exact"' in told
    assert not (tmp_path / "run.h5").exists()
    auto = driblet.run(driblet.loads(path.read_text()), engine="auto", replicates=1, duration=0.01, sample_every=0.01)
    assert auto.provenance["engine_taken"] == "exact"
    assert "single events are recorded" in str(auto.provenance["engine_why"])


def test_twelve_molecules_run_as_exact_and_say_so(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "twelve.toml"
    path.write_text(changed(ASKED, ('A = "10 copies"', 'A = "12 copies"')))
    assert main(["run", str(path), "-o", str(tmp_path / "run.h5")]) == 0
    with driblet.Run(tmp_path / "run.h5") as run:
        assert run.provenance["engine"] == "leap"
        assert run.provenance["engine_taken"] == "exact"
        assert "no leap would have held 10 of its" in str(run.provenance["engine_why"])
        exact = driblet.run(driblet.loads(path.read_text()), engine="exact")
        np.testing.assert_array_equal(run.counts, exact.counts)
    assert "no leap would have held 10 of its" in " ".join(capsys.readouterr().out.split())


def test_nothing_reacts_and_nothing_fires() -> None:
    inert = driblet.loads(changed(ASKED, ('A = "10 copies"', 'A = "0 copies"')))
    run = driblet.run(inert)
    assert run.provenance["engine_taken"] == "exact"
    assert "nothing fired" in str(run.provenance["engine_why"])
    assert not run.counts.any()


def test_a_state_that_freezes_is_held() -> None:
    text = HEAD + (
        'A = "50000 copies"\nB = "0 copies"\n[reactions]\n'
        'gone = { equation = "A -> B", one_way = "of this test", forward = "10 /s" }\n'
    )
    made = leap(driblet.loads(text), np.linspace(0.0, 8.0, 9), 4)
    assert (made.samples.counts[:, -1] == [0, 50000]).all()
    assert (made.samples.firings[:, -1, 0] == 50000).all()
    assert (made.state.reason == 2).all()  # nothing can fire any more
    assert (made.work[:, 0] > 10).all()


def test_a_system_that_grows_without_bound_is_stopped() -> None:
    text = HEAD + (
        'A = "1000 copies"\n[reactions]\n'
        'grow = { equation = "A -> 2 A", one_way = "of this test", forward = "10 /s" }\n'
        '[run]\nduration = "10 s"\nsample_every = "0.5 s"\nreplicates = 2\nengine = "leap"\n'
    )
    with leaps_that_need_not_pay(), pytest.raises(driblet.InputError, match=r"species\.A: a count passed 2\^53"):
        driblet.run(driblet.loads(text))


def test_a_supply_without_bound_is_stopped() -> None:
    """Nothing limits the length of a leap here: one of them passes what a count can hold."""
    text = HEAD + (
        'A = "0 copies"\n[reactions]\n'
        'supply = { equation = "nothing -> A", one_way = "of this test", forward = "1e16 M/s" }\n'
        '[run]\nduration = "10 s"\nsample_every = "5 s"\nreplicates = 2\nengine = "leap"\n'
    )
    with leaps_that_need_not_pay(), pytest.raises(driblet.InputError, match=r"species\.A: a count passed 2\^53"):
        driblet.run(driblet.loads(text))


def test_an_engine_that_is_none(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "system.toml"
    path.write_text(changed(SMALL, ("seed = 1", 'seed = 1\nengine = "leaps"')))
    assert main(["run", str(path)]) == 2
    assert 'run.engine: "leaps" is not an engine: "exact", "leap" or "auto" is' in capsys.readouterr().err
