"""What a sweep keeps of each point: one number per column, from the ensemble that was simulated there.

The replicate is the sampling unit. x_r(t) being a count or a readout in replicate r, a_r its average over the second half of
the run and v_r its variance there: mean = mean of a_r over replicates; se = its standard error; sd_between = standard
deviation of a_r over replicates; sd_within = root of the mean v_r; end_... are taken at the end of the run.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.results import Run
from driblet.system import System

Array = NDArray[np.float64]
QUANTILES = (0.05, 0.5, 0.95)
_OF_SPECIES = ("mean", "se", "sd_between", "sd_within", "end_mean", "end_sd")
_OF_READOUT = (*_OF_SPECIES, *(f"end_q{round(100 * q):02d}" for q in QUANTILES), "end_defined")


class SummaryColumn(NamedTuple):
    """A column of results. Attributes: name : `ATP.mean`; unit : "1" for plain numbers."""

    name: str
    unit: str


def summary_columns(system: System) -> list[SummaryColumn]:
    """The columns that a point of this system has."""
    columns = [SummaryColumn("replicates", "1"), SummaryColumn("events", "1")]
    for species in system.free_species:
        columns += [SummaryColumn(f"{species.name}.{what}", "copies") for what in _OF_SPECIES]
    for readout in system.readouts:
        columns += [
            SummaryColumn(f"{readout.name}.{what}", "1" if what == "end_defined" else readout.expression.unit)
            for what in _OF_READOUT
        ]
    return columns


def summarise(run: Run, system: System) -> dict[SummaryColumn, float]:
    """The numbers of one point; NaN where there is nothing to average. `run` is the point's ensemble, complete."""
    values: list[float] = [float(len(run.replicate)), float(np.sum(run.events))]
    late = run.time_s >= run.time_s[-1] / 2
    counts = run.counts
    for i in range(len(run.species)):
        values += _moments(counts[:, late, i].astype(float), counts[:, -1, i].astype(float))
    for readout in system.readouts:
        series = run.readout(readout.name)
        series = np.where(np.isfinite(series), series, np.nan)
        end = series[:, -1]
        values += _moments(series[:, late], end)
        defined = end[np.isfinite(end)]
        values += [float(np.quantile(defined, q)) if len(defined) else np.nan for q in QUANTILES]
        values.append(len(defined) / len(end))
    return dict(zip(summary_columns(system), values, strict=True))


def _moments(series: Array, end: Array) -> list[float]:
    """The six numbers of _OF_SPECIES. series : (R, times of the second half); end : (R,); undefined values are NaN."""
    average, variance = _along_time(series)
    average, variance = average[np.isfinite(average)], variance[np.isfinite(variance)]
    between = _sd(average)
    return [
        float(np.mean(average)) if len(average) else np.nan,
        between / np.sqrt(len(average)) if len(average) else np.nan,
        between,
        float(np.sqrt(np.mean(variance))) if len(variance) else np.nan,
        float(np.mean(end[np.isfinite(end)])) if np.isfinite(end).any() else np.nan,
        _sd(end[np.isfinite(end)]),
    ]


def _along_time(series: Array) -> tuple[Array, Array]:
    """Average and variance over time of each replicate, where defined; shape=(R,) each."""
    defined = np.isfinite(series)
    number = defined.sum(axis=1)
    plain = np.where(defined, series, 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        average = plain.sum(axis=1) / number
        variance = (np.where(defined, series - average[:, None], 0.0) ** 2).sum(axis=1) / number
    return average, variance


def _sd(values: Array) -> float:
    return float(np.std(values, ddof=1)) if len(values) > 1 else np.nan
