"""What a sweep keeps of each point: one number per column, from the ensemble that was simulated there.

The replicate is the sampling unit. a_r being the time average of a count or readout in replicate r after the burn-in (the
second half of the run where none is stated) and v_r its variance there: mean = mean of a_r over replicates; se = its standard
error; sd_between = standard deviation of a_r over replicates; sd_within = root of the mean v_r; end_... are taken at the end
of the run. Averages of counts are exact time integrals; those of readouts, and variances, are over samples. Of requirements:
the share of replicates that meets them with Wilson's interval, and when a share of replicates had failed (or, of "once", had
succeeded) by Kaplan and Meier, from the start of the span; empty where that was not reached.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.outcomes import EVENT
from driblet.results import Run
from driblet.shares import shares
from driblet.survival import kaplan_meier
from driblet.system import System
from driblet.system.model import Requirement

Array = NDArray[np.float64]
QUANTILES = (0.05, 0.5, 0.95)
TIMES_OF_SHARES = (0.05, 0.1, 0.5, 0.9)
_OF_SPECIES = ("mean", "se", "sd_between", "sd_within", "end_mean", "end_sd")
_OF_READOUT = (*_OF_SPECIES, *(f"end_q{round(100 * q):02d}" for q in QUANTILES), "end_defined")
_OF_REQUIREMENT = ("share", "share_low", "share_high", "share_asked", "undecided", "exact")


class SummaryColumn(NamedTuple):
    """A column of results. Attributes: name : `ATP.mean`; unit : "1" for plain numbers."""

    name: str
    unit: str


def summary_columns(system: System) -> list[SummaryColumn]:
    """The columns that a point of this system has; states of enzymes have none of their own."""
    columns = [SummaryColumn("replicates", "1"), SummaryColumn("events", "1")]
    for requirement in system.requirements:
        columns += [SummaryColumn(f"{requirement.name}.{what}", "1") for what in _OF_REQUIREMENT]
        columns += [SummaryColumn(f"{requirement.name}.{what}", "s") for what in _times(requirement)]
    for readout in system.readouts:
        columns += [
            SummaryColumn(f"{readout.name}.{what}", "1" if what == "end_defined" else readout.expression.unit)
            for what in _OF_READOUT
        ]
    for species in system.free_species:
        if species.enzyme is None:
            columns += [SummaryColumn(f"{species.name}.{what}", "copies") for what in _OF_SPECIES]
    return columns


def _times(requirement: Requirement) -> list[str]:
    """Names of the columns of times; "at end" and "on average" have no moment of failure."""
    if requirement.when not in ("throughout", "once"):
        return []
    what = "failed" if requirement.when == "throughout" else "succeeded"
    names = [f"{what}_q{round(100 * q):02d}" for q in TIMES_OF_SHARES]
    return [*names, f"{what}_q50_low", f"{what}_q50_high"]


def summarise(run: Run, system: System) -> dict[SummaryColumn, float]:
    """The numbers of one point; NaN where there is nothing to average. `run` is the point's ensemble, complete."""
    system = run.system if system.enzymes else system  # as it was simulated: lumped enzymes have no states
    values: list[float] = [float(len(run.replicate)), float(np.sum(run.events))]
    values += _requirements(run, system)
    late = run.time_s >= _averages_from(run) * (1 - 1e-12)
    for readout in system.readouts:
        series = run.readout(readout.name)
        series = np.where(np.isfinite(series), series, np.nan)
        end = series[:, -1]
        values += _moments(*_along_time(series[:, late]), end)
        defined = end[np.isfinite(end)]
        values += [float(np.quantile(defined, q)) if len(defined) else np.nan for q in QUANTILES]
        values.append(len(defined) / len(end))
    sums, counts = run.sums, run.counts
    for i, species in enumerate(system.free_species):
        if species.enzyme is None:
            average, variance = _along_time(counts[:, late, i].astype(float))
            if sums is not None:
                average = sums.mean()[:, i]
            values += _moments(average, variance, counts[:, -1, i].astype(float))
    return dict(zip(summary_columns(system), values, strict=True))


def _averages_from(run: Run) -> float:
    return float(run.time_s[-1]) / 2 if run.sums is None else run.sums.span_s[0]


def _moments(average: Array, variance: Array, end: Array) -> list[float]:
    """The six numbers of _OF_SPECIES. All of shape (R,); undefined values are NaN and left out."""
    average, variance, end = (values[np.isfinite(values)] for values in (average, variance, end))
    between = _sd(average)
    return [
        float(np.mean(average)) if len(average) else np.nan,
        between / np.sqrt(len(average)) if len(average) else np.nan,
        between,
        float(np.sqrt(np.mean(variance))) if len(variance) else np.nan,
        float(np.mean(end)) if len(end) else np.nan,
        _sd(end),
    ]


def _along_time(series: Array) -> tuple[Array, Array]:
    """Average and variance over samples of each replicate, where defined. series : (R, times); shape=(R,) each."""
    defined = np.isfinite(series)
    number = defined.sum(axis=1)
    plain = np.where(defined, series, 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        average = plain.sum(axis=1) / number
        variance = (np.where(defined, series - average[:, None], 0.0) ** 2).sum(axis=1) / number
    return average, variance


def _sd(values: Array) -> float:
    return float(np.std(values, ddof=1)) if len(values) > 1 else np.nan


def _requirements(run: Run, system: System) -> Iterator[float]:
    if not system.requirements:
        return
    outcomes, duration = run.outcomes, float(run.time_s[-1])
    for q, (row, requirement) in enumerate(zip(shares(run), system.requirements, strict=True)):
        yield from row.share
        yield np.nan if row.asked is None else row.asked
        yield float(row.undecided)
        yield float(row.looked_at == EVENT)
        if not _times(requirement):
            continue
        moment = (outcomes.first_failure_s if requirement.when == "throughout" else outcomes.first_met_s)[:, q]
        seen = ~np.isnan(moment)
        until = np.where(seen, moment, outcomes.judged_until_s[:, q])
        curve = kaplan_meier(np.maximum(until - requirement.span_s(duration)[0], 0.0), seen)
        quantiles = [curve.quantile(share) for share in TIMES_OF_SHARES]
        half = quantiles[TIMES_OF_SHARES.index(0.5)]
        for value in (*(one.value for one in quantiles), half.low, half.high):
            yield value if np.isfinite(value) else np.nan
