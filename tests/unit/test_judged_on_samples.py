"""Run files that kept no outcomes of requirements: judged on their samples, or left undecided where there are none."""

from __future__ import annotations

import numpy as np
import pytest

import driblet
from driblet.results import Run
from tests.size_texts import ONE_INSIDE
from tests.texts import changed


@pytest.fixture(autouse=True)
def without_outcomes(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Run, "_judged_while_running", property(lambda _: False))


def test_samples_are_judged() -> None:
    with driblet.run(driblet.loads(ONE_INSIDE), replicates=60, threads=1) as run:
        inside = run.counts[:, -1, run.species.index("E")] >= 1
        np.testing.assert_array_equal(run.outcomes.met[:, 0] == 1, inside)
        assert run.outcomes.met.shape == (60, 4)
        assert set(run.requirement_resolution.values()) == {"grid"}
        assert not inside.all()


def test_a_summary_tells_only_how_it_ended() -> None:
    text = changed(
        ONE_INSIDE,
        ('must = "mark >= 1"\nwhen = "at end"', 'must = "mark >= 1"\nwhen = "throughout"'),
        ("seed = 3", 'seed = 3\nrecord = "summary"'),
    )
    with driblet.run(driblet.loads(text), replicates=10, threads=1) as run:
        assert (run.outcomes.met[:, 0] >= 0).all()
        assert (run.outcomes.met[:, 1] == -1).all()
