"""One axis of a sweep: a list of values, or a span between two, and what its values have in common (their unit)."""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np

from driblet.quantities import QuantityError, read_quantity
from driblet.system.tables import unknown_key
from driblet_analysis.sweep.keypaths import Scalar

DIGITS = 10  # of a value computed from a span; what is written into the point is what is simulated
SPACINGS = ("linear", "log")
MOST_VALUES = 1_000_000


class AxisError(ValueError):
    """What is wrong with an axis, and what would be right."""


@dataclass(frozen=True)
class Span:
    """Values from `low` to `high` in one unit. Attributes: unit : its text, "" for plain numbers; points : 0 if not given."""

    low: float
    high: float
    unit: str
    log: bool
    points: int
    whole: bool = False

    def at(self, fraction: float) -> Scalar:
        """The value at a fraction from 0 to 1 of the span, as a point of the sweep holds it."""
        if fraction in (0.0, 1.0):
            value = (self.low, self.high)[int(fraction)]
        elif self.log:
            value = math.exp(math.log(self.low) + fraction * (math.log(self.high) - math.log(self.low)))
        else:
            value = self.low + fraction * (self.high - self.low)
        number = f"{value:.{DIGITS}g}"
        if self.unit:
            return f"{number} {self.unit}"
        return int(float(number)) if self.whole and float(number).is_integer() else float(number)


@dataclass(frozen=True)
class Axis:
    """A key path and what is put there. Attributes: values : as listed, or None for a span."""

    path: str
    values: tuple[Scalar, ...] | None
    span: Span | None = None

    def grid(self) -> tuple[Scalar, ...]:
        """The values of a crossed or zipped axis. Raises AxisError for a span that does not say how many."""
        if self.values is not None:
            return self.values
        assert self.span is not None
        if not self.span.points:
            raise AxisError("needs points = N, the number of values between from and to")
        steps = max(1, self.span.points - 1)
        return tuple(self.span.at(i / steps) for i in range(self.span.points))

    def drawn(self, fraction: float) -> Scalar:
        """The value that a uniform number in [0, 1) picks: along the span, or one of the listed ones with equal chance."""
        if self.span is not None:
            return self.span.at(fraction)
        assert self.values is not None
        return self.values[min(len(self.values) - 1, int(fraction * len(self.values)))]


def read_axis(path: str, value: object) -> Axis:
    """An axis as the sweep file writes it. Raises AxisError."""
    if isinstance(value, list):
        if not value:
            raise AxisError("is empty; at least one value is needed")
        for one in value:
            if not isinstance(one, Scalar) or (isinstance(one, float) and not math.isfinite(one)):
                raise AxisError(f"{one!r} will not do: values are quantities, numbers, true or false")
        return Axis(path, tuple(value))
    if isinstance(value, Mapping):
        return Axis(path, None, _read_span(value))
    raise AxisError('a list of values is needed, or { from = "80 nm", to = "400 nm", points = 9, spacing = "log" }')


def _read_span(table: Mapping[str, Any]) -> Span:
    known = ["from", "to", "points", "spacing"]
    for key in table:
        if key not in known:
            raise AxisError(unknown_key(key, known))
    missing = [key for key in ("from", "to") if key not in table]
    if missing:
        raise AxisError(f"{' and '.join(missing)} is missing")
    spacing, points = table.get("spacing", "linear"), table.get("points", 0)
    if spacing not in SPACINGS:
        raise AxisError(f'spacing = {spacing!r} is not known: "linear" or "log"'.replace("'", '"'))
    if "points" in table and (
        isinstance(points, bool) or not isinstance(points, int) or not 2 <= points <= MOST_VALUES
    ):
        raise AxisError(f"points = {points!r} will not do: a whole number from 2 to {MOST_VALUES} is needed")
    try:
        low, high = (read_quantity(table[key], allow_plain=True, example='"80 nm"') for key in ("from", "to"))
    except QuantityError as error:
        raise AxisError(str(error)) from error
    if dict(low.unit.dimensionality) != dict(high.unit.dimensionality):
        raise AxisError(f'from "{low}" to "{high}" are of different kinds')
    unit = "" if low.unit.dimensionless else low.text.split(None, 1)[1]
    registry = low.unit._REGISTRY
    end = float(registry.Quantity(high.value, high.unit).to(low.unit).magnitude)
    if low.value == end:
        raise AxisError("from and to are the same value")
    if spacing == "log" and not (low.value > 0 and end > 0):
        raise AxisError('spacing = "log" needs from and to above zero')
    whole = isinstance(table["from"], int) and isinstance(table["to"], int)
    return Span(low.value, float(f"{end:.{DIGITS}g}"), unit, spacing == "log", points, whole)


