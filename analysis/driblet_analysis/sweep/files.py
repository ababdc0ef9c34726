"""Files of a sweep: written whole or not at all, read without file locks, and never changed once they stand.

HDF5's own locks are left out: where a cluster's file system answers lock calls with errors or lies, they only stop readers.
"""

from __future__ import annotations

import os
import secrets
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import h5py

from driblet.errors import InputError, one_problem


@contextmanager
def writing(directory: Path) -> Iterator[None]:
    """Turns what the system says about writing (a full disk, no permission) into one line about the sweep's directory."""
    try:
        yield
    except InputError:
        raise
    except (OSError, RuntimeError, ValueError) as error:  # h5py has all three
        code = error.errno if isinstance(error, OSError) else None
        reason = os.strerror(code) if code else " ".join(str(error).split())
        raise one_problem(
            str(directory),
            "",
            f"cannot be written: {reason[:1].lower()}{reason[1:]}; what was reported as done is kept",
        ) from error


def write_hdf5(path: Path, fill: Callable[[h5py.File], None]) -> None:
    """Make an HDF5 file that is there whole or not at all, also after a power cut."""
    temporary = path.with_name(f"{path.name}.{secrets.token_hex(4)}.tmp")
    try:
        with h5py.File(temporary, "w", libver="v110", locking=False) as file:
            fill(file)
            file.flush()
            os.fsync(file.id.get_vfd_handle())
        os.replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    sync_folder(path.parent)


def write_text(path: Path, text: str) -> None:
    """Make a text file that is there whole or not at all."""
    temporary = path.with_name(f"{path.name}.{secrets.token_hex(4)}.tmp")
    try:
        with temporary.open("w", encoding="utf-8") as stream:
            stream.write(text)
            stream.flush()
            os.fsync(stream.fileno())
        os.replace(temporary, path)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    sync_folder(path.parent)


def sync_folder(folder: Path) -> None:
    """Wait until the folder's own entries are on the disk."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def open_hdf5(path: Path) -> h5py.File:
    """Open a finished file for reading, without locks. Raises OSError when it is not there or not HDF5."""
    return h5py.File(path, "r", locking=False)
