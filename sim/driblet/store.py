"""The run file (HDF5), written and read here and nowhere else.

What was reported as written survives a kill at any instant: finished units of replicates go to shard files in
RUN.h5.parts/, each written to a temporary name, synced, and renamed; at the end the shards are merged by raw chunk copy
into RUN.h5, again through a temporary name. One unit of replicates is one row of chunks, in shards and in the merged file.
"""

from __future__ import annotations

import hashlib
import itertools
import json
import os
import shutil
import tempfile
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from driblet.errors import InputError, one_problem

FORMAT = 1
_CHUNK_BYTES = 1 << 18
_FLUSH_SECONDS = 2.0
_FLUSH_BYTES = 64 << 20
_MEMORY_RUNS = itertools.count(1)  # HDF5 keeps files in memory apart by name
SERIES = ("counts", "firings_forward", "firings_backward")


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


def parts_folder(path: Path) -> Path:
    """Where the shards of a run that is not finished lie."""
    return path.parent / f"{path.name}.parts"  # with_name refuses "." and "/"


def discard_parts(path: Path) -> None:
    """Remove the shards of a run whose run file is complete."""
    shutil.rmtree(parts_folder(path), ignore_errors=True)


class RunWriter:
    """Takes blocks, keeps them safe, and makes the run file at the end.

    With path None the file is kept in memory. `done` holds the units found in shards when `resume` is set. Raises
    InputError when the path is taken, or its parts belong to another run.
    """

    def __init__(self, path: Path | None, layout: Layout, resume: bool = False, force: bool = False) -> None:
        self.path, self.layout = path, layout
        self.waiting: list[Block] = []
        self.done: set[int] = set()
        self.last_flush = time.monotonic()
        if path is None:
            return
        parts = parts_folder(path)
        with _writing(path):
            self._claim(path, parts, resume, force)
        if resume:
            for shard in _shards(parts):
                with open_file(shard) as file, reading(str(shard)):
                    if file.attrs["identity"] != layout.identity:
                        raise one_problem(str(parts), "", "holds parts of another run; --force discards them")
                    self.done.update(int(u) for u in file["provenance/units"][:])

    @staticmethod
    def _claim(path: Path, parts: Path, resume: bool, force: bool) -> None:
        """Make sure that the run file can be made, and that nothing is lost by making it."""
        name = str(path)
        taken = _exists(path)
        if path.is_dir():
            raise one_problem(name, "", "is a directory; a file name is needed")
        if taken and not path.is_file():
            raise one_problem(name, "", "is no ordinary file; another name is needed")
        if not path.parent.is_dir():
            raise one_problem(name, "", f"cannot be written: the folder {path.parent} does not exist")
        if _exists(parts) and not parts.is_dir():
            raise one_problem(name, "", f"cannot be written: {parts.name} is in the way")
        if taken and not (resume or force):
            raise one_problem(name, "", "exists already; --force replaces it, another -o keeps it")
        if _shards(parts) and not (resume or force):
            text = f"an interrupted run is kept in {parts.name}; go on with --resume, or discard it with --force"
            raise one_problem(name, "", text)
        with tempfile.TemporaryFile(dir=path.parent):
            pass
        if force:
            shutil.rmtree(parts, ignore_errors=True)

    def add(self, block: Block) -> None:
        """Take a finished block; it may be written now or with later ones."""
        self.waiting.append(block)
        large = sum(b.nbytes for b in self.waiting) > _FLUSH_BYTES
        if self.path is not None and (large or time.monotonic() - self.last_flush > _FLUSH_SECONDS):
            self.flush()

    def flush(self) -> None:
        """Write what is waiting to a shard that survives a kill."""
        if self.path is None or not self.waiting:
            return
        parts = parts_folder(self.path)
        blocks = sorted(self.waiting, key=lambda b: b.unit)
        name = f"units-{blocks[0].unit:06d}-{len(blocks):04d}-{os.getpid()}.h5"
        with _writing(self.path):
            parts.mkdir(exist_ok=True)
            _write_atomically(parts / name, parts, lambda file: _fill(file, self.layout, blocks))
            # readers take the run file before its parts, so one that is being replaced (--force) goes now
            self.path.unlink(missing_ok=True)
        self.done.update(b.unit for b in blocks)
        self.waiting = []
        self.last_flush = time.monotonic()

    def finish(self, closing: Mapping[str, Any]) -> h5py.File | None:
        """Make the run file of all blocks and remove the shards; `closing` joins the provenance.

        Returns the open file when it is kept in memory, else None.
        """
        blocks = sorted(self.waiting, key=lambda b: b.unit)
        if self.path is None:
            file = _memory_file(f"run in memory {next(_MEMORY_RUNS)}")
            # packing would save nothing here, and takes longer than a short run
            _fill(file, self.layout, blocks, packed=False)
            file["provenance"].attrs.update(closing)
            return file
        parts = parts_folder(self.path)
        if _shards(parts):
            self.flush()
        shards = _shards(parts)

        def write(file: h5py.File) -> None:
            if shards:
                _merge(file, self.layout, shards)
            else:
                _fill(file, self.layout, blocks)
            file["provenance"].attrs.update(closing)

        with _writing(self.path):
            parts.mkdir(exist_ok=True)
            size = sum(shard.stat().st_size for shard in shards)
            _write_atomically(self.path, parts, write, size + size // 50 + (1 << 20) if shards else None)
        self.waiting = []
        discard_parts(self.path)
        return None


def _shards(parts: Path) -> list[Path]:
    return sorted(parts.glob("units-*.h5")) if parts.is_dir() else []


def _exists(path: Path) -> bool:
    """Whether there is anything of that name, a dangling link too. Raises OSError where that cannot be known."""
    try:
        path.lstat()
    except (FileNotFoundError, NotADirectoryError):
        return False
    return True


@contextmanager
def _writing(path: Path) -> Iterator[None]:
    """Turns what the system says about writing (a full disk, no permission) into one line about `path`."""
    try:
        yield
    except InputError:
        raise
    except (OSError, RuntimeError, ValueError) as error:  # h5py has all three
        code = error.errno if isinstance(error, OSError) else None
        reason = os.strerror(code) if code else " ".join(str(error).split())
        raise one_problem(str(path), "", f"cannot be written: {reason[:1].lower()}{reason[1:]}") from error


def _memory_file(name: str) -> h5py.File:
    return h5py.File(name, "w", driver="core", backing_store=False, libver="v110", track_order=True)


def _write_atomically(path: Path, workplace: Path, fill: Any, bytes_at_most: int | None = None) -> None:
    """Make a file that is there whole or not at all; `workplace` : a folder on the same disk for the unfinished one.

    HDF5 does not survive a failed write: it tells of it again and again, and the process may end in a crash. So the file is
    made in memory and written by ourselves, or, where it would be large (`bytes_at_most` says how large), HDF5 writes it
    once the disk has shown that there is room.
    """
    # a name of our own: the longest name a run file may have leaves no room for additions
    temporary = workplace / f"{'shard' if path.parent == workplace else 'run'}.{os.getpid()}.tmp"
    try:
        if bytes_at_most is None:
            with _memory_file(str(temporary)) as file:
                fill(file)
                file.flush()
                image = file.id.get_file_image()
            with temporary.open("wb") as stream:
                stream.write(image)
                stream.flush()
                os.fsync(stream.fileno())
        else:
            with temporary.open("wb") as stream:
                if hasattr(os, "posix_fallocate"):  # not on macOS
                    os.posix_fallocate(stream.fileno(), 0, bytes_at_most)
            with h5py.File(temporary, "w", libver="v110", track_order=True) as file:
                fill(file)
                file.flush()
                os.fsync(file.id.get_vfd_handle())
        os.replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    folder = os.open(path.parent, os.O_RDONLY)
    try:
        os.fsync(folder)
    finally:
        os.close(folder)


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


def _fill(file: h5py.File, layout: Layout, blocks: Sequence[Block], packed: bool = True) -> None:
    """A file of the given blocks; the unit that is not full, if any, comes last. packed : compressed and with checksums."""
    replicate = np.concatenate([b.replicate for b in blocks]) if blocks else np.zeros(0, dtype=np.int64)
    _frame(file, layout, replicate, [b.unit for b in blocks])
    _create_series(file, layout, len(replicate), packed)
    if not blocks:
        return
    for name in blocks[0].series:
        _write_rows(file[name], [b.series[name] for b in blocks])
    for path in blocks[0].values:
        _write_rows(file[path], [b.values[path] for b in blocks])
    for name, arrays in (
        ("volume", [b.volume_L for b in blocks]),
        ("end_reason", [b.reason for b in blocks]),
        ("events", [b.events for b in blocks]),
    ):
        _write_rows(file[name], arrays)


def _write_rows(dataset: h5py.Dataset, arrays: Sequence[NDArray[Any]]) -> None:
    """Write arrays one below the other, several at a time: a write costs as much as the simulation of a short replicate."""
    row = first = size = 0
    for k, array in enumerate(arrays):
        size += array.nbytes
        if size > _FLUSH_BYTES or k == len(arrays) - 1:
            part = arrays[first] if first == k else np.concatenate(arrays[first : k + 1])
            if part.size:
                dataset[row : row + len(part)] = part
            row, first, size = row + len(part), k + 1, 0


def _merge(file: h5py.File, layout: Layout, shards: Sequence[Path]) -> None:
    _frame(file, layout, np.arange(layout.replicates, dtype=np.int64), list(range(layout.units)))
    _create_series(file, layout, layout.replicates)
    for shard in shards:
        with open_file(shard) as part:
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


def open_file(path: str | Path) -> h5py.File:
    """Open a run file or shard for reading. Raises InputError, one line, for anything that is not one."""
    name = str(path)
    path = Path(path)
    try:
        with path.open("rb") as stream:
            head = stream.read(8)
    except IsADirectoryError as error:
        raise one_problem(name, "", "is a directory, not a run file") from error
    except (OSError, ValueError) as error:  # a ValueError when the name holds a NUL
        reason = getattr(error, "strerror", None) or str(error)
        raise one_problem(name, "", f"cannot be read: {reason.lower()}") from error
    if not head:
        raise one_problem(name, "", "is empty, so it is no run file")
    if head != b"\x89HDF\r\n\x1a\n":
        if path.suffix == ".toml":
            raise one_problem(name, "", f"is a system file, not a run file: `driblet run {name} -o RUN.h5` makes one")
        raise one_problem(name, "", "is not HDF5, so it is no run file")
    try:
        file = h5py.File(path, "r")
    except OSError as error:
        what = "is truncated or damaged" if "truncated" in str(error) or "eof" in str(error) else "cannot be opened"
        raise one_problem(name, "", f"{what}; run the system again") from error
    try:
        with reading(name):
            version = file.attrs.get("driblet_format")
            if version is None:
                raise one_problem(name, "", "is HDF5 but not a driblet run file")
            if version != FORMAT:
                raise one_problem(name, "", f"has run-file version {version}; this driblet reads version {FORMAT}")
    except InputError:
        file.close()
        raise
    return file


@contextmanager
def reading(name: str) -> Iterator[None]:
    """Turns what h5py says about a damaged file into one line."""
    try:
        yield
    except InputError:
        raise
    except (OSError, RuntimeError, ValueError, KeyError, TypeError, AttributeError) as error:
        raise one_problem(name, "", "is a damaged run file; run the system again") from error


def open_run(path: str | Path) -> list[h5py.File]:
    """The files that make up a run: the run file, or the shards of one that was interrupted."""
    path = Path(path)
    if path.name.endswith(".parts") and os.path.isdir(path):
        path = path.with_name(path.name.removesuffix(".parts"))
    parts = parts_folder(path)
    shards = _shards(parts) if os.path.isdir(parts) else []
    if os.path.exists(path) or not shards:
        return [open_file(path)]
    files = [open_file(shard) for shard in shards]
    with reading(str(parts)):
        identities = {file.attrs["identity"] for file in files}
    if len(identities) > 1:
        raise InputError(str(parts_folder(path)), [("", "mixes parts of different runs")])
    return files
