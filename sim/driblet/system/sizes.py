"""Sizes of compartments from a column of a CSV file, and how the file travels with the system.

What is read is appended to the system's text as a table [attachments."FILE"], so that a run file holds all that it
needs, and two runs of different sizes are told apart.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from driblet.quantities import Quantity, QuantityError, check_unit, read_number

SECTION = "attachments"
MOST_BYTES = 20_000_000
MOST_SIZES = 1_000_000


class SizesError(ValueError):
    """A file of sizes that cannot be used; the message says what would be right."""


def file_text(name: str, folder: Path, attachments: Mapping[str, Any]) -> tuple[str, bool]:
    """The text of a file a system names, and whether it was already attached. Raises SizesError."""
    attached = attachments.get(name)
    if isinstance(attached, Mapping) and isinstance(attached.get("text"), str):
        return attached["text"], True
    path = folder / name
    try:
        if path.stat().st_size > MOST_BYTES:
            raise SizesError(f'"{name}" is larger than {MOST_BYTES // 1_000_000} MB')
        return path.read_text("utf-8-sig"), False
    except UnicodeDecodeError as error:
        raise SizesError(f'"{name}" is not text in UTF-8') from error
    except (OSError, ValueError) as error:
        if isinstance(error, SizesError):
            raise
        reason = getattr(error, "strerror", None) or str(error)
        raise SizesError(f'"{name}" cannot be read: {reason.lower()} (looked for beside the system file)') from error


def attachment(name: str, text: str) -> str:
    """The table that carries a file along, as TOML."""
    plain = text.replace("\r\n", "\n").replace("\\", "\\\\").replace('"""', '\\"\\"\\"')
    return f'\n[{SECTION}."{_escaped(name)}"]\ntext = """\n{plain}"""\n'


def _escaped(name: str) -> str:
    return name.replace("\\", "\\\\").replace('"', '\\"')


def read_sizes(text: str, column: str | None, unit: str | None, kind: str) -> list[float]:
    """The column as numbers in driblet's unit of `kind` ("length": m, "volume": L). Raises SizesError."""
    if unit is None:
        raise SizesError('needs unit, such as unit = "nm"')
    try:
        factor = Quantity(1.0, check_unit(unit), f"1 {unit}").to(kind)
    except QuantityError as error:
        raise SizesError(str(error)) from error
    reader = csv.reader(io.StringIO(text))
    rows = [(reader.line_num, row) for row in reader if any(cell.strip() for cell in row)]
    if not rows:
        raise SizesError("the file is empty")
    head = [cell.strip() for cell in rows[0][1]]
    if column is None and len(head) > 1:
        raise SizesError(f"the file has {len(head)} columns; name one as column: {', '.join(head)}")
    if column is not None and column not in head:
        raise SizesError(f'"{column}" is no column of the file; there are: {", ".join(head)}')
    at = head.index(column) if column is not None else 0
    sizes = []
    for number, row in rows[1:]:
        cell = row[at].strip() if at < len(row) else ""
        if not cell:
            continue  # columns of unequal length
        try:
            value = read_number(cell)
        except QuantityError as error:
            raise SizesError(f"row {number}: {error}") from error
        if value <= 0:
            raise SizesError(f'row {number}: "{cell}" leaves no room; sizes are above zero')
        sizes.append(value * factor)
    if not sizes:
        raise SizesError("the column holds no numbers below its name")
    if len(sizes) > MOST_SIZES:
        raise SizesError(f"{len(sizes)} sizes are too many; at most {MOST_SIZES} are read")
    return sizes
