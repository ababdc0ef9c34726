"""What a check reports: rows of tests, ratios and energies, and the result as a whole."""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple


class CheckRow(NamedTuple):
    """One test. p is corrected for the number of tests; samples counts replicates."""

    name: str
    hypothesis: str
    statistic: float
    p: float
    samples: int


class RatioRow(NamedTuple):
    """One reaction's ratio of mean concentrations, products over reactants, in (mol/L)^order_change.

    measured +- standard_error from the run; expected : the exact finite-count value of that very quantity; K : K'.
    """

    reaction: str
    measured: float
    standard_error: float
    expected: float
    K: float
    order_change: int


class EnergyRow(NamedTuple):
    """One reaction's energy as its firings show it, kJ/mol; None where it fired too rarely.

    stated : of the file; measured +- standard_error by this reaction alone; closed_error : under closed cycles, None where
    the run is blind to this energy; number_error : the standard error with which the mere number of firings tells it;
    detectable : the smallest error that this run would have exposed.
    """

    name: str
    stated: float
    measured: float | None
    standard_error: float | None
    closed_error: float | None
    number_error: float | None = None
    detectable_kJ_per_mol: float | None = None


@dataclass(frozen=True)
class CheckResult:
    """What a check found. verdict : "consistent", "inconsistent" or "cannot answer"; reason : one sentence."""

    verdict: str
    reason: str
    tests: tuple[CheckRow, ...] = ()
    ratios: tuple[RatioRow, ...] = ()
    energies: tuple[EnergyRow, ...] = ()
    notes: tuple[str, ...] = ()
    window_s: tuple[float, float] | None = None
