"""Figures of a sweep's table: lines with intervals along an axis, maps over two, points where there is no grid."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import Colormap, LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator
from numpy.typing import NDArray
from scipy.special import stdtrit

from driblet.errors import InputError, Problem
from driblet.quantities import QuantityError, read_number
from driblet_analysis.figures import COLOURS, style
from driblet_analysis.sweep.axes import AxisError, Column, column_of, in_column
from driblet_analysis.sweep.table import Table, TableColumn

MOST_LINES, MOST_PANELS = 7, 6
_MAP_SIDE = 4  # a grid of fewer values a side is clearer as lines
_CONFIDENCE = 0.95
_PAPER_TO_INK: Colormap = LinearSegmentedColormap.from_list("driblet", ["#F6F2E9", "#9CC3DA", "#0072B2", "#10304A"])
Array = NDArray[np.float64]


@dataclass(frozen=True)
class _Axis:
    """An axis that varies. Attributes: name; label; values : of each row, positions for words; levels; words."""

    name: str
    label: str
    values: Array
    levels: Array
    words: tuple[str, ...] = ()

    @property
    def log(self) -> bool:
        """Whether levels are spaced by factors rather than by steps."""
        if self.words or len(self.levels) < 3 or self.levels[0] <= 0 or self.levels[-1] < 4 * self.levels[0]:
            return False
        steps, factors = np.diff(self.levels), np.diff(np.log(self.levels))
        return bool(np.std(factors) / np.mean(factors) < np.std(steps) / np.mean(steps))

    def text(self, level: float) -> str:
        return self.words[int(level)] if self.words else f"{level:.4g}"


@dataclass(frozen=True)
class _Shown:
    """What is drawn: a value per row with its interval. Attributes: asked : a share that is aimed at, None without."""

    label: str
    values: Array
    low: Array
    high: Array
    share: bool
    asked: float | None


def sweep_figure(
    table: Table,
    show: str | None = None,
    along: str | None = None,
    by: str | None = None,
    at: Mapping[str, str] | None = None,
) -> Figure:
    """Draw one result of a sweep over its axes.

    show : a requirement, readout or species (default: the first there is, in that order); along, by : axes; at : axis -> value,
    rows with other values are left out. Raises InputError for unknown names and for more axes than a page can show.
    """
    keep = _rows_at(table, at or {})
    axes = _varying(table, keep)
    shown = _shown(table, show, keep)
    first, second, third = _roles(table, axes, along, by)
    with style():
        if second is not None and _is_map(first, second, third, by is not None):
            return _maps(table, shown, first, second, third)
        if second is not None and _is_scattered(first, second):
            return _scatter(table, shown, first, second)
        return _lines(table, shown, first, second, third)


def _fail(table: Table, key: str, text: str) -> InputError:
    return InputError(table.name, [Problem(key, text)])


def _rows_at(table: Table, at: Mapping[str, str]) -> NDArray[np.bool_]:
    keep = np.ones(len(table.values["point"]), dtype=bool)
    axes = {c.name: c for c in table.columns if c.role in ("axis", "derived")}
    for name, text in at.items():
        if name not in axes:
            raise _fail(table, "--at", f'"{name}" is no axis of this sweep; there are {", ".join(axes)}')
        column, values = axes[name], table.values[name]
        if column.kind == "text":
            match = values == text
        else:
            wanted = _number(table, text, column)
            match = np.isclose(values.astype(float), wanted, rtol=1e-6, atol=0)
        if not (keep & match).any():
            levels = ", ".join(dict.fromkeys(str(v) for v in values[keep]))[:200]
            raise _fail(table, "--at", f"no point has {name} = {text}; there are {levels}")
        keep &= match
    return keep


def _number(table: Table, text: str, column: TableColumn) -> float:
    """A value of --at in the column's unit: "0.5 mM", or a bare number."""
    try:
        return read_number(text)
    except QuantityError:
        pass
    unit = "" if column.unit == "1" else column.unit
    try:
        if column_of([text]).kind == "number" and column_of([text, f"1 {unit}" if unit else 1]):
            return float(in_column(text, Column("number", unit)))
    except (AxisError, QuantityError) as error:
        raise _fail(table, "--at", f'"{text}" does not fit {column.head}: {error}') from error
    raise _fail(table, "--at", f'"{text}" is no value of {column.head}')


