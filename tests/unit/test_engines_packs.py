"""Packs of an ensemble: which units share a call, what a run says of its method, runs without statistics."""

from __future__ import annotations

import numpy as np
import pytest

import driblet
from driblet import sums
from driblet.engines.choice import LANES
from driblet.packs import Pack, next_pack
from driblet.run_file import Layout
from tests.texts import MIXED


def plan(units: int, unit: int, threads: int, row_bytes: int = 1000) -> list[int]:
    """Numbers of units of each pack."""
    pending = list(range(units))
    sizes = []
    while pending:
        taken = next_pack(pending, unit, threads, row_bytes)
        assert taken == list(range(sum(sizes), sum(sizes) + len(taken))), "in order, none twice"
        sizes.append(len(taken))
    assert sum(sizes) == units
    return sizes


@pytest.mark.parametrize("threads", [1, 2, 8])
@pytest.mark.parametrize(("units", "unit"), [(80, 8), (64, 2), (7, 1), (70, 128), (1, 1)])
def test_packs_take_every_unit_once_and_fill_lanes(units: int, unit: int, threads: int) -> None:
    sizes = plan(units, unit, threads)
    assert all(size * unit % LANES == 0 or size == 1 for size in sizes[:-1])
    assert sizes == sorted(sizes, reverse=True), "they shrink towards the end"


def test_two_threads_get_more_packs_than_one() -> None:
    assert len(plan(80, 8, 1)) == 2
    assert len(plan(80, 8, 2)) >= 4


def test_large_rows_make_small_packs() -> None:
    assert max(plan(80, 8, 1, row_bytes=16 << 20)) == 2
    assert set(plan(20, 1, 2, row_bytes=1 << 30)) == {1}


def test_rows_of_a_pack() -> None:
    layout = Layout(("A",), (), (), (), np.array([0.0, 1.0]), 21, 4, "x", "")
    pack = Pack.of([1, 5], layout)
    assert pack.rows.tolist() == [4, 5, 6, 7, 20]
    assert [pack.rows[b].tolist() for b in pack.bounds] == [[4, 5, 6, 7], [20]]
    assert pack.samples_done(10) == 0.0
    pack.next_sample = np.array([3, 3, 3, 3, 9])
    pack.before = 2
    assert pack.samples_done(10) == 4 * 5 + 10
    pack.written[pack.bounds[0]] = True
    assert pack.samples_done(10) == 10


def test_the_method_changes_no_bit_and_is_written_down() -> None:
    system = driblet.loads(MIXED)
    runs = {method: driblet.run(system, replicates=30, method=method) for method in (None, "lanes", "scalar")}
    assert {str(k): run.provenance["method"] for k, run in runs.items()} == {
        "None": "lanes",
        "lanes": "lanes",
        "scalar": "scalar",
    }
    assert driblet.run(system, replicates=1).provenance["method"] == "scalar"
    for run in runs.values():
        assert run.identity == runs[None].identity
        np.testing.assert_array_equal(run.counts, runs[None].counts)
        assert run.sums is not None
        np.testing.assert_array_equal(run.sums.count_time, runs[None].sums.count_time)
        np.testing.assert_array_equal(run.sums.monomial_time, runs[None].sums.monomial_time)


def test_a_method_there_is_not() -> None:
    system = driblet.loads(MIXED)
    with pytest.raises(driblet.InputError, match='method: "fast" is not a method: "lanes" or "scalar" is'):
        driblet.run(system, method="fast")
    with pytest.raises(driblet.InputError, match='method: events are recorded by "scalar" only'):
        driblet.run(system, method="lanes", record="events")
    assert driblet.run(system, replicates=9, record="events", duration=0.5).provenance["method"] == "scalar"


def test_without_statistics_the_trajectories_are_the_same() -> None:
    system = driblet.loads(MIXED)
    full, bare = driblet.run(system, replicates=9), driblet.run(system, replicates=9, statistics=False)
    np.testing.assert_array_equal(full.counts, bare.counts)
    np.testing.assert_array_equal(full.firings_forward, bare.firings_forward)
    assert full.sums is not None
    assert bare.sums is None
    assert full.identity != bare.identity
    with pytest.raises(driblet.InputError, match="statistics"):
        driblet.run(system, statistics=False, record="summary")


def test_histograms_of_samples_and_of_every_event_agree() -> None:
    """Both are unbiased for the same occupancies: means over replicates within five standard errors of each other."""
    system = driblet.loads(MIXED)
    means = []
    for record in ("trajectories", "summary"):
        sums = driblet.run(system, replicates=400, record=record, sample_every=0.02, burn_in=1.0).sums
        assert sums is not None
        share = sums.occupancy_time / sums.occupancy_time.sum(axis=2, keepdims=True)
        bins = (np.arange(share.shape[2]) * share).sum(axis=2)
        means.append((bins.mean(axis=0), bins.std(axis=0) / 20.0))
    (one, error), (other, _) = means
    assert (np.abs(one - other) <= 5 * error + 1e-9).all()


def test_a_large_network_goes_without_its_conserved_sums(monkeypatch: pytest.MonkeyPatch) -> None:
    """Their place in the widths of bins is taken by the largest load; nothing else changes."""
    system = driblet.loads(MIXED)
    small = driblet.run(system, replicates=4)
    monkeypatch.setattr(sums, "MOST_WITH_LAWS", 0)
    monkeypatch.setattr(sums, "conservation_laws", None)
    large = driblet.run(system, replicates=4)
    np.testing.assert_array_equal(large.counts, small.counts)
    assert small.sums is not None
    assert large.sums is not None
    np.testing.assert_array_equal(large.sums.monomial_time, small.sums.monomial_time)
    assert len(set(large.sums.bin_width.tolist())) == 1
