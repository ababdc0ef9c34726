"""The table of a sweep: one row per point, one column per value, in CSV and HDF5, written in pieces and read back."""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NamedTuple

import h5py
import numpy as np
from numpy.typing import NDArray

from driblet.errors import one_problem

FORMAT = 1
_ROWS = 2048  # written at a time
_WHOLE = 2.0**53  # every whole number below is itself
_HEAD = re.compile(r"(.*?)(?: \((.*)\))?")


class TableColumn(NamedTuple):
    """A column. Attributes: name; unit : "1" for plain numbers; kind : "number", "whole" or "text"; role : "point", "axis",
    "derived" or "result"."""

    name: str
    unit: str
    kind: str
    role: str

    @property
    def head(self) -> str:
        """The column's first cell."""
        return self.name if self.unit in ("1", "") else f"{self.name} ({self.unit})"


Cell = float | int | str


class CsvTable:
    """Writes rows to a CSV file: lines of provenance that begin with #, a head with units, the rows."""

    def __init__(self, path: Path, columns: Sequence[TableColumn], provenance: Mapping[str, str]) -> None:
        self.columns = columns
        self._stream = path.open("w", newline="", encoding="utf-8")
        for name, text in provenance.items():
            if "\n" not in text:
                self._stream.write(f"# {name}: {text}\n")
        self._writer = csv.writer(self._stream, lineterminator="\n")
        self._writer.writerow([c.head for c in columns])

    def add(self, rows: Iterable[Sequence[Cell]]) -> None:
        """Write rows; NaN becomes an empty cell."""
        for row in rows:
            self._writer.writerow([_cell(value) for value in row])

    def close(self) -> None:
        """Finish the file."""
        self._stream.close()


def _cell(value: Cell) -> str:
    if isinstance(value, str):
        return value.replace("#", "")  # which begins a comment to programs that skip the lines of provenance
    if math.isnan(value):
        return ""
    return str(int(value)) if abs(value) < _WHOLE and value == int(value) else repr(value)


class Hdf5Table:
    """Writes rows to an HDF5 file: a one-dimensional dataset per column, with units, over the dimension `point`."""

    def __init__(self, path: Path, columns: Sequence[TableColumn], provenance: Mapping[str, str]) -> None:
        self.columns = columns
        self._file = h5py.File(path, "w", libver="v110", track_order=True, locking=False)
        self._file.attrs["driblet_table"] = FORMAT
        text = h5py.string_dtype("utf-8")
        group = self._file.create_group("provenance")
        for name, value in provenance.items():
            group.create_dataset(name, data=value, dtype=text)
        types = {"number": np.float64, "whole": np.int64, "text": text}
        for column in columns:
            dataset = self._file.create_dataset(
                column.name, shape=(0,), maxshape=(None,), dtype=types[column.kind], chunks=(_ROWS,), compression="gzip"
            )
            dataset.attrs["units"] = column.unit
            dataset.attrs["role"] = column.role
        self._waiting: list[Sequence[Cell]] = []
        self._written = 0

    def add(self, rows: Iterable[Sequence[Cell]]) -> None:
        """Take rows; they are written in larger pieces."""
        self._waiting += rows
        if len(self._waiting) >= _ROWS:
            self._flush()

    def _flush(self) -> None:
        rows, self._waiting = self._waiting, []
        if not rows:
            return
        first, self._written = self._written, self._written + len(rows)
        for column, values in zip(self.columns, zip(*rows, strict=True), strict=True):
            dataset = self._file[column.name]
            dataset.resize((self._written,))
            kind = {"number": float, "whole": np.int64, "text": object}[column.kind]
            dataset[first:] = np.array(values, dtype=kind)

    def close(self) -> None:
        """Finish the file."""
        self._flush()
        scale = self._file["point"]
        scale.make_scale("point")
        for column in self.columns:
            if column.name != "point":
                self._file[column.name].dims[0].attach_scale(scale)
        self._file.close()


@dataclass(frozen=True)
class Table:
    """A table read back. Attributes: columns; values : name -> float or str array, shape=(rows,); provenance; name."""

    columns: tuple[TableColumn, ...]
    values: Mapping[str, NDArray[Any]]
    provenance: Mapping[str, str]
    name: str

    def column(self, name: str) -> TableColumn:
        """A column by name. Raises KeyError."""
        for column in self.columns:
            if column.name == name:
                return column
        raise KeyError(name)


def is_table(path: Path) -> bool:
    """Whether a file is a table of a sweep (by its content for HDF5, by its ending for CSV)."""
    if path.suffix.lower() == ".csv":
        return True
    try:
        with h5py.File(path, "r", locking=False) as file:
            return "driblet_table" in file.attrs
    except (OSError, ValueError):
        return False


def read_table(path: str | Path) -> Table:
    """Read a table that `collect` wrote. Raises InputError for anything else."""
    path = Path(path)
    try:
        return _read_csv(path) if path.suffix.lower() == ".csv" else _read_hdf5(path)
    except OSError as error:
        reason = (error.strerror or "is not HDF5").lower()
        raise one_problem(str(path), "", f"cannot be read: {reason}") from error
    except (ValueError, KeyError, RuntimeError, IndexError) as error:
        if hasattr(error, "problems"):
            raise
        raise one_problem(str(path), "", "is no table of a sweep; `driblet sweep collect` makes one") from error


def _read_hdf5(path: Path) -> Table:
    with h5py.File(path, "r", locking=False) as file:
        if file.attrs.get("driblet_table") != FORMAT:
            raise one_problem(
                str(path), "", "is no table of a sweep of this version; `driblet sweep collect` makes one"
            )
        columns, values = [], {}
        for name, dataset in file.items():
            if not isinstance(dataset, h5py.Dataset):
                continue
            text = h5py.check_string_dtype(dataset.dtype) is not None
            kind = "text" if text else "whole" if dataset.dtype.kind == "i" else "number"
            columns.append(TableColumn(name, str(dataset.attrs["units"]), kind, str(dataset.attrs["role"])))
            values[name] = dataset.asstr()[:] if text else dataset[:].astype(float)
        provenance = {name: d.asstr()[()] for name, d in file["provenance"].items()}
    return Table(tuple(columns), values, provenance, str(path))


def _read_csv(path: Path) -> Table:
    provenance: dict[str, str] = {}
    with path.open(newline="", encoding="utf-8-sig") as stream:
        position = stream.tell()
        while (line := stream.readline()).startswith("#"):
            name, _, text = line[1:].strip().partition(": ")
            provenance[name] = text
            position = stream.tell()
        stream.seek(position)
        rows = list(csv.reader(stream))
    if not rows or rows[0][:1] != ["point"]:
        raise ValueError("no table")
    axes, derived = (provenance.get(key, "").split(", ") for key in ("axes", "derived"))
    columns, values = [], {}
    for i, head in enumerate(rows[0]):
        match = _HEAD.fullmatch(head)
        assert match is not None
        name, unit = match[1], match[2] or "1"
        cells = [row[i] for row in rows[1:]]
        role = "point" if name == "point" else "axis" if name in axes else "derived" if name in derived else "result"
        try:
            values[name] = np.array([float(cell) if cell else np.nan for cell in cells])
            kind = "number" if name != "error" else "text"
        except ValueError:
            kind = "text"
        if kind == "text":
            values[name] = np.array(cells, dtype=object)
        columns.append(TableColumn(name, unit, kind, role))
    return Table(tuple(columns), values, provenance, str(path))
