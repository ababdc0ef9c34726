"""Requirements of a system compiled for the kernels, and judged on the sampling grid where a kernel cannot."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from driblet.condition_forms import Form, Leaf, NotInFormError, Polynomial, form_of
from driblet.engines.requirement_arrays import (
    AND,
    AT_END,
    END_LEAF,
    FIRST_FAILURE,
    FIRST_MET,
    JUDGED_UNTIL,
    NEXT_WINDOW,
    ONCE,
    OR,
    OUTCOME,
    SINCE,
    THROUGHOUT,
    TIME_MET,
    TRUTH,
    UNDECIDED,
    Requirements,
)
from driblet.network import Network
from driblet.outcomes import EVENT, GRID, Outcomes
from driblet.readouts import extended
from driblet.system.expressions import Comparison, Junction, Negation, Operation, Truth
from driblet.system.model import Requirement, System

Array = NDArray[np.float64]
WHEN = {"throughout": THROUGHOUT, "at end": AT_END, "once": ONCE, "on average": AT_END}
_EXACT_INTEGER = 2**53
_ROUNDING = 1e-12


@dataclass(frozen=True)
class CompiledRequirements:
    """The requirements of a system in the form kernels take, and those that only the grid can judge.

    Attributes: names : in the order of the file; in_kernel : indices of those a kernel judges; by_grid : index -> why not.
    """

    system: System
    network: Network
    duration_s: float
    in_kernel: tuple[int, ...]
    forms: tuple[Form, ...]
    by_grid: dict[int, str]

    @classmethod
    def of(cls, system: System, network: Network, duration_s: float) -> CompiledRequirements:
        """Compile the requirements of `system` for a run of `duration_s`."""
        forms, by_grid = {}, {}
        for q, requirement in enumerate(system.requirements):
            try:
                forms[q] = form_of(system, requirement.must.root, requirement.averaged)
            except NotInFormError as error:
                by_grid[q] = str(error)
        in_kernel = sorted(forms, key=lambda q: system.requirements[q].averaged)
        return cls(system, network, duration_s, tuple(in_kernel), tuple(forms[q] for q in in_kernel), by_grid)

    def resolutions(self, kernel: str = EVENT) -> tuple[str, ...]:
        """For each requirement where its truth is looked at; kernel : EVENT or LEAP, what the engine's kernel does."""
        return tuple(GRID if q in self.by_grid else kernel for q in range(len(self.system.requirements)))

    def recorder(self, omega: Array, stop_when_decided: bool = False) -> Requirements | None:
        """The kernel's arrays for replicates of the given copies per mol/L, nothing judged yet; None where it judges none.

        A replicate stops early only where every requirement is judged in the kernel.
        """
        if not self.in_kernel:
            return None
        tables = _Tables(self.network, len(omega))
        for form, q in zip(self.forms, self.in_kernel, strict=True):
            tables.add(form, self.system.requirements[q], self.duration_s, omega)
        return tables.arrays(stop_when_decided and not self.by_grid)

    def outcomes(
        self, recorded: Requirements | None, counts: NDArray[np.int64], time_s: Array, omega: Array
    ) -> Outcomes:
        """Every outcome, those of the kernel as recorded, the others from the sampled counts, (R, G, N)."""
        out = Outcomes.empty(len(omega), len(self.system.requirements))
        for k, q in enumerate(self.in_kernel):
            assert recorded is not None
            record = recorded.record[:, k]
            out.met[:, q] = record[:, OUTCOME]
            out.first_failure_s[:, q], out.first_met_s[:, q] = record[:, FIRST_FAILURE], record[:, FIRST_MET]
            out.time_met_s[:, q], out.judged_until_s[:, q] = record[:, TIME_MET], record[:, JUDGED_UNTIL]
        for q in self.by_grid:
            _copy(out, q, judge_on_grid(self.system, self.system.requirements[q], counts, time_s, omega))
        return out


def _copy(target: Outcomes, q: int, source: Outcomes) -> None:
    for name in ("met", "first_failure_s", "first_met_s", "time_met_s", "judged_until_s"):
        getattr(target, name)[:, q] = getattr(source, name)[:, 0]


def look_at_all(
    requirements: Requirements, rows: NDArray[np.int64], counts: Array, time_s: float, opening: bool
) -> None:
    """Judge replicates at the start of a run (`opening`), or where something but a firing changed them.

    rows : which; counts : (species, R).
    """
    from driblet.engines.judging import judge_rows

    with np.errstate(all="ignore"):  # for kernels that run as plain Python
        judge_rows(requirements, rows, np.ascontiguousarray(counts.T), time_s, opening)


def conclude_all(requirements: Requirements, end_s: Array) -> None:
    """The outcomes of replicates whose records end at end_s, (R,)."""
    from driblet.engines.judging import close_judgement

    with np.errstate(all="ignore"):
        close_judgement(requirements, end_s)


