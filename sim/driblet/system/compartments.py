"""[compartments.NAME] -> Compartment: one size, a lognormal spread of sizes, or sizes as measured."""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from driblet.errors import Problem
from driblet.quantities import QuantityError, copies_per_molar
from driblet.system.model import Compartment
from driblet.system.sizes import SizesError, attachment, file_text, read_sizes
from driblet.system.tables import CompartmentTable, SpreadTable, read_table

SMALLEST_INNER_SHARE = 1e-6
SMALLEST_OMEGA, LARGEST_OMEGA = 1e-6, 1e27  # copies per mol/L: from less than an atom to a cubic metre
LARGEST_DIAMETER = 1.0  # m


class CompartmentReader:
    """Reads one compartment; `attached` holds the text of files it read, as TOML to add to the system's text."""

    def __init__(self, folder: Path, attachments: Mapping[str, Any], problems: list[Problem]) -> None:
        self.folder, self.attachments, self.problems = folder, attachments, problems
        self.attached = ""

    def problem(self, key: str, text: str) -> None:
        self.problems.append(Problem(key, text))

    def read(self, name: str, value: object) -> Compartment | None:
        """The compartment of one table, or None after adding what is wrong to the problems."""
        path = f"compartments.{name}"
        if isinstance(value, Mapping) and "cv" in value:
            self.problem(
                f"{path}.cv", 'a spread stands with the size it spreads: volume = { median = "4 aL", cv = 0.1 }'
            )
            value = {k: v for k, v in value.items() if k != "cv"}
        table = read_table(CompartmentTable, value, path, self.problems)
        if table is None:
            return None
        if (table.volume is None) == (table.diameter is None):
            self.problem(path, 'exactly one of diameter ("200 nm") and volume ("4.2 aL") is needed')
            return None
        if table.volume is not None:
            if table.wall is not None:
                self.problem(f"{path}.wall", "a wall goes with a diameter; a volume is already the inner one")
            if table.volume.csv is not None:
                sizes = self.measured(table.volume, "volume", f"{path}.volume")
                return self.of_sizes(name, sizes, path) if sizes else None
            volume = self.size(table.volume, "volume", f"{path}.volume")
            return Compartment(name, volume, table.volume.cv) if volume and self.fits(volume, path) else None
        assert table.diameter is not None
        wall = table.wall or 0.0
        if table.diameter.csv is not None:
            sizes = self.measured(table.diameter, "length", f"{path}.diameter")
            if sizes and min(sizes) <= 2 * wall:
                self.problem(f"{path}.wall", "two walls leave no room inside the smallest of these diameters")
                return None
            return self.of_sizes(name, [_inner_volume(d, wall) for d in sizes], path) if sizes else None
        diameter = self.size(table.diameter, "length", f"{path}.diameter")
        if not diameter:
            return None
        if diameter <= 2 * wall:
            self.problem(f"{path}.wall", "two walls leave no room inside this diameter")
            return None
        sigma = math.sqrt(math.log1p(table.diameter.cv**2))
        if sigma and wall and _normal_share(math.log(2 * wall / diameter) / sigma) > SMALLEST_INNER_SHARE:
            self.problem(f"{path}.diameter.cv", "is so wide that some compartments would be all wall")
            return None
        volume = _inner_volume(diameter, wall)
        return Compartment(name, volume, table.diameter.cv, diameter, wall) if self.fits(volume, path) else None

    def size(self, spread: SpreadTable, kind: str, path: str) -> float | None:
        """The median of a size that is stated."""
        if spread.column is not None or spread.unit is not None:
            self.problem(path, "column and unit go with csv, a file of measured sizes")
        if spread.median is None:
            self.problem(f"{path}.median", "is missing and has no default")
            return None
        try:
            value = spread.median.to(kind)
        except QuantityError as error:
            self.problem(path, str(error))
            return None
        if value <= 0:
            self.problem(path, f'"{spread.median}" leaves no room; it must be above zero')
            return None
        if kind == "length" and value > LARGEST_DIAMETER:
            self.problem(path, f'"{spread.median}" is no compartment where molecules are counted')
            return None
        return value

    def measured(self, spread: SpreadTable, kind: str, path: str) -> list[float] | None:
        """The sizes in a column of a file."""
        assert spread.csv is not None
        if spread.median is not None or spread.cv:
            self.problem(path, "sizes as measured have their own median and spread; leave median and cv out")
            return None
        try:
            text, known = file_text(spread.csv, self.folder, self.attachments)
            sizes = read_sizes(text, spread.column, spread.unit, kind)
        except SizesError as error:
            self.problem(f"{path}.csv", str(error))
            return None
        if not known:
            self.attached += attachment(spread.csv, text)
        return sizes

    def of_sizes(self, name: str, volumes: list[float], path: str) -> Compartment | None:
        """A compartment that is any of these, its median volume that of the middle one."""
        ordered = sorted(volumes)
        if not all([self.fits(ordered[0], path), self.fits(ordered[-1], path)]):
            return None
        middle = float(np.median(ordered))
        spread = float(np.std(ordered) / np.mean(ordered))
        return Compartment(name, middle, spread, sizes_L=tuple(ordered))

    def fits(self, volume_L: float, path: str) -> bool:
        """Whether a compartment of that volume can be simulated."""
        omega = copies_per_molar(volume_L)
        if omega < SMALLEST_OMEGA:
            self.problem(path, f"{volume_L:.4g} L is smaller than any molecule")
        if omega > LARGEST_OMEGA:
            self.problem(path, f"{volume_L:.4g} L is no compartment where molecules are counted")
        return SMALLEST_OMEGA <= omega <= LARGEST_OMEGA


def _inner_volume(diameter_m: float, wall_m: float) -> float:
    return math.pi / 6 * (diameter_m - 2 * wall_m) ** 3 * 1000.0


def _normal_share(z: float) -> float:
    """Share of a standard normal law below z; scipy.special, which has it too, takes long to import."""
    return 0.5 * math.erfc(-z / math.sqrt(2.0))
