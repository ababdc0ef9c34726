"""`driblet size` from question to page: what it writes, what it answers, and the same answer however it was simulated."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Sequence
from pathlib import Path

import pytest

from driblet.commands.main import main
from driblet.errors import InterruptedRunError
from driblet_analysis.sizing import Batch, Sizing, batches_of, simulate_here, size
from driblet_analysis.sizing_parts import FOUND, NOT_REACHABLE, Job, Outcome
from driblet_analysis.sizing_question import Question, loads_of, read_question
from tests.size_texts import ONE_INSIDE
from tests.texts import changed

EXACT = -math.log(0.05)
ASKED = ["--vary", "species.E", "--between", "0.5 copies", "20 copies", "--requirement", "inside"]


@pytest.fixture
def system(tmp_path: Path) -> Path:
    path = tmp_path / "one.toml"
    path.write_text(ONE_INSIDE, "utf-8")
    return path


def question(path: Path, **settings: float) -> Question:
    return read_question(path, "species.E", "0.5 copies", "20 copies", "inside", **settings)  # type: ignore[arg-type]


def answered(path: Path, folder: Path, **more: object) -> Sizing:
    return size(question(path, within=0.4), folder, threads=1, **more)  # type: ignore[arg-type]


def test_from_question_to_page(system: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    folder = tmp_path / "sized"
    asked = [*ASKED, "-o", str(folder), "--threads", "1"]
    assert main(["size", str(system), *asked]) == 0
    out = " ".join(capsys.readouterr().out.split())
    for piece in (
        "is the least with which inside is met in 95 % of compartments",
        "To be on the safe side take",
        "in 500 new compartments",
        "what still fails",
        "E (copies)",
        "confirm by experiment",
    ):
        assert piece in out
    assert {p.name for p in folder.iterdir()} == {"answer.json", "answer.h5", "curve.png", "jobs.jsonl", "page.html"}
    assert main(["size", str(system), *asked, "--resume", "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert facts == json.loads((folder / "answer.json").read_text("utf-8"))
    assert {"value", "low", "high", "unit", "share", "status"} <= set(facts)
    assert (facts["status"], facts["unit"], facts["kind"]) == ("found", "copies", "least")
    assert facts["low"] <= EXACT <= facts["high"]
    assert facts["share_low"] < 0.95 < facts["share_high"]
    page = (folder / "page.html").read_text("utf-8")
    assert "data:image/png;base64," in page
    assert "http" not in page  # self-contained
    assert main(["lifetime", str(folder / "answer.h5")]) in (0, 1)


def test_a_greatest_value(system: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A mark of two copies that decay: one is left after 1 s with 1 - (1 - e^-k)^2, 0.9 at k = -ln(1 - sqrt 0.1)."""
    asked = ["--vary", "reactions.loss.forward", "--between", "0.02 /s", "5 /s", "--requirement", "kept"]
    assert main(["size", str(system), *asked, "-o", str(tmp_path / "k"), "--threads", "1", "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert (facts["status"], facts["kind"], facts["unit"]) == ("found", "greatest", "/s")
    assert facts["low"] <= -math.log(1 - math.sqrt(0.1)) <= facts["high"]


def test_not_reachable_ends_with_one(system: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    asked = ["--vary", "species.E", "--between", "0.1 copies", "1 copies", "--requirement", "inside"]
    assert main(["size", str(system), *asked, "-o", str(tmp_path / "n"), "--threads", "1"]) == 1
    out = " ".join(capsys.readouterr().out.split())
    assert "Not reachable" in out
    assert "at most" in out
    assert "at 1 copies" in out


def test_already_met_ends_with_zero(system: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    asked = ["--vary", "species.E", "--between", "10 copies", "40 copies", "--requirement", "inside"]
    assert main(["size", str(system), *asked, "-o", str(tmp_path / "a"), "--threads", "1"]) == 0
    assert "already met" in capsys.readouterr().out


def test_undecided_says_how_to_go_on(system: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    asked = [*ASKED, "-o", str(tmp_path / "u"), "--threads", "1", "--budget", "700", "--within", "0.02"]
    assert main(["size", str(system), *asked]) == 3
    out = " ".join(capsys.readouterr().out.split())
    assert "budget of 700 compartments was spent" in out
    assert "--resume with a larger --budget" in out
    asked = [*ASKED, "-o", str(tmp_path / "u"), "--threads", "1", "--within", "0.5", "--resume"]
    assert main(["size", str(system), *asked]) == 0


def test_whole_copies_where_loading_is_exact(tmp_path: Path) -> None:
    """1 - (1 - e^-0.1)^n: one mark is left after 1 s with 0.905, so that one copy is enough for 0.9, two for 0.95."""
    path = tmp_path / "whole.toml"
    path.write_text(changed(ONE_INSIDE, ("share = 0.9\n", "share = 0.95\n")), "utf-8")
    asked = read_question(path, "species.mark", "1 copies", "12 copies", "kept")
    assert asked.scale.whole
    found = size(asked, tmp_path / "w", threads=1).finding
    assert found.status == FOUND
    assert (found.answer.low, found.answer.value, found.answer.high) == (2, 2, 2)


class _Cut:
    """Simulates as usual, and is interrupted after some batches."""

    def __init__(self, after: int) -> None:
        self.left = after
        self.done: list[Batch] = []

    def __call__(self, asked: Question, batches: Sequence[Batch], done: Callable[[Batch, Outcome], None]) -> None:
        for batch in batches:
            if not self.left:
                raise KeyboardInterrupt
            self.left -= 1
            self.done.append(batch)
            simulate_here(1)(asked, [batch], done)


def test_an_interrupted_sizing_goes_on_to_the_same_answer(system: Path, tmp_path: Path) -> None:
    whole = answered(system, tmp_path / "whole").finding
    first, rest = _Cut(12), _Cut(10_000)
    with pytest.raises(InterruptedRunError, match=r"compartments are kept in .*cut; go on with --resume"):
        answered(system, tmp_path / "cut", simulate=first)
    with (tmp_path / "cut" / "jobs.jsonl").open("a", encoding="utf-8") as stream:
        stream.write('{"value": "0.5 cop')  # killed while it wrote a line
    again = answered(system, tmp_path / "cut", simulate=rest, resume=True).finding
    assert again == whole
    assert not set(first.done) & set(rest.done)


def test_a_kept_batch_is_the_same_compartments_at_every_value(system: Path) -> None:
    asked = question(system)
    one, other = (batches_of(asked, Job(value, 4, 450)) for value in (1.0, 2.0))
    assert [b.seed for b in one] == [b.seed for b in other]
    assert [b.replicates for b in one] == [200, 200, 50]
    assert len({b.seed for b in one}) == 3
    met: list[Outcome] = []
    simulate_here(1)(asked, [one[0], other[0]], lambda _, outcome: met.append(outcome))
    assert (met[1] >= met[0]).all()  # a load rises with its mean
    assert met[1].sum() > met[0].sum()


def test_a_cluster_gives_the_same_answer(system: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The rounds as sweeps, worked on here in place of a cluster."""
    from driblet_analysis.sizing_cluster import simulate_on_cluster
    from driblet_analysis.sweep import dask_cluster, work_locally

    monkeypatch.setattr(
        dask_cluster, "work_on_dask", lambda directory, _, **rest: work_locally(directory, workers=1, **rest)
    )
    here = answered(system, tmp_path / "here").finding
    folder = tmp_path / "there"
    there = answered(system, folder, simulate=simulate_on_cluster(folder, "tcp://nowhere")).finding
    assert there == here


def test_loads_at_the_answer_are_those_of_the_median_compartment(system: Path) -> None:
    loads = {load.name: load for load in loads_of(question(system).system_at(6.0))}
    assert loads["E"].copies == 6.0
    assert loads["E"].concentration_M == pytest.approx(6.0 / 6.02214076e23 / 10e-15)  # Avogadro's constant: SI, 2019
    assert "B" not in loads


def test_an_answer_holds_in_new_compartments(system: Path, tmp_path: Path) -> None:
    """1,000 new compartments at the answer: their share lies within three standard errors and the interval of the share."""
    import driblet

    found = answered(system, tmp_path / "s").finding
    made = question(system).system_at(found.answer.value)
    with driblet.run(made, replicates=1000, seed=991, threads=1) as run:
        share = float((run.outcomes.met[:, 0] == 1).mean())
    slack = 3 * math.sqrt(0.95 * 0.05 / 1000)
    assert found.share.low - slack <= share <= found.share.high + slack


@pytest.mark.long
def test_an_answer_holds_in_5000_new_compartments(system: Path, tmp_path: Path) -> None:
    """The share in 5,000 new compartments lies within the interval that the sizing gives it."""
    import driblet

    found = size(question(system, within=0.1), tmp_path / "s", threads=1).finding
    made = question(system).system_at(found.answer.value)
    with driblet.run(made, replicates=5000, seed=992, threads=1) as run:
        share = float((run.outcomes.met[:, 0] == 1).mean())
    assert found.share.low <= share <= found.share.high
    assert found.status != NOT_REACHABLE
