"""What a run file (HDF5) holds: its datasets, made from blocks of replicates or merged from shards. store.py keeps it safe.

One unit of replicates is one row of chunks, in shards and in the merged file.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

FORMAT = 1
SERIES = ("counts", "firings_forward", "firings_backward")
_CHUNK_BYTES = 1 << 18
WRITE_BYTES = 64 << 20  # written at a time


@dataclass(frozen=True)
class PerReplicate:
    """An array of any trailing shape per replicate: its path in the file, its shape without replicates, dtype and unit.

    dtype object stands for doubles of any number in each replicate.
    """

    path: str
    shape: tuple[int, ...]
    dtype: Any
    unit: str


@dataclass(frozen=True)
class Layout:
    """What a run file holds besides numbers.

    Attributes: species, reactions, readouts : names; readout_units; time_s : (G,); replicates : planned number; unit : how
    many replicates make one row of chunks; identity : hash that two files of the same run share; provenance : strings and
    numbers; system_text : the system file; per_replicate : further arrays of each replicate; fixed : arrays that all
    replicates share, path -> values.
    """

    species: tuple[str, ...]
    reactions: tuple[str, ...]
    readouts: tuple[str, ...]
    readout_units: tuple[str, ...]
    time_s: NDArray[np.float64]
    replicates: int
    unit: int
    identity: str
    system_text: str
    provenance: Mapping[str, Any] = field(default_factory=dict)
    per_replicate: tuple[PerReplicate, ...] = ()
    fixed: Mapping[str, NDArray[Any]] = field(default_factory=dict)

    @property
    def units(self) -> int:
        """Number of units."""
        return -(-self.replicates // self.unit)


@dataclass(frozen=True)
class Block:
    """Finished replicates of one unit.

    replicate : int64, (R,); volume_L : (R,); reason, events : int64, (R,); series : name -> (R, G, ...) arrays;
    values : path -> (R, ...) arrays, the per_replicate ones of the layout.
    """

    unit: int
    replicate: NDArray[np.int64]
    volume_L: NDArray[np.float64]
    reason: NDArray[np.int64]
    events: NDArray[np.int64]
    series: Mapping[str, NDArray[Any]]
    values: Mapping[str, NDArray[Any]] = field(default_factory=dict)

    @property
    def nbytes(self) -> int:
        """Size of the arrays in memory."""
        return sum(a.nbytes for a in (*self.series.values(), *self.values.values()))


def digest(text: str) -> str:
    """SHA-256 of a text, as hexadecimal digits."""
    return hashlib.sha256(text.encode()).hexdigest()


def _frame(file: h5py.File, layout: Layout, replicate: NDArray[np.int64], units: Sequence[int]) -> None:
    """Attributes, dimension scales and provenance, everything but the series."""
    file.attrs["driblet_format"] = FORMAT
    file.attrs["identity"] = layout.identity
    file.attrs["replicates_planned"] = layout.replicates
    text = h5py.string_dtype("utf-8")
    scales: dict[str, Any] = {
        "replicate": replicate,
        "time": layout.time_s,
        "species": np.array(layout.species, dtype=object),
        "reaction": np.array(layout.reactions, dtype=object),
    }
    for name, values in scales.items():
        words = values.dtype == object
        dataset = file.create_dataset(
            name, data=values, dtype=text if words else None, fletcher32=values.size > 0 and not words
        )
        dataset.make_scale(name)
    file["time"].attrs["units"] = "s"
    group = file.create_group("provenance")
    group.create_dataset("system_file", data=layout.system_text, dtype=text)
    group.attrs["system_file_sha256"] = digest(layout.system_text)
    group.create_dataset("units", data=np.array(units, dtype=np.int64))
    group.attrs["readout_units"] = json.dumps(dict(zip(layout.readouts, layout.readout_units, strict=True)))
    group.attrs["replicates_per_unit"] = layout.unit
    for path, values in layout.fixed.items():
        file.create_dataset(path, data=values)
    for name, value in layout.provenance.items():
        group.attrs[name] = value


def _series_shapes(layout: Layout) -> dict[str, tuple[tuple[int, ...], Any, str]]:
    """name -> (shape without replicates, dtype, units)."""
    times, species, reactions = len(layout.time_s), len(layout.species), len(layout.reactions)
    shapes: dict[str, tuple[tuple[int, ...], Any, str]] = {
        "counts": ((times, species), np.int64, "1"),
        "firings_forward": ((times, reactions), np.int64, "1"),
        "firings_backward": ((times, reactions), np.int64, "1"),
    }
    for name, unit in zip(layout.readouts, layout.readout_units, strict=True):
        shapes[f"readout_{name}"] = ((times,), np.float64, unit)
    return shapes


def _create_series(file: h5py.File, layout: Layout, rows: int, packed: bool = True) -> None:
    for name, (shape, dtype, unit) in _series_shapes(layout).items():
        per_time = 8 * layout.unit * int(np.prod(shape[1:]))
        times = max(1, min(shape[0], _CHUNK_BYTES // max(1, per_time)))
        empty = 0 in shape
        dataset = file.create_dataset(
            name,
            shape=(rows, *shape),
            maxshape=None if empty else (None, *shape),
            dtype=dtype,
            chunks=None if empty else (layout.unit, times, *shape[1:]),
            compression="gzip" if packed and not empty else None,
            compression_opts=1 if packed and not empty else None,
            shuffle=packed and not empty,
            fletcher32=packed and not empty,
        )
        dataset.attrs["units"] = unit
        third = ["species" if name == "counts" else "reaction"] if len(shape) == 2 else []
        for axis, scale in enumerate(["replicate", "time", *third]):
            dataset.dims[axis].attach_scale(file[scale])
    for name, dtype, unit in (("volume", np.float64, "L"), ("end_reason", np.int64, "1"), ("events", np.int64, "1")):
        dataset = file.create_dataset(name, shape=(rows,), dtype=dtype, fletcher32=rows > 0)
        dataset.attrs["units"] = unit
        dataset.dims[0].attach_scale(file["replicate"])
    for one in layout.per_replicate:
        plain = 0 in one.shape or not rows or one.dtype == object
        dataset = file.create_dataset(
            one.path,
            shape=(rows, *one.shape),
            dtype=h5py.vlen_dtype(np.float64) if one.dtype == object else one.dtype,
            chunks=None if plain else (min(rows, layout.unit), *one.shape),
            compression="gzip" if packed and not plain else None,
            compression_opts=1 if packed and not plain else None,
            shuffle=packed and not plain,
            fletcher32=packed and not plain,
        )
        dataset.attrs["units"] = one.unit


def fill(file: h5py.File, layout: Layout, blocks: Sequence[Block], packed: bool = True) -> None:
    """A file of the given blocks; the unit that is not full, if any, comes last. packed : compressed and with checksums."""
    replicate = np.concatenate([b.replicate for b in blocks]) if blocks else np.zeros(0, dtype=np.int64)
    _frame(file, layout, replicate, [b.unit for b in blocks])
    _create_series(file, layout, len(replicate), packed)
    if blocks:
        _write_blocks(file, blocks, 0)


def prepare(file: h5py.File, layout: Layout, packed: bool = True) -> None:
    """A file of all replicates, their rows not written yet."""
    _frame(file, layout, np.arange(layout.replicates, dtype=np.int64), list(range(layout.units)))
    _create_series(file, layout, layout.replicates, packed)


def place(file: h5py.File, layout: Layout, blocks: Sequence[Block]) -> None:
    """Write blocks where they belong in a prepared file; blocks : by rising unit."""
    first = 0
    for k in range(1, len(blocks) + 1):
        if k == len(blocks) or blocks[k].unit != blocks[k - 1].unit + 1:
            _write_blocks(file, blocks[first:k], blocks[first].unit * layout.unit)
            first = k


def _write_blocks(file: h5py.File, blocks: Sequence[Block], row: int) -> None:
    for name in blocks[0].series:
        _write_rows(file[name], [b.series[name] for b in blocks], row)
    for path in blocks[0].values:
        _write_rows(file[path], [b.values[path] for b in blocks], row)
    for name, arrays in (
        ("volume", [b.volume_L for b in blocks]),
        ("end_reason", [b.reason for b in blocks]),
        ("events", [b.events for b in blocks]),
    ):
        _write_rows(file[name], arrays, row)


def _write_rows(dataset: h5py.Dataset, arrays: Sequence[NDArray[Any]], row: int) -> None:
    """Write arrays one below the other, several at a time: a write costs as much as the simulation of a short replicate."""
    first = size = 0
    for k, array in enumerate(arrays):
        size += array.nbytes
        if size > WRITE_BYTES or k == len(arrays) - 1:
            part = arrays[first] if first == k else np.concatenate(arrays[first : k + 1])
            if part.size and part.dtype == object and len(part) == 1:
                dataset[row] = part[0]  # events of one replicate, which a slice of one row would take for a matrix
            elif part.size:
                dataset[row : row + len(part)] = part
            row, first, size = row + len(part), k + 1, 0


def merge(file: h5py.File, layout: Layout, shards: Iterable[h5py.File]) -> None:
    """A file of all replicates from its shards, by raw chunk copy."""
    prepare(file, layout)
    for part in shards:
        replicate = part["replicate"][:]
        for name in ("volume", "end_reason", "events", *(one.path for one in layout.per_replicate)):
            if file[name].size:
                file[name][replicate] = part[name][:]
        for row, unit in enumerate(part["provenance/units"][:]):
            for name in _series_shapes(layout):
                _copy_chunks(part[name], file[name], row * layout.unit, int(unit) * layout.unit)


def _copy_chunks(source: h5py.Dataset, target: h5py.Dataset, source_row: int, target_row: int) -> None:
    if source.chunks is None:
        return
    for start in range(0, source.shape[1], source.chunks[1]):
        tail = (start, *(0 for _ in source.shape[2:]))
        mask, data = source.id.read_direct_chunk((source_row, *tail))
        target.id.write_direct_chunk((target_row, *tail), data, filter_mask=mask)
