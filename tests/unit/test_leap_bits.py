"""Bits of a replicate under leaps: no call size, packing, threads, neighbours, resumption or plain Python changes them."""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

import driblet
from driblet import ensemble, packs
from tests.texts import MIXED, changed
from tests.unit.leap_cases import leap, leaps_that_need_not_pay, lumped
from tests.unit.test_lumped_kernels import TEXT

TIMES = np.array([0.0, 0.4, 1.0, 2.0])


@pytest.fixture(autouse=True)
def _leaps() -> Iterator[None]:
    with leaps_that_need_not_pay():
        yield


FEW = TEXT.replace("CV", "0.2").replace("2 aL", "0.2 aL")  # some 500 copies: leaps and exact events
LOADED = changed(
    MIXED,
    ('diameter = { median = "120 nm", cv = 0.1 }', 'diameter = { median = "2 um", cv = 0.1 }'),
    ('{ amount = "20 copies", loading = "nearest" }', '"20000 copies"'),
    ('D = "9 copies"', 'D = "9000 copies"'),
    ('{ amount = "5 copies", loading = "nearest" }', '"5000 copies"'),
    ("replicates = 12", 'replicates = 30\nengine = "leap"'),
)


def test_call_size_never_changes_a_bit() -> None:
    system = lumped(FEW)
    wanted = leap(system, TIMES, 5, statistics=True)
    assert wanted.work[:, 0].min() > 10  # leaps
    assert wanted.work[:, 2].sum() > 100  # and exact events
    for budget in (1, 1000):
        other = leap(system, TIMES, 5, statistics=True, budget=budget)
        assert all(a.tobytes() == b.tobytes() for a, b in zip(wanted.arrays(), other.arrays(), strict=True))


def test_neighbours_never_change_a_bit() -> None:
    system = lumped(FEW)
    wanted = leap(system, TIMES, 5, statistics=True)
    for rows in ([3], [4, 1, 0]):
        other = leap(system, TIMES, len(rows), statistics=True, rows=rows)
        for a, b in zip([*wanted.state, *wanted.samples[1:], wanted.work], [*other.state, *other.samples[1:], other.work],
                        strict=True):  # fmt: skip
            assert a[rows].tobytes() == b.tobytes()


def test_twin_another_seed_has_other_bits() -> None:
    one, other = (leap(lumped(FEW), TIMES, 2, seed=s) for s in (1, 2))
    assert all((a != b).any() for a, b in zip(one.samples[1:], other.samples[1:], strict=True))


def test_threads_and_packing_never_change_a_bit(monkeypatch: pytest.MonkeyPatch) -> None:
    system = driblet.loads(LOADED)
    wanted = driblet.run(system, threads=1)
    assert wanted.provenance["engine_taken"] == "leap"
    monkeypatch.setattr(packs, "_BUDGET", 3000)
    monkeypatch.setattr(packs, "LANES", 8)
    monkeypatch.setattr(ensemble, "_UNIT_BYTES", 1)
    for threads in (1, 2, 3):
        run = driblet.run(system, threads=threads)
        for name in ("counts", "firings_forward", "firings_backward", "volume_L", "end_reason"):
            np.testing.assert_array_equal(getattr(run, name), getattr(wanted, name))
        assert run.sums is not None
        assert wanted.sums is not None
        np.testing.assert_array_equal(run.sums.count_time, wanted.sums.count_time)
        np.testing.assert_array_equal(run.sums.monomial_time, wanted.sums.monomial_time)


PLAIN = """\
import hashlib, sys
import numpy as np
from tests.unit.test_leap_bits import digest
print(digest())
"""


def digest() -> str:
    """Of a short stretch with leaps, exact events and a lumped enzyme."""
    system = lumped(TEXT.replace("CV", "0").replace("2 aL", "0.2 aL"))
    made = leap(system, np.array([0.0, 0.1, 0.5]), 1, tolerance=0.1, statistics=True)
    assert made.work[0, 0] > 0
    assert made.state.firings.sum() > 200
    return hashlib.sha256(b"".join(a.tobytes() for a in made.arrays())).hexdigest()


def test_plain_python_gives_the_same_bits() -> None:
    top = Path(__file__).parents[2]
    path = os.pathsep.join([str(top), *sys.path])
    done = subprocess.run(
        [sys.executable, "-c", PLAIN],
        env={**os.environ, "NUMBA_DISABLE_JIT": "1", "PYTHONPATH": path},
        cwd=top,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.stderr == ""
    assert done.stdout.strip() == digest()


def test_an_interrupted_run_resumes_to_the_same_bits(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(ensemble, "_UNIT_BYTES", 1)
    monkeypatch.setattr(packs, "_BUDGET", 2000)
    system, path = driblet.loads(LOADED), tmp_path / "run.h5"
    wanted = driblet.run(system)

    def told(progress: driblet.Progress) -> None:
        if progress.finished >= 5:
            raise KeyboardInterrupt

    with pytest.raises(driblet.InterruptedRunError):
        driblet.run(system, path, threads=1, on_progress=told)
    assert not path.exists()
    resumed = driblet.run(system, path, resume=True)
    assert resumed.complete
    np.testing.assert_array_equal(resumed.counts, wanted.counts)
    np.testing.assert_array_equal(resumed.firings_backward, wanted.firings_backward)


WORKER = """\
import sys
import driblet
from driblet import ensemble, packs, store
from tests.unit.leap_cases import leaps_that_need_not_pay
store._FLUSH_SECONDS, ensemble._UNIT_BYTES, packs._BUDGET = 0.0, 1, 2000

def told(progress):
    if progress.finished >= 5:
        print("some", flush=True)

with leaps_that_need_not_pay():
    driblet.run(driblet.loads(sys.stdin.read()), sys.argv[1], resume=True, threads=1, on_progress=told)
"""


@pytest.mark.skipif(os.name != "posix", reason="kills a process")
def test_a_killed_run_resumes_to_the_same_bits(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(ensemble, "_UNIT_BYTES", 1)  # as in the worker
    top, path = Path(__file__).parents[2], tmp_path / "run.h5"
    text = changed(LOADED, ("replicates = 30", "replicates = 40"), ('duration = "4 s"', 'duration = "30 s"'))
    process = subprocess.Popen(
        [sys.executable, "-c", WORKER, str(path)],
        env={**os.environ, "PYTHONPATH": os.pathsep.join([str(top), *sys.path])},
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    assert process.stdin is not None
    assert process.stdout is not None
    process.stdin.write(text)
    process.stdin.close()
    assert process.stdout.readline() == "some\n"
    process.kill()
    assert process.wait() == -9
    assert not path.exists()
    with driblet.Run(path) as run:
        rows, counts = run.replicate, run.counts
        assert 5 <= len(rows) < 40
    resumed = driblet.run(driblet.loads(text), path, resume=True)
    assert resumed.complete
    np.testing.assert_array_equal(resumed.counts[rows], counts)
    undisturbed = driblet.run(driblet.loads(text))
    np.testing.assert_array_equal(resumed.counts, undisturbed.counts)
    np.testing.assert_array_equal(resumed.firings_forward, undisturbed.firings_forward)
