"""Claims: one winner among many, nothing trusted to locks, the dead found out, the living left alone."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import threading
import time
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest

from driblet_analysis.sweep import claims
from driblet_analysis.sweep.claims import STALE_SECONDS, Pulse, standing_of, standings, take

RACE = """
import os, sys, time
from pathlib import Path
from driblet_analysis.sweep.claims import standing_of, take
folder = Path(sys.argv[1])
(folder / f"ready-{os.getpid()}").touch()
while not (folder / "go").exists():
    time.sleep(0.001)
won = [s for s in range(40) if take(folder, s, standing_of(folder, s)) is not None]
print(*won, flush=True)
sys.stdin.readline()  # what the dead held is free: nobody leaves before all have tried
"""


def test_of_many_threads_exactly_one_wins(tmp_path: Path) -> None:
    barrier = threading.Barrier(8)

    def attempt(_: int) -> list[int]:
        barrier.wait()
        return [shard for shard in range(50) if take(tmp_path, shard, None) is not None]

    with ThreadPoolExecutor(8) as pool:
        won = [shard for shards in pool.map(attempt, range(8)) for shard in shards]
    assert sorted(won) == list(range(50))


def test_of_several_processes_exactly_one_wins(tmp_path: Path) -> None:
    children = [
        subprocess.Popen(
            [sys.executable, "-c", RACE, str(tmp_path)], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
        )
        for _ in range(3)
    ]
    limit = time.monotonic() + 60
    while len(list(tmp_path.glob("ready-*"))) < 3 and time.monotonic() < limit:
        time.sleep(0.01)
    (tmp_path / "go").touch()
    won = [int(shard) for child in children for shard in child.stdout.readline().split()]
    for child in children:
        child.communicate("\n", timeout=60)
    assert sorted(won) == list(range(40))


def test_where_there_are_no_hard_links_exactly_one_wins(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: object) -> None:
        raise PermissionError("no hard links here")

    monkeypatch.setattr(os, "link", refuse)
    test_of_many_threads_exactly_one_wins(tmp_path)


def test_a_claim_that_only_looks_would_let_several_win(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Broken twin: looking first and writing afterwards. The race above must expose it."""

    def look_then_write(temporary: Path, path: Path) -> bool:
        if path.exists():
            return False
        time.sleep(0.0005)
        path.write_text(temporary.read_text())
        return True

    monkeypatch.setattr(claims, "_link", look_then_write)
    with pytest.raises(AssertionError):
        test_of_many_threads_exactly_one_wins(tmp_path)


def test_a_held_claim_is_left_alone_and_a_released_one_is_free(tmp_path: Path) -> None:
    claim = take(tmp_path, 3, None)
    assert claim is not None
    assert standing_of(tmp_path, 3).state == "held"
    assert take(tmp_path, 3, standing_of(tmp_path, 3)) is None
    claim.release()
    assert standing_of(tmp_path, 3).state == "free"
    again = take(tmp_path, 3, standing_of(tmp_path, 3))
    assert again is not None
    assert again.generation == 1
    assert claim.lost()
    assert not again.lost()
    again.release()


def test_a_complete_shard_is_not_taken_again_unless_asked(tmp_path: Path) -> None:
    with take(tmp_path, 0, None) as claim:
        claim.complete()
    standing = standing_of(tmp_path, 0)
    assert standing.state == "done"
    assert take(tmp_path, 0, standing) is None
    reopened = take(tmp_path, 0, standing, reopen=True)
    assert reopened is not None
    reopened.release()


def test_an_outdated_view_does_not_win(tmp_path: Path) -> None:
    """A worker that looked before another took and released the shard makes the same generation, and loses."""
    first = take(tmp_path, 0, None)
    first.release()
    seen = standing_of(tmp_path, 0)
    second = take(tmp_path, 0, seen)
    assert second is not None
    assert take(tmp_path, 0, seen) is None
    assert take(tmp_path, 0, None) is None
    second.release()


def _claim_of(tmp_path: Path, **facts: object) -> Path:
    claim = take(tmp_path, 7, None)
    claim.at(41)
    claim._ended.set()
    claim._thread.join()
    path = tmp_path / "claims" / "000007.0"
    path.write_text(json.dumps({**json.loads(path.read_text()), **facts}))
    return path


