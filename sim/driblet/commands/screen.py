"""How commands print: one console, one table look, numbers with sensible digits, JSON without NaN."""

from __future__ import annotations

import json
import math
import sys
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Any

import click
from rich import box
from rich.console import Console
from rich.table import Table

from driblet.errors import one_problem
from driblet.quantities import QuantityError, read_quantity

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from driblet.system import System

CAUTION = "A simulation is a design aid: confirm by experiment; no basis for medical or dosing decisions."


def console() -> Console:
    """A console on standard output; plain text, 100 columns wide, when that is not a terminal."""
    # no markup: titles and labels are the user's, and a label "[/x]" would be read as a closing tag
    width = None if sys.stdout.isatty() else 100
    return Console(file=sys.stdout, width=width, highlight=False, emoji=False, markup=False)


def table(title: str, columns: Sequence[str], rows: Iterable[Sequence[str]], left: int = 1) -> Table:
    """A table whose first `left` columns are text and the rest numbers."""
    made = Table(title=title, title_justify="left", title_style="bold", box=box.SIMPLE_HEAD, pad_edge=False)
    for i, column in enumerate(columns):
        made.add_column(column, justify="left" if i < left else "right", overflow="fold")
    for row in rows:
        made.add_row(*row)
    return made


def number(value: float | None, digits: int = 4) -> str:
    """A number for people: `digits` significant, "–" for None or NaN."""
    if value is None or math.isnan(value):
        return "–"
    if math.isinf(value):
        return "∞" if value > 0 else "−∞"
    if value == 0:
        return "0"
    if 1e4 <= abs(value) < 1e7:
        return f"{value:,.0f}".replace("-", "−")
    return f"{value:.{digits}g}".replace("-", "−")


def species_rows(system: System, counts: NDArray[np.int64]) -> list[tuple[str, NDArray[np.int64]]]:
    """(label, copies, shape=(replicates,)) of each species of the file, then of each enzyme in all of its states.

    counts : shape=(replicates, free species).
    """
    free = system.free_species
    rows = [(s.label, counts[:, i]) for i, s in enumerate(free) if s.enzyme is None]
    for enzyme in system.enzymes:
        states = [i for i, s in enumerate(free) if s.enzyme == enzyme.name]
        rows.append((f"{enzyme.label}, all states", counts[:, states].sum(axis=1)))
    return rows


def duration(seconds: float) -> str:
    """A time span for people."""
    for limit, divisor, unit in ((1e-3, 1e-6, "µs"), (1.0, 1e-3, "ms"), (120.0, 1.0, "s"), (7200.0, 60.0, "min")):
        if seconds < limit:
            return f"{seconds / divisor:.3g} {unit}"
    return f"{seconds / 3600:.3g} h" if seconds < 172800 else f"{seconds / 86400:.3g} days"


def print_json(value: Any) -> None:
    """Standard JSON on standard output; a number that is not finite becomes null."""
    print(json.dumps(_finite(value), indent=2, ensure_ascii=False))


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(k): _finite(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(v) for v in value]
    if hasattr(value, "item") and not isinstance(value, str):
        value = value.item()
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def time_option(context: click.Context, parameter: click.Parameter, value: str | None) -> float | None:
    """A click callback that reads "20 min" as seconds."""
    if value is None:
        return None
    name = parameter.opts[-1]
    try:
        seconds = read_quantity(value).to("time")
    except QuantityError as error:
        raise one_problem("command line", name, str(error)) from error
    if not seconds > 0:
        raise one_problem("command line", name, f'"{value}" will not do: a time above zero is needed')
    return seconds