class _Tables:
    """Collects requirements into the flat arrays of `Requirements`; those that judge moments come first."""

    def __init__(self, network: Network, replicates: int) -> None:
        self.network, self.replicates = network, replicates
        self.species = {name: i for i, name in enumerate(network.species)}
        self.rows: list[tuple[int, ...]] = []
        self.span: list[tuple[float, float, float]] = []
        self.averaged: list[bool] = []
        self.leaf: list[tuple[int, int, int, int]] = []
        self.term_start, self.factor_start = [0], [0]
        self.factor_species: list[int] = []
        self.factor_offset: list[float] = []
        self.program: list[int] = []
        self.coefficient: list[Array] = []
        self.needed: list[set[int]] = []

    def add(self, form: Form, requirement: Requirement, duration_s: float, omega: Array) -> None:
        """Add one requirement; omega : (R,)."""
        self.needed.append(set())
        first_leaf, first_code = len(self.leaf), len(self.program)
        self._push(form, omega, first_leaf)
        start, end = requirement.span_s(duration_s)
        window, windows = windows_of(requirement, start, end)
        when = WHEN[requirement.when]
        self.rows.append((first_leaf, len(self.leaf), first_code, len(self.program), when, windows))
        self.span.append((start, min(end, duration_s), window))
        self.averaged.append(requirement.averaged)

    def _push(self, form: Form, omega: Array, first_leaf: int) -> None:
        if not isinstance(form, Leaf):
            self._push(form.left, omega, first_leaf)
            self._push(form.right, omega, first_leaf)
            self.program.append(AND if form.operator == "and" else OR)
            return
        self.program.append(len(self.leaf) - first_leaf)
        first = len(self.term_start) - 1
        self.leaf.append((form.kind, int(form.strict), first, first + len(form.polynomials) - 1))
        for polynomial in form.polynomials:
            for factors, _ in polynomial.terms:
                self.factor_species += [self.species[name] for name, _ in factors]
                self.factor_offset += [float(k) for _, k in factors]
                self.factor_start.append(len(self.factor_species))
            self.term_start.append(len(self.factor_start) - 1)
            self.needed[-1] |= {self.species[name] for name in polynomial.species}
        self.coefficient.append(coefficients(form.polynomials, omega))

    def arrays(self, stops: bool) -> Requirements:
        """The arrays, nothing judged yet."""
        affected = [
            [q for q, needed in enumerate(self.needed) if needed & {i for i, _ in channel.change}]
            for channel in self.network.channels
        ]
        R, Q, L = self.replicates, len(self.rows), len(self.leaf)
        moments = sum(not averaged for averaged in self.averaged)
        record = np.full((R, Q, 8), np.nan)
        record[:, :, [TRUTH, SINCE, NEXT_WINDOW, TIME_MET]] = 0.0
        record[:, :, OUTCOME] = UNDECIDED
        return Requirements(
            moments=moments,
            moment_leaves=self.rows[moments - 1][END_LEAF] if moments else 0,
            stops=stops,
            affected_start=whole(np.cumsum([0, *map(len, affected)])),
            affected=whole([q for row in affected for q in row]),
            table=whole(self.rows).reshape(Q, 6),
            span=np.array(self.span, dtype=float).reshape(Q, 3),
            leaf=whole(self.leaf).reshape(L, 4),
            term_start=whole(self.term_start),
            factor_start=whole(self.factor_start),
            factor_species=whole(self.factor_species),
            factor_offset=np.array(self.factor_offset, dtype=float),
            program=whole(self.program),
            coefficient=np.ascontiguousarray(np.hstack([np.zeros((R, 0)), *self.coefficient])),
            leaf_value=np.zeros((R, L)),
            leaf_sum=np.zeros((R, L)),
            leaf_truth=np.zeros((R, L)),
            record=record,
            integrated_to=np.zeros(R),
            next_edge=np.full(R, np.inf),
            halt=np.full(R, np.inf),
        )


def whole(values: object) -> NDArray[np.int64]:
    """As a contiguous array of int64."""
    return np.ascontiguousarray(np.array(values, dtype=np.int64))


def coefficients(polynomials: Sequence[Polynomial], omega: Array) -> Array:
    """The coefficients of all terms in each replicate, shape=(R, T), on one common scale, which no sign depends on.

    Where only counts enter they are whole numbers, so that a count that just meets a decimal threshold does meet it.
    """
    values = [value for p in polynomials for value in p.terms.values()]
    powers = np.array([power for p in polynomials for _, power in p.terms])
    if not values:
        return np.zeros((len(omega), 0))
    common = math.lcm(*(v.denominator for v in values))
    if common * max(abs(v) for v in values) < _EXACT_INTEGER:
        values = [v * common for v in values]
    powers = powers - powers.max()
    scaled = np.array([float(v) for v in values]) * omega[:, None] ** powers
    # a power of two takes the largest coefficient to 1 and changes no other bit
    _, exponent = np.frexp(np.abs(scaled).max(axis=1))
    return np.asarray(scaled if not powers.any() else np.ldexp(scaled, -exponent[:, None]))