def _varying(table: Table, keep: NDArray[np.bool_]) -> list[_Axis]:
    axes = []
    for column in table.columns:
        if column.role != "axis":
            continue
        values = table.values[column.name][keep]
        if column.kind == "text":
            words = tuple(dict.fromkeys(str(v) for v in values))
            positions = np.array([words.index(str(v)) for v in values], dtype=float)
            axis = _Axis(column.name, column.head, positions, np.arange(len(words), dtype=float), words)
        else:
            axis = _Axis(column.name, column.head, values.astype(float), np.unique(values.astype(float)))
        if len(axis.levels) > 1:
            axes.append(axis)
    if not axes:
        raise _fail(table, "", "holds one point for each axis: nothing varies, so there is nothing to draw")
    return axes


def _names(table: Table) -> dict[str, str]:
    """What can be shown -> the column that holds it, requirements first, then readouts, then species."""
    found: list[tuple[int, str, str]] = []
    for column in table.columns:
        name, _, what = column.name.rpartition(".")
        if column.role != "result":
            continue
        if what == "share":
            found.append((0, name, column.name))
        elif what == "mean":
            readout = any(c.name == f"{name}.end_defined" for c in table.columns)
            found.append((1 if readout else 2, name, column.name))
    return {name: column for _, name, column in sorted(found, key=lambda row: row[0])}


def _shown(table: Table, show: str | None, keep: NDArray[np.bool_]) -> _Shown:
    names = _names(table)
    if not names:
        raise _fail(table, "", "holds no results to draw; see `driblet sweep status`")
    results = [c.name for c in table.columns if c.role == "result" and c.kind != "text"]
    if show is None:
        show = next(iter(names))
    column = names.get(show, show if show in results else None)
    if column is None:
        raise _fail(table, "--show", f'"{show}" is nothing this table holds; there are {", ".join(names)}')
    values = table.values[column][keep].astype(float)
    name, _, what = column.rpartition(".")

    def beside(other: str) -> Array | None:
        full = f"{name}.{other}"
        return table.values[full][keep].astype(float) if full in table.values else None

    if what == "share":
        low, high, asked, exact = (beside(w) for w in ("share_low", "share_high", "share_asked", "exact"))
        bound = " (a bound: not looked at after every event)" if exact is not None and (exact == 0).any() else ""
        aim = None if asked is None or not np.isfinite(asked).any() else float(np.nanmax(asked))
        label = f"share of compartments: {name}{bound}"
        return _Shown(label, values, _or(low, values), _or(high, values), True, aim)
    label = f"{name} (mean over compartments and time)" if what == "mean" else column
    unit = table.column(column).unit
    label += "" if unit == "1" else f", {unit}"
    se, replicates = beside("se"), table.values["replicates"][keep].astype(float)
    if what != "mean" or se is None:
        return _Shown(label, values, values, values, False, None)
    half = np.where(replicates > 1, stdtrit(np.maximum(replicates - 1, 1), 0.5 + _CONFIDENCE / 2), np.nan) * se
    half = np.where(np.isfinite(half), half, 0.0)
    return _Shown(label, values, values - half, values + half, False, None)


def _or(values: Array | None, other: Array) -> Array:
    return other if values is None else values


def _roles(
    table: Table, axes: list[_Axis], along: str | None, by: str | None
) -> tuple[_Axis, _Axis | None, _Axis | None]:
    """Which axis runs along the page, which one across (or in colours), and which one over panels."""
    known = {axis.name: axis for axis in axes}
    for option, name in (("--along", along), ("--by", by)):
        if name is not None and name not in known:
            raise _fail(table, option, f'"{name}" is no axis that varies here; there are {", ".join(known)}')
    if along is not None and along == by:
        raise _fail(table, "--by", "is the axis of --along already")
    by_size = sorted(axes, key=lambda axis: (not axis.words, len(axis.levels)), reverse=True)
    first = known[along] if along else next(a for a in by_size if a.name != by)
    rest = [axis for axis in by_size if axis.name != first.name]
    second = known[by] if by else (rest[0] if rest else None)
    rest = [axis for axis in rest if second is None or axis.name != second.name]
    if len(rest) > 1 or (rest and len(rest[0].levels) > MOST_PANELS):
        names = ", ".join(f"{axis.name} ({len(axis.levels)} values)" for axis in axes)
        text = f"{len(axes)} axes vary: {names}; fix some with --at KEY=VALUE, and choose --along and --by"
        raise _fail(table, "", text)
    return first, second, rest[0] if rest else None