def test_the_owner_that_is_gone_is_found_out_at_once(tmp_path: Path) -> None:
    child = subprocess.Popen([sys.executable, "-c", ""])
    child.wait()
    _claim_of(tmp_path, pid=child.pid, started="12345")
    standing = standing_of(tmp_path, 7)
    assert standing.state == "free"
    assert standing.suspects == (41,)
    heir = take(tmp_path, 7, standing)
    assert heir.suspects == (41,)
    heir.release()
    assert standing_of(tmp_path, 7).suspects == (41,)


def test_a_number_given_to_another_process_is_not_the_owner(tmp_path: Path) -> None:
    _claim_of(tmp_path, started="1")
    assert standing_of(tmp_path, 7).state == "free"


def test_an_owner_elsewhere_is_judged_by_its_signs_of_life(tmp_path: Path) -> None:
    path = _claim_of(tmp_path, host="elsewhere", pid=1)
    assert standing_of(tmp_path, 7).state == "beating"
    for age, state in ((40, "silent"), (STALE_SECONDS + 5, "free")):
        then = time.time() - age
        os.utime(path, (then, then))
        assert standing_of(tmp_path, 7).state == state


def test_the_clock_of_this_machine_does_not_matter(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    _claim_of(tmp_path, host="elsewhere", pid=1)
    monkeypatch.setattr(time, "time", lambda: 4e9)
    assert standing_of(tmp_path, 7).state == "beating"


def test_a_beat_while_we_watch_ends_the_doubt(tmp_path: Path) -> None:
    path = _claim_of(tmp_path, host="elsewhere", pid=1)
    pulse = Pulse()
    assert pulse.doubtful(7, standing_of(tmp_path, 7))
    assert pulse.doubtful(7, standing_of(tmp_path, 7))
    time.sleep(0.01)
    os.utime(path)
    assert not pulse.doubtful(7, standing_of(tmp_path, 7))
    here = take(tmp_path, 8, None)
    assert not pulse.doubtful(8, standing_of(tmp_path, 8))
    here.release()


def test_a_worker_shows_signs_of_life(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(claims, "BEAT_SECONDS", 0.05)
    claim = take(tmp_path, 0, None)
    path = tmp_path / "claims" / "000000.0"
    os.utime(path, (1.0, 1.0))
    limit = time.monotonic() + 10
    while path.stat().st_mtime < 2 and time.monotonic() < limit:
        time.sleep(0.02)
    assert path.stat().st_mtime > 2
    claim.release()


@pytest.mark.parametrize("text", ["", "{", "[1]", "\x00\x00\x00"])
def test_a_claim_that_cannot_be_read_is_judged_by_its_age(tmp_path: Path, text: str) -> None:
    """As a power cut leaves it: its owner may be alive for a while, and is not for ever."""
    path = _claim_of(tmp_path)
    path.write_text(text)
    assert standings(tmp_path)[7].state == "beating"
    old = time.time() - STALE_SECONDS - 60
    os.utime(path, (old, old))
    assert standings(tmp_path)[7].state == "free"
    taken = take(tmp_path, 7, standing_of(tmp_path, 7))
    assert taken is not None
    taken.release()


def test_work_waits_for_a_worker_elsewhere_that_may_be_dead(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Its claim falls silent and goes stale while we wait; then its shard is done here."""
    from driblet_analysis.sweep import make_plan, work, work_locally
    from tests.sweep_texts import POINTS, write_sweep

    monkeypatch.setattr(claims, "BEAT_SECONDS", 0.2)
    monkeypatch.setattr(claims, "STALE_SECONDS", 8.0)
    monkeypatch.setattr(work, "_WAIT_SECONDS", 0.1)
    directory = tmp_path / "sweep"
    make_plan(write_sweep(tmp_path), directory)
    _claim_of(directory, host="elsewhere", pid=1)
    waits: list[str] = []
    outcome = work_locally(directory, workers=1, on_progress=lambda progress: waits.append(progress.waiting))
    assert outcome.written == POINTS
    assert any("workers elsewhere that may be dead" in text for text in waits)
    assert waits[-1] == ""
