"""Points read from a CSV file: a column per key path, a row per point."""

from __future__ import annotations

import csv
import re
from pathlib import Path

from driblet.errors import InputError, Problem, one_problem
from driblet.quantities import QuantityError, read_number
from driblet_analysis.sweep.keypaths import Scalar

_HEAD = re.compile(r"(?P<path>[^()\s]+)\s*(?:\((?P<unit>[^()]*(?:\([^()]*\)[^()]*)?)\))?")


def read_points_file(path: Path) -> tuple[tuple[str, ...], tuple[tuple[Scalar, ...], ...]]:
    """Key paths and points of a CSV file.

    The first row names the key paths; "species.ATP (mM)" gives the unit of bare numbers below it, else cells carry theirs
    ("0.5 mM"). Raises InputError with every problem found.
    """
    source = str(path)
    try:
        with path.open(newline="", encoding="utf-8-sig") as stream:
            rows = [(reader_line, row) for reader_line, row in _numbered(stream)]
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        reason = error.strerror if isinstance(error, OSError) else str(error)
        raise one_problem(source, "", f"cannot be read: {(reason or str(error)).lower()}") from error
    if len(rows) < 2:
        raise one_problem(source, "", "holds no points: a first row of key paths and a row per point are needed")
    heads = [_HEAD.fullmatch(cell.strip()) for cell in rows[0][1]]
    problems = [
        Problem(f"column {i + 1}", f'"{cell}" is not a key path, such as "species.ATP (mM)"')
        for i, (cell, head) in enumerate(zip(rows[0][1], heads, strict=True))
        if head is None
    ]
    paths = [head["path"] for head in heads if head]
    problems += [Problem("", f"{p} is given in two columns") for p in dict.fromkeys(paths) if paths.count(p) > 1]
    if problems:
        raise InputError(source, problems)
    units = [(head["unit"] or "").strip() for head in heads if head]
    points = []
    for line, row in rows[1:]:
        if len(row) != len(paths):
            problems.append(Problem(f"line {line}", f"has {len(row)} cells where {len(paths)} are needed"))
            continue
        try:
            points.append(tuple(_cell(cell.strip(), unit) for cell, unit in zip(row, units, strict=True)))
        except QuantityError as error:
            problems.append(Problem(f"line {line}", str(error)))
    if problems:
        raise InputError(source, problems)
    return tuple(paths), tuple(points)


def _numbered(stream) -> list[tuple[int, list[str]]]:  # type: ignore[no-untyped-def]
    reader = csv.reader(stream)
    return [(reader.line_num, row) for row in reader if any(cell.strip() for cell in row)]


def _cell(text: str, unit: str) -> Scalar:
    if not text:
        raise QuantityError("an empty cell; every point needs a value in every column")
    if unit:
        read_number(text)  # with the unit in the head a cell is a bare number
        return f"{text} {unit}"
    if text in ("true", "false"):
        return text == "true"
    try:
        number = read_number(text)
    except QuantityError:
        return text
    return int(number) if re.fullmatch(r"[+-]?\d+", text) else number