class Column(NamedTuple):
    """How the values of an axis stand in a table: kind "number" or "text"; unit : text, "" for plain numbers and texts."""

    kind: str
    unit: str


def column_of(values: Iterable[Scalar]) -> Column:
    """What the values of one axis have in common. Raises AxisError when they mix kinds of quantity."""
    first: Column | None = None
    dimension: object = None
    for value in dict.fromkeys(values):
        kind, unit, own = _measure(value)
        if first is None:
            first, dimension = Column(kind, unit), own
        elif (kind, own) != (first.kind, dimension):
            raise AxisError(f"mixes {_name(first)} and {_name(Column(kind, unit))}; one kind of value is needed")
    assert first is not None
    return first


def _name(column: Column) -> str:
    return "words" if column.kind == "text" else f'values in "{column.unit}"' if column.unit else "plain numbers"


@lru_cache(maxsize=8192)
def _measure_text(text: str) -> tuple[str, str, object]:
    try:
        quantity = read_quantity(text, allow_plain=True)
    except QuantityError:
        return "text", "", None
    if quantity.unit.dimensionless:
        return "number", "", ()
    return "number", text.split(None, 1)[1].strip(), frozenset(dict(quantity.unit.dimensionality).items())


def _measure(value: Scalar) -> tuple[str, str, object]:
    if isinstance(value, bool):
        return "text", "", None
    return _measure_text(value) if isinstance(value, str) else ("number", "", ())


@lru_cache(maxsize=8192)
def _in_unit(text: str, unit: str) -> float:
    from driblet.quantities import read_unit

    quantity = read_quantity(text, allow_plain=True)
    if not unit or text.split(None, 1)[1].strip() == unit:
        return quantity.value
    registry = quantity.unit._REGISTRY
    return float(f"{float(registry.Quantity(quantity.value, quantity.unit).to(read_unit(unit)).magnitude):.{DIGITS}g}")


def in_column(value: Scalar, column: Column) -> float | str:
    """A value as its column shows it: a number in the column's unit, or a text."""
    if column.kind == "text":
        return str(value).lower() if isinstance(value, bool) else str(value)
    return _in_unit(value, column.unit) if isinstance(value, str) else float(value)


@lru_cache(maxsize=65536)
def _canonical_text(text: str) -> str:
    try:
        quantity = read_quantity(text, allow_plain=True)
    except QuantityError:
        return f"text {text}"
    registry = quantity.unit._REGISTRY
    base = registry.Quantity(quantity.value, quantity.unit).to_base_units()
    return f"{float(base.magnitude):.{DIGITS}g} {base.units:~C}"


def canonical(value: Scalar) -> str:
    """A text that equal values share, however they are written: "1 mM" and "1000 uM"."""
    if isinstance(value, bool):
        return f"text {str(value).lower()}"
    return _canonical_text(value) if isinstance(value, str) else f"{float(value):.{DIGITS}g} "


def stream_key(paths: Sequence[str], values: Sequence[Scalar]) -> int:
    """The key of a point's random streams: a hash of its values, 63 bits, so that adding points changes no other.

    The same on every machine, and for every order of the axes. Never zero, which is the key of a plain run.
    """
    facts = sorted((path, canonical(value)) for path, value in zip(paths, values, strict=True))
    digest = hashlib.sha256(json.dumps(facts, ensure_ascii=True).encode()).digest()
    # two words of 32 bits, neither zero, whatever the hash: no stream of a plain run (key 0) is met again
    return (int.from_bytes(digest[:8], "big") >> 1) | 1 | 1 << 62


def sobol_fractions(dimensions: int, points: int, seed: int) -> np.ndarray:
    """The first Sobol points, scrambled by `seed`, shape=(points, dimensions), in [0, 1): more points keep the first ones.

    Source: scipy.stats.qmc.Sobol (Joe & Kuo, SIAM J. Sci. Comput. 30:2635, 2008; Owen's scrambling).
    """
    from scipy.stats import qmc

    exponent = max(0, math.ceil(math.log2(points)))
    return np.asarray(qmc.Sobol(dimensions, scramble=True, seed=seed).random_base2(exponent)[:points])
