"""Where a sweep stands, from what is on disk."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

from driblet_analysis.sweep.claims import standings
from driblet_analysis.sweep.directory import Plan, read_plan
from driblet_analysis.sweep.shards import shard_files, union

MOST_FAILURES = 10


@dataclass
class Status:
    """Counts of points and what is the matter.

    Attributes: done, failed, left : points; at_work : points left in shards that a worker holds; silent : those whose worker
    has shown no sign of life for a while; seconds_per_point : measured, of one core, None before the first; failures : (point,
    error) of the first few; errors : how many failed points share an error; damaged : lines about files that cannot be read;
    suspects : points at which workers died.
    """

    plan: Plan
    done: int = 0
    failed: int = 0
    left: int = 0
    at_work: int = 0
    silent: int = 0
    workers: int = 0
    seconds_per_point: float | None = None
    failures: list[tuple[int, str]] = field(default_factory=list)
    errors: Counter[str] = field(default_factory=Counter)
    damaged: list[str] = field(default_factory=list)
    suspects: list[int] = field(default_factory=list)


def read_status(directory: str | Path) -> Status:
    """Read where a sweep stands. Raises InputError for a directory that is no sweep of this version."""
    status = Status(read_plan(directory))
    plan = status.plan
    files, claimed = shard_files(plan), standings(plan.directory)
    seconds = 0.0
    suspects: set[int] = set()
    for shard in range(plan.shards):
        size, done = len(plan.shard(shard)), set()
        if shard in files:
            results, _, damaged = union(plan, shard, runs=False)
            status.damaged += damaged
            for number, result in results.items():
                done.add(number)
                seconds += result.wall_s
                if result.error:
                    status.failed += 1
                    status.errors[result.error] += 1
                    if len(status.failures) < MOST_FAILURES:
                        status.failures.append((number, result.error))
                else:
                    status.done += 1
        left = size - len(done)
        status.left += left
        standing = claimed.get(shard)
        if standing is not None and left:
            at_work = standing.state in ("held", "beating")
            status.at_work += left if at_work else 0
            status.silent += left if standing.state == "silent" else 0
            status.workers += at_work
            suspects.update(s for s in standing.suspects if standing.state == "free" and s not in done)
    status.suspects = sorted(suspects)
    if status.done + status.failed:
        status.seconds_per_point = seconds / (status.done + status.failed)
    return status