def _is_map(first: _Axis, second: _Axis, third: _Axis | None, chosen: bool) -> bool:
    if min(len(first.levels), len(second.levels)) < _MAP_SIDE:
        return False
    cells = len(first.levels) * len(second.levels) * (len(third.levels) if third else 1)
    return len(first.values) > 0.5 * cells and not (chosen and len(second.levels) <= MOST_LINES)


def _is_scattered(first: _Axis, second: _Axis) -> bool:
    return len(second.levels) > MOST_LINES and len(first.values) <= 0.5 * len(first.levels) * len(second.levels)


def _panels(third: _Axis | None, rows: int) -> list[tuple[str, NDArray[np.bool_]]]:
    if third is None:
        return [("", np.ones(rows, dtype=bool))]
    return [(f"{third.label} = {third.text(level)}", third.values == level) for level in third.levels]


def _page(third: _Axis | None, width: float, height: float) -> tuple[Figure, Sequence[Axes]]:
    number = 1 if third is None else len(third.levels)
    columns = min(number, 3)
    rows = -(-number // columns)
    figure = Figure(figsize=(width * columns, height * rows), layout="constrained")
    axes = figure.subplots(rows, columns, squeeze=False, sharex=True, sharey=True).ravel()
    for ax in axes[number:]:
        ax.set_visible(False)
    return figure, list(axes[:number])


def _scale(ax: Axes, which: str, axis: _Axis) -> None:
    target = ax.xaxis if which == "x" else ax.yaxis
    if axis.words:
        target.set_major_locator(FixedLocator(list(axis.levels)))
        target.set_major_formatter(
            FuncFormatter(lambda v, _: axis.text(round(v)) if 0 <= round(v) < len(axis.words) else "")
        )
    elif axis.log:
        (ax.set_xscale if which == "x" else ax.set_yscale)("log")
        step = max(1, -(-len(axis.levels) // 8))
        target.set_major_locator(FixedLocator(list(axis.levels[::step])))
        target.set_minor_locator(NullLocator())
        target.set_major_formatter(FuncFormatter(lambda v, _: f"{v:.3g}"))


def _lines(table: Table, shown: _Shown, first: _Axis, second: _Axis | None, third: _Axis | None) -> Figure:
    if second is not None and len(second.levels) > MOST_LINES:
        text = f"{second.name} has {len(second.levels)} values, too many lines: --by another axis, or --at fixes it"
        raise _fail(table, "--by", text)
    figure, pages = _page(third, 6.4 if third is None else 4.2, 4.2 if third is None else 3.4)
    groups: list[tuple[str, Any]] = [("", None)]
    if second is not None:
        groups = [(f"{second.text(level)}", level) for level in second.levels]
    for ax, (title, inside) in zip(pages, _panels(third, len(first.values)), strict=True):
        for colour, (name, level) in zip(COLOURS, groups, strict=False):
            chosen = inside if level is None else inside & (second.values == level)  # type: ignore[union-attr]
            order = np.flatnonzero(chosen)[np.argsort(first.values[chosen])]
            x, y = first.values[order], shown.values[order]
            ax.fill_between(x, shown.low[order], shown.high[order], color=colour, alpha=0.18, linewidth=0)
            ax.plot(x, y, color=colour, marker="o", markersize=4, linewidth=1.6, label=name or None)
        if shown.asked is not None:
            ax.axhline(shown.asked, color="#1F1F1F", linewidth=1.0, linestyle=(0, (5, 3)), label="asked for")
        if shown.share:
            ax.set_ylim(-0.02, 1.02)
        _scale(ax, "x", first)
        ax.set_xlabel(first.label)
        ax.set_title(title)
    pages[0].set_ylabel(shown.label)
    if second is not None or shown.asked is not None:
        pages[0].legend(title=second.label if second is not None else None, title_fontsize=8.5, loc="best")
    _heading(figure, table, "bands: 95 % intervals")
    return figure


def _maps(table: Table, shown: _Shown, first: _Axis, second: _Axis, third: _Axis | None) -> Figure:
    figure, pages = _page(third, 6.6 if third is None else 4.0, 4.8 if third is None else 3.4)
    finite = shown.values[np.isfinite(shown.values)]
    low, high = (0.0, 1.0) if shown.share else (float(finite.min()), float(finite.max())) if len(finite) else (0.0, 1.0)
    mesh = None
    for ax, (title, inside) in zip(pages, _panels(third, len(first.values)), strict=True):
        grid = np.full((len(second.levels), len(first.levels)), np.nan)
        column = np.searchsorted(first.levels, first.values[inside])
        grid[np.searchsorted(second.levels, second.values[inside]), column] = shown.values[inside]
        mesh = ax.pcolormesh(
            _edges(first), _edges(second), np.ma.masked_invalid(grid), cmap=_PAPER_TO_INK, vmin=low, vmax=high
        )
        if shown.share and np.isfinite(grid).all():
            _contours(ax, first, second, grid, shown.asked)
        _scale(ax, "x", first)
        _scale(ax, "y", second)
        ax.grid(False)
        ax.set_xlabel(first.label)
        ax.set_title(title)
    pages[0].set_ylabel(second.label)
    assert mesh is not None
    figure.colorbar(mesh, ax=list(pages), label=shown.label, pad=0.02, aspect=30).outline.set_visible(False)
    note = "one cell a point"
    if shown.share and shown.asked is not None:
        note += f"; heavy line: the share asked for, {shown.asked:.3g}"
    if not np.isfinite(shown.values).all():
        note += "; blank: no value"
    _heading(figure, table, note)
    return figure


def _contours(ax: Axes, first: _Axis, second: _Axis, grid: Array, asked: float | None) -> None:
    levels = [level for level in (0.05, 0.5, 0.95) if asked is None or abs(level - asked) > 0.02]
    inside = [level for level in levels if grid.min() < level < grid.max()]
    if inside:
        # light on the dark cells, dark on the light ones
        colours = ["#3B372F" if level < 0.6 else "#F6F2E9" for level in inside]
        lines = ax.contour(first.levels, second.levels, grid, levels=inside, colors=colours, linewidths=0.9)
        ax.clabel(lines, fmt="%.2g", fontsize=8)
    if asked is not None and grid.min() < asked < grid.max():
        lines = ax.contour(first.levels, second.levels, grid, levels=[asked], colors=["#D55E00"], linewidths=2.2)
        ax.clabel(lines, fmt="%.3g", fontsize=8.5)


def _edges(axis: _Axis) -> Array:
    levels = np.log(axis.levels) if axis.log else axis.levels
    middle = (levels[1:] + levels[:-1]) / 2
    edges = np.concatenate([[2 * levels[0] - middle[0]], middle, [2 * levels[-1] - middle[-1]]])
    return np.asarray(np.exp(edges) if axis.log else edges)


def _scatter(table: Table, shown: _Shown, first: _Axis, second: _Axis) -> Figure:
    figure, pages = _page(None, 6.6, 4.8)
    ax = pages[0]
    low, high = (0.0, 1.0) if shown.share else (None, None)
    dots = ax.scatter(
        first.values,
        second.values,
        c=shown.values,
        cmap=_PAPER_TO_INK,
        s=34,
        edgecolors="#8A8478",
        linewidths=0.5,
        vmin=low,
        vmax=high,
    )
    for which, axis in (("x", first), ("y", second)):
        if not axis.words and axis.levels[0] > 0 and axis.levels[-1] > 20 * axis.levels[0]:
            (ax.set_xscale if which == "x" else ax.set_yscale)("log")
    ax.set_xlabel(first.label)
    ax.set_ylabel(second.label)
    figure.colorbar(dots, ax=ax, label=shown.label, pad=0.02, aspect=30).outline.set_visible(False)
    _heading(figure, table, "one dot a point")
    return figure


def _heading(figure: Figure, table: Table, note: str) -> None:
    title = table.provenance.get("sweep", table.name)
    points = table.provenance.get("points", "")
    figure.suptitle(f"{title}\n", fontsize=11, x=0.01, ha="left")
    figure.text(0.01, 0.985, f"\n{note}; {points}" if points else f"\n{note}", fontsize=8, color="#5B564C", va="top")
