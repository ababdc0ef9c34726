"""Sweeps: one system at many points, planned, worked on anywhere, collected into one table.

from driblet_analysis.sweep import collect, make_plan, work_locally

make_plan("sweep.toml", "sweep")
work_locally("sweep")
collect("sweep", "table.h5")
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from driblet_analysis.sweep.collecting import collect, collect_run
    from driblet_analysis.sweep.directory import Plan, Point, read_plan
    from driblet_analysis.sweep.local import work_locally
    from driblet_analysis.sweep.plan import extend_plan, make_plan
    from driblet_analysis.sweep.status import read_status
    from driblet_analysis.sweep.table import read_table

_HOMES = {
    "Plan": "directory",
    "Point": "directory",
    "collect": "collecting",
    "collect_run": "collecting",
    "extend_plan": "plan",
    "make_plan": "plan",
    "read_plan": "directory",
    "read_status": "status",
    "read_table": "table",
    "work_locally": "local",
}
__all__ = [
    "Plan",
    "Point",
    "collect",
    "collect_run",
    "extend_plan",
    "make_plan",
    "read_plan",
    "read_status",
    "read_table",
    "work_locally",
]


def __getattr__(name: str) -> Any:
    """Import on first use, so that one part does not wait for all."""
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)
