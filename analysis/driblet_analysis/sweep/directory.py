"""A sweep's directory, and the plan in it: every point and how points are grouped, in one file that workers only read.

DIR/plan.h5      the plan: base system, points, shards; self-contained, replaced as a whole by `extend`
DIR/shards/      results, many points to a file
DIR/claims/      who works on what
DIR/slurm/       job scripts and logs
"""

from __future__ import annotations

import json
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any, NamedTuple

import h5py
import numpy as np
from numpy.typing import NDArray

from driblet.errors import InputError, one_problem
from driblet.system import System
from driblet.system.build import build
from driblet.version import __version__
from driblet_analysis.sweep.axes import Column
from driblet_analysis.sweep.files import open_hdf5, write_hdf5, writing
from driblet_analysis.sweep.keypaths import Scalar, replaced, toml_text

FORMAT = 1
NAME = "plan.h5"


class Point(NamedTuple):
    """One point as a worker takes it. Attributes: number; key : of its random streams; changes : key path -> value."""

    number: int
    key: int
    changes: dict[str, Scalar]


@dataclass(frozen=True)
class Plan:
    """A plan on disk. Points are read in parts: its size in memory does not depend on their number.

    Attributes: identity : hash that all points of a sweep share; paths : key paths of axes, then of derived values; axes : how
    many of them are axes; columns : their kinds and units; first : int64, (shards + 1,), the first point of each shard;
    seconds_per_point : estimated, of one core.
    """

    directory: Path
    identity: str
    title: str
    keep: str
    shared_streams: bool
    created: str
    driblet_version: str
    paths: tuple[str, ...]
    axes: int
    columns: tuple[Column, ...]
    first: NDArray[np.int64]
    seconds_per_point: float
    system_text: str
    sweep_text: str

    @property
    def points(self) -> int:
        """Number of points."""
        return int(self.first[-1])

    @property
    def shards(self) -> int:
        """Number of shards."""
        return len(self.first) - 1

    @cached_property
    def raw(self) -> Mapping[str, Any]:
        """The parsed base system."""
        return tomllib.loads(self.system_text)

    def shard(self, number: int) -> range:
        """The points of a shard."""
        return range(int(self.first[number]), int(self.first[number + 1]))

    def read(self, numbers: range) -> list[Point]:
        """Some points, in order. Raises InputError for a damaged plan."""
        with reading(self.directory), open_hdf5(self.directory / NAME) as file:
            rows = slice(numbers.start, numbers.stop)
            values, hashes = file["value"].asstr()[rows], file["hash"][rows]
        return [
            Point(n, 0 if self.shared_streams else int(key), dict(zip(self.paths, map(json.loads, row), strict=True)))
            for n, key, row in zip(numbers, hashes, values, strict=True)
        ]

    def hashes(self) -> set[int]:
        """The hash of every point's values."""
        with reading(self.directory), open_hdf5(self.directory / NAME) as file:
            return {int(h) for h in file["hash"][:]}

    def system(self, point: Point) -> System:
        """The system of a point, with the text of a system file of its own. Raises InputError."""
        changed = replaced(self.raw, point.changes)
        text = f"# point {point.number} of the sweep {' '.join(self.title.split())}\n{toml_text(changed)}"
        return build(changed, text, str(self.directory / f"point {point.number}"))

    def check_version(self) -> None:
        """Raise InputError when another driblet made the plan: its bits could be others."""
        if self.driblet_version != __version__:
            text = f"was planned with driblet {self.driblet_version}, this is {__version__}; go on with that version"
            raise one_problem(str(self.directory), "", f"{text}, or plan the sweep anew in another directory")


def read_plan(directory: str | Path) -> Plan:
    """The plan of a sweep's directory. Raises InputError for anything that is none of this version."""
    directory = Path(directory)
    path = directory / NAME
    if not directory.is_dir():
        what = "is a file" if directory.exists() else "does not exist"
        raise one_problem(
            str(directory), "", f"{what}; `driblet sweep plan SWEEP.toml -o DIR` makes a sweep's directory"
        )
    if not path.is_file():
        raise one_problem(str(directory), "", "holds no sweep; `driblet sweep plan SWEEP.toml -o DIR` makes one")
    with reading(directory), open_hdf5(path) as file:
        facts = dict(file.attrs)
        version = facts.get("driblet_sweep")
        if version is None:
            raise one_problem(str(path), "", "is HDF5 but no plan of a sweep")
        if version != FORMAT:
            text = f"holds a sweep of version {version}; this driblet works on version {FORMAT}"
            raise one_problem(str(directory), "", text)
        return Plan(
            directory,
            str(facts["identity"]),
            str(facts["title"]),
            str(facts["keep"]),
            bool(facts["shared_streams"]),
            str(facts["created"]),
            str(facts["driblet_version"]),
            tuple(file["path"].asstr()[:]),
            int(facts["axes"]),
            tuple(Column(*row) for row in file["column"].asstr()[:]),
            file["shard_first"][:],
            float(facts["seconds_per_point"]),
            file["system_file"].asstr()[()],
            file["sweep_file"].asstr()[()],
        )


def write_plan(plan: Plan, values: Sequence[Sequence[Scalar]], hashes: NDArray[np.uint64]) -> None:
    """Write the plan of a directory, whole or not at all. values : (points, paths); hashes : (points,)."""
    text = h5py.string_dtype("utf-8")

    def fill(file: h5py.File) -> None:
        file.attrs["driblet_sweep"] = FORMAT
        for name in ("identity", "title", "keep", "shared_streams", "created", "driblet_version", "axes"):
            file.attrs[name] = getattr(plan, name)
        file.attrs["seconds_per_point"] = plan.seconds_per_point
        file.create_dataset("system_file", data=plan.system_text, dtype=text)
        file.create_dataset("sweep_file", data=plan.sweep_text, dtype=text)
        file.create_dataset("path", data=list(plan.paths), dtype=text)
        file.create_dataset("column", data=[list(c) for c in plan.columns], dtype=text)
        file.create_dataset("shard_first", data=plan.first)
        file.create_dataset("hash", data=hashes)
        encoded = np.array([[json.dumps(v) for v in row] for row in values], dtype=object)
        file.create_dataset("value", data=encoded.reshape(len(values), len(plan.paths)), dtype=text, chunks=True)

    with writing(plan.directory):
        plan.directory.mkdir(exist_ok=True)
        write_hdf5(plan.directory / NAME, fill)


def read_values(plan: Plan) -> tuple[list[list[Scalar]], NDArray[np.uint64]]:
    """All values and hashes of a plan, as `write_plan` takes them."""
    with reading(plan.directory), open_hdf5(plan.directory / NAME) as file:
        return [[json.loads(v) for v in row] for row in file["value"].asstr()[:]], file["hash"][:]


@contextmanager
def reading(directory: Path) -> Iterator[None]:
    """Turns what h5py says about a damaged plan into one line."""
    try:
        yield
    except InputError:
        raise
    except (OSError, RuntimeError, ValueError, KeyError, TypeError, AttributeError) as error:
        text = f"cannot be read ({' '.join(str(error).split())[:120]}); plan the sweep anew in another directory"
        raise one_problem(str(directory / NAME), "", text) from error