def judge_on_grid(
    system: System, requirement: Requirement, counts: NDArray[np.int64], time_s: Array, omega: Array
) -> Outcomes:
    """Outcomes of one requirement as the sampled states show them, each taken to last until the next sample.

    counts : (R, G, N); time_s : (G,); omega : (R,). Arrays of shape (R, 1).
    """
    start, end = requirement.span_s(float(time_s[-1]))
    omega = np.asarray(omega, dtype=float)[:, None]
    if requirement.averaged:
        edge = _window_edges(requirement, start, end)
        mean = _Means(system, counts, time_s, omega, edge)
        truth = _truth(requirement.must.root, mean.difference)
        begin, moment = edge[:-1], edge[1:]
    else:
        inside = (time_s <= end * (1 + _ROUNDING)) & (np.append(time_s[1:], np.inf) > start)
        truth = _truth(requirement.must.root, lambda c: extended(system, _minus(c), counts[:, inside], omega))
        begin = np.maximum(time_s[inside], start)
        moment = begin
        edge = np.append(begin, end)
    spans = np.diff(edge)
    R = len(truth)
    first = {}
    for value in (True, False):
        hit = truth == value
        first[value] = np.where(hit.any(axis=1), moment[hit.argmax(axis=1)], np.nan)[:, None]
    every = {THROUGHOUT: np.all(truth, axis=1), ONCE: np.any(truth, axis=1), AT_END: truth[:, -1]}
    return Outcomes(
        np.array(every[WHEN[requirement.when]], dtype=np.int8)[:, None],
        first[False],
        first[True],
        (truth * spans).sum(axis=1)[:, None],
        np.full((R, 1), end),
    )


def windows_of(requirement: Requirement, start: float, end: float) -> tuple[float, int]:
    """What a requirement averages over, s, and how often that fits into its span; the last window takes the rest."""
    window = requirement.averaged_over_s or end - start
    return window, max(1, int((end - start) / window * (1 + _ROUNDING)))


def _window_edges(requirement: Requirement, start: float, end: float) -> Array:
    window, windows = windows_of(requirement, start, end)
    return np.append(start + window * np.arange(windows), end)


def _minus(comparison: Comparison) -> Operation:
    return Operation("-", comparison.left, comparison.right, comparison.left.dimension)


def _truth(root: Truth, difference) -> NDArray[np.bool_]:  # type: ignore[no-untyped-def]
    """Truth of a condition; difference : comparison -> left - right. What is undefined meets nothing, under "not" too."""

    def walk(node: Truth, wanted: bool) -> NDArray[np.bool_]:
        if isinstance(node, Negation):
            return walk(node.inner, not wanted)
        if isinstance(node, Junction):
            left, right = walk(node.left, wanted), walk(node.right, wanted)
            return left & right if (node.operator == "and") == wanted else left | right
        value = difference(node)
        with np.errstate(invalid="ignore"):
            met = {"<": value < 0, "<=": value <= 0, ">": value > 0, ">=": value >= 0}[node.operator]
        return np.asarray(met if wanted else ~met & ~np.isnan(value))

    return walk(root, True)


class _Means:
    """Time averages of sampled values over windows, each value lasting until the next sample."""

    def __init__(self, system: System, counts: NDArray[np.int64], time_s: Array, omega: Array, edge: Array) -> None:
        self.system, self.counts, self.omega = system, counts, omega
        # overlap of each sampling interval with each window, s, shape=(G, W)
        ends = np.append(time_s[1:], time_s[-1])
        low = np.maximum(time_s[:, None], edge[:-1])
        self.overlap = np.maximum(np.minimum(ends[:, None], edge[1:]) - low, 0.0)

    def difference(self, comparison: Comparison) -> Array:
        """Mean of left - right over each window, infinite or NaN where a value in it is, shape=(R, W)."""
        values = extended(self.system, _minus(comparison), self.counts, self.omega)
        total = np.where(np.isfinite(values), values, 0.0) @ self.overlap
        for mark in (np.inf, -np.inf, np.nan):
            there = np.isnan(values) if np.isnan(mark) else values == mark
            with np.errstate(invalid="ignore"):  # both infinities in one window: undefined
                total = np.where(there @ self.overlap > 0, total + mark, total)
        return np.asarray(total / self.overlap.sum(axis=0))
