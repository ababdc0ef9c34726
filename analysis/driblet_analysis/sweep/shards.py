"""Shards: the results of many points in one file, made so that nothing reported as done is ever lost.

A shard file is written whole (temporary name, synced, renamed, folder synced) and never changed. What a shard holds is the
union of its files: a worker that goes on with a shard writes a new file with everything it has read and added, and only then
removes the files it has read. Two workers that hold the same shard, against all care, write files that agree, since a
point's result depends on its values alone. The name says how much is inside: 000012-0020-1f3a9c2b.h5 holds 20 points of
shard 12. A file that cannot be read, or whose points are not those of the plan, counts as absent.
"""

from __future__ import annotations

import re
import secrets
from collections import defaultdict
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

import h5py
import numpy as np

from driblet_analysis.sweep.directory import Plan
from driblet_analysis.sweep.files import open_hdf5, write_hdf5, writing
from driblet_analysis.sweep.summary import SummaryColumn

FORMAT = 1
FOLDER = "shards"
_FILE_NAME = re.compile(r"(\d{6,})-(\d{4,})-([0-9a-f]{8})\.h5")


class ShardFile(NamedTuple):
    """A shard's file by its name. Attributes: path; shard; points : how many it holds."""

    path: Path
    shard: int
    points: int


@dataclass(frozen=True)
class Result:
    """What became of a point.

    Attributes: number; key : of its streams; values : its summary, empty if it failed; error : why it failed, "" if it did
    not; wall_s : time it took; run : image of a run file, or None.
    """

    number: int
    key: int
    values: Mapping[SummaryColumn, float]
    error: str
    wall_s: float
    run: bytes | None = None


class DamagedShardError(Exception):
    """A shard file that cannot be read or belongs to something else; the text says which and why."""


def shard_files(plan: Plan) -> dict[int, list[ShardFile]]:
    """The files of each shard that has any, from one look at the folder."""
    found: dict[int, list[ShardFile]] = defaultdict(list)
    folder = plan.directory / FOLDER
    for path in sorted(folder.iterdir()) if folder.is_dir() else ():
        match = _FILE_NAME.fullmatch(path.name)
        if match and int(match[1]) < plan.shards:
            found[int(match[1])].append(ShardFile(path, int(match[1]), int(match[2])))
    return dict(found)


def is_complete(plan: Plan, shard: int, files: Iterable[ShardFile]) -> bool:
    """Whether one of a shard's files says that it holds every point."""
    return any(f.points >= len(plan.shard(shard)) for f in files)


def read_results(plan: Plan, file: ShardFile, runs: bool = True) -> dict[int, Result]:
    """The results in one file. runs : whether to read run files kept inside. Raises DamagedShardError, or
    FileNotFoundError when another worker has just replaced the file."""
    expected = {p.number: p.key for p in plan.read(plan.shard(file.shard))}
    try:
        with open_hdf5(file.path) as opened:
            if opened.attrs["driblet_sweep_shard"] != FORMAT or opened.attrs["identity"] != plan.identity:
                raise DamagedShardError(f"{file.path}: belongs to another sweep or version")
            results = _results(opened, runs)
    except FileNotFoundError:
        raise
    except (OSError, RuntimeError, ValueError, KeyError, TypeError, AttributeError) as error:
        raise DamagedShardError(f"{file.path}: cannot be read ({' '.join(str(error).split())[:120]})") from error
    if any(expected.get(r.number) != r.key for r in results.values()):
        raise DamagedShardError(f"{file.path}: holds points that are not those of the plan")
    return results


def _results(file: h5py.File, runs: bool) -> dict[int, Result]:
    columns = [SummaryColumn(*row) for row in file["column"].asstr()[:]]
    numbers, keys, errors = file["point"][:], file["key"][:], file["error"].asstr()[:]
    values, wall = file["value"][:], file["wall_s"][:]
    results = {}
    for i, number in enumerate(numbers):
        image = file.get(f"run/{number}") if runs else None
        # a column that this point does not have is NaN like one that is undefined: names are those of its neighbours
        row = {} if errors[i] else dict(zip(columns, values[i].tolist(), strict=True))
        results[int(number)] = Result(
            int(number), int(keys[i]), row, errors[i], float(wall[i]), None if image is None else image[:].tobytes()
        )
    return results


def write_results(plan: Plan, shard: int, results: Mapping[int, Result]) -> ShardFile:
    """Write results of a shard to a new file. Raises InputError when the disk refuses."""
    ordered = [results[n] for n in sorted(results)]
    columns = list(dict.fromkeys(c for r in ordered for c in r.values))
    values = np.array([[r.values.get(c, np.nan) for c in columns] for r in ordered]).reshape(len(ordered), len(columns))
    text = h5py.string_dtype("utf-8")

    def fill(file: h5py.File) -> None:
        file.attrs["driblet_sweep_shard"] = FORMAT
        file.attrs["identity"] = plan.identity
        file.attrs["driblet_version"] = plan.driblet_version
        file.create_dataset("column", data=np.array(columns, dtype=object).reshape(len(columns), 2), dtype=text)
        file.create_dataset("point", data=np.array([r.number for r in ordered], dtype=np.int64))
        file.create_dataset("key", data=np.array([r.key for r in ordered], dtype=np.uint64))
        file.create_dataset("error", data=[r.error for r in ordered], dtype=text)
        file.create_dataset("wall_s", data=np.array([r.wall_s for r in ordered]))
        chunks = values.shape if values.size else None
        file.create_dataset("value", data=values, chunks=chunks, fletcher32=chunks is not None)
        for result in ordered:
            if result.run is not None:
                image = np.frombuffer(result.run, dtype=np.uint8)
                file.create_dataset(f"run/{result.number}", data=image, chunks=image.shape, fletcher32=True)

    folder = plan.directory / FOLDER
    path = folder / f"{shard:06d}-{len(ordered):04d}-{secrets.token_hex(4)}.h5"
    with writing(plan.directory):
        folder.mkdir(exist_ok=True)
        write_hdf5(path, fill)
    return ShardFile(path, shard, len(ordered))


def union(plan: Plan, shard: int, runs: bool = True) -> tuple[dict[int, Result], list[ShardFile], list[str]]:
    """Everything a shard holds: results, the files they were read from, and what is wrong with files left out."""
    for _ in range(20):
        results: dict[int, Result] = {}
        read: list[ShardFile] = []
        damaged: list[str] = []
        try:
            for file in shard_files(plan).get(shard, []):
                try:
                    for number, result in read_results(plan, file, runs).items():
                        if number not in results or results[number].error:
                            results[number] = result
                    read.append(file)
                except DamagedShardError as error:
                    damaged.append(str(error))
            return results, read, damaged
        except FileNotFoundError:
            continue  # replaced between the look at the folder and the reading: look again
    return results, read, damaged
