"""A sizing whose rounds are done by real clusters ends in the answer found here; skipped where they are absent."""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path

import pytest

from driblet.commands.main import main
from tests.cluster.slurm_node import SlurmNode, missing
from tests.size_texts import ONE_INSIDE

ASKED = ["--vary", "species.E", "--between", "0.5 copies", "20 copies", "--requirement", "inside", "--within", "0.9"]


def answer(folder: Path, name: str, more: Sequence[str], capsys: pytest.CaptureFixture[str]) -> dict:
    """What `size --json` prints, but for names of files."""
    system = folder / "one.toml"
    system.write_text(ONE_INSIDE, "utf-8")
    assert main(["size", str(system), *ASKED, "-o", str(folder / name), "--threads", "1", "--json", *more]) == 0
    return json.loads(capsys.readouterr().out)


def test_dask(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    distributed = pytest.importorskip("distributed", reason='needs dask and distributed: pip install "driblet[dask]"')
    with distributed.LocalCluster(n_workers=1, threads_per_worker=1, processes=True, dashboard_address=None) as cluster:
        there = answer(tmp_path, "there", ["--dask", cluster.scheduler_address], capsys)
    assert there == answer(tmp_path, "here", [], capsys)


@pytest.mark.long
def test_slurm(tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    reason = missing()
    if reason:
        pytest.skip(reason)
    monkeypatch.setattr("driblet_analysis.sizing_cluster._POLL_SECONDS", 0.5)
    with SlurmNode(tmp_path / "node") as node:
        for name, value in node.environment.items():
            monkeypatch.setenv(name, value)
        options = ["--partition", "main", "--time", "10", "--memory", "300M", "--setup", "export FROM_SETUP=1"]
        there = answer(tmp_path, "there", ["--slurm", *options], capsys)
        script = next((tmp_path / "there" / "rounds").glob("*/sweep/slurm/sweep-001.sh")).read_text("utf-8")
        assert "#SBATCH --partition=main" in script
        assert "export FROM_SETUP=1" in script
    assert there == answer(tmp_path, "here", [], capsys)
