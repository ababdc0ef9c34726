"""The run file (HDF5) on disk: written and opened here and nowhere else. run_file.py says what it holds.

What was reported as written survives a kill at any instant: finished units of replicates go to shard files in
RUN.h5.parts/, each written to a temporary name, synced, and renamed; at the end the shards are merged by raw chunk copy
into RUN.h5, again through a temporary name.
"""

from __future__ import annotations

import itertools
import os
import shutil
import tempfile
import time
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import h5py

from driblet.errors import InputError, one_problem
from driblet.run_file import FORMAT, WRITE_BYTES, Block, Layout, fill, merge, place, prepare

_FLUSH_SECONDS = 2.0
_MEMORY_RUNS = itertools.count(1)  # HDF5 keeps files in memory apart by name


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
        self.memory: h5py.File | None = None
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
                    if (
                        file["provenance"].attrs["replicates_per_unit"] != layout.unit
                    ):  # units would not be the same rows
                        raise one_problem(str(parts), "", "holds parts made by another version; --force discards them")
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
        large = sum(b.nbytes for b in self.waiting) > WRITE_BYTES
        if self.path is None and large:
            self._keep_in_memory()
        elif large or time.monotonic() - self.last_flush > _FLUSH_SECONDS:
            self.flush()

    def _keep_in_memory(self) -> h5py.File:
        """Move what is waiting into the file in memory, so that it is not held twice."""
        if self.memory is None:
            self.memory = _memory_file(f"run in memory {next(_MEMORY_RUNS)}")
            # packing would save nothing here, and takes longer than a short run
            prepare(self.memory, self.layout, packed=False)
        place(self.memory, self.layout, sorted(self.waiting, key=lambda b: b.unit))
        self.waiting = []
        return self.memory

    def flush(self) -> None:
        """Write what is waiting to a shard that survives a kill."""
        if self.path is None or not self.waiting:
            return
        parts = parts_folder(self.path)
        blocks = sorted(self.waiting, key=lambda b: b.unit)
        name = f"units-{blocks[0].unit:06d}-{len(blocks):04d}-{os.getpid()}.h5"
        with _writing(self.path):
            parts.mkdir(exist_ok=True)
            _write_atomically(parts / name, parts, lambda file: fill(file, self.layout, blocks))
            # readers take the run file before its parts, so one that is being replaced (--force) goes now
            self.path.unlink(missing_ok=True)
        self.done.update(b.unit for b in blocks)
        self.waiting = []
        self.last_flush = time.monotonic()

    def finish(self, closing: Mapping[str, Any]) -> h5py.File | None:
        """Make the run file of all blocks and remove the shards; `closing` joins the provenance.

        Returns the open file when it is kept in memory, else None.
        """
        if self.path is None:
            file = self._keep_in_memory()
            file["provenance"].attrs.update(closing)
            return file
        blocks = sorted(self.waiting, key=lambda b: b.unit)
        parts = parts_folder(self.path)
        if _shards(parts):
            self.flush()
        shards = _shards(parts)

        def write(file: h5py.File) -> None:
            if shards:
                merge(file, self.layout, _opened(shards))
            else:
                fill(file, self.layout, blocks)
            file["provenance"].attrs.update(closing)

        with _writing(self.path):
            parts.mkdir(exist_ok=True)
            size = sum(shard.stat().st_size for shard in shards)
            _write_atomically(self.path, parts, write, size + size // 50 + (1 << 20) if shards else None)
        self.waiting = []
        discard_parts(self.path)
        return None


def _opened(shards: Iterable[Path]) -> Iterator[h5py.File]:
    for shard in shards:
        with open_file(shard) as file:
            yield file


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
