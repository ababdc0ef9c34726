"""Sweeps: one system at many points, planned, worked on anywhere, collected into one table.

from driblet_analysis.sweep import collect, make_plan, work_locally

make_plan("sweep.toml", "sweep")
work_locally("sweep")
collect("sweep", "table.h5")
"""

from driblet_analysis.sweep.collect import collect, collect_run
from driblet_analysis.sweep.directory import Plan, Point, read_plan
from driblet_analysis.sweep.local import work_locally
from driblet_analysis.sweep.plan import extend_plan, make_plan
from driblet_analysis.sweep.status import read_status
from driblet_analysis.sweep.table import read_table

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
