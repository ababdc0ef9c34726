"""How commands print requirements: one table for all of them."""

from __future__ import annotations

from typing import TYPE_CHECKING

from rich.table import Table

from driblet.commands.screen import table

MOST_VALUES_READ = 20_000_000

if TYPE_CHECKING:
    from driblet.results import Run
    from driblet.shares import ShareRow
    from driblet.survival import Interval


def percent(share: float) -> str:
    """A share in per cent for people; as many digits as tell it from none and from all."""
    digits = 1 if 0.001 <= share <= 0.999 or share in (0.0, 1.0) else 3
    return f"{100 * share:.{digits}f}".removesuffix(".0")


def percents(interval: Interval) -> str:
    """A share and its interval."""
    return f"{percent(interval.value)} ({percent(interval.low)}–{percent(interval.high)})"


def requirement_table(rows: list[ShareRow]) -> Table:
    """The share of compartments that meets each requirement, beside what is asked for."""
    return table(
        "requirements, % of compartments that meet them (95 % interval)",
        ["requirement", "must", "when", "found", "asked", "", "looked at"],
        [
            [
                row.name,
                row.must,
                row.when,
                f"{'at most ' if row.bound == 'upper bound' else 'at least ' if row.bound == 'lower bound' else ''}"
                f"{percents(row.share)}",
                "–" if row.asked is None else percent(row.asked),
                verdict(row),
                looked_at(row),
            ]
            for row in rows
        ],
        left=3,
    )


def verdict(row: ShareRow) -> str:
    """Whether the asked share is reached, and how sure that is."""
    if row.met is None:
        return ""
    return ("reached" if row.met else "missed") + ("" if row.certain else "?")


def looked_at(row: ShareRow) -> str:
    """Where the truth of the condition was looked at, for people."""
    from driblet.outcomes import LOOKED_AT

    return LOOKED_AT[row.looked_at] + (f": {row.bound}" if row.bound else "")


def requirement_notes(rows: list[ShareRow]) -> list[str]:
    """What a reader must know beside the table, a line each."""
    notes = []
    for row in rows:
        if row.met is not None and not row.certain:
            more = f"; about {row.needed:,} compartments would tell" if row.needed else ""
            notes.append(f"{row.name}: the interval holds the asked {percent(row.asked or 0.0)} %, so it is open{more}")
        if row.bound in ("upper bound", "lower bound"):
            what = "failures" if row.bound == "upper bound" else "successes"
            why = f" ({row.why})" if row.why else ""
            notes.append(f"{row.name}: {what} between two looks go unseen, so the share is {_article(row.bound)}{why}")
        if row.undecided:
            notes.append(
                f"{row.name}: {row.undecided} compartments stopped before it was decided; counted as not meeting it"
            )
    return notes


def readout_notes(run: Run) -> list[str]:
    """Readouts that are undefined in some samples, a line each; not asked of very large runs."""
    import numpy as np

    notes: list[str] = []
    if len(run.replicate) * len(run.time_s) > MOST_VALUES_READ:
        return notes
    for readout in run.system.readouts:
        values = run.readout(readout.name)
        undefined = int((~np.isfinite(values)).sum())
        if undefined:
            energy = readout.expression.root.dimension == (0, 1)
            why = "a reactant is exhausted" if energy else "it divides by zero"
            notes.append(f"{readout.name}: undefined in {percent(undefined / values.size)} % of samples, where {why}")
    return notes


def _article(bound: str) -> str:
    return ("an " if bound[0] == "u" else "a ") + bound
