"""One system simulated in two ways, its enzymes treated or its engine chosen differently: do compartments agree?

Totals of each species (free and bound) and the readouts are compared at several times. Means by Welch's t, variances by
Welch's t of the distances from the median (Brown & Forsythe, J. Am. Stat. Assoc. 69:364, 1974: right for skewed counts, where
tests of the variances themselves are not), distributions by the two-sample Kolmogorov-Smirnov distance (conservative for
counts). All tests together carry Holm's correction.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.special import kolmogorov, stdtr

from driblet.ensemble import run
from driblet.errors import one_problem
from driblet.readouts import copies_in
from driblet.results import Run
from driblet.statistics import holm
from driblet.system import System
from driblet.system.expressions import Reference
from driblet.treatments import lumping_facts

FALSE_ALARM_RATE = 0.05
TIMES = 10
FEWEST = 20  # compartments of each, for standard errors that mean something
Array = NDArray[np.float64]


class Difference(NamedTuple):
    """One quantity at one time under two treatments, the second against the first. p_* : Holm-corrected.

    distance : Kolmogorov-Smirnov; noise : the distance that chance alone exceeds in 5 % of single tests.
    """

    quantity: str
    time_s: float
    mean: tuple[float, float]
    sd: tuple[float, float]
    t_mean: float
    p_mean: float
    t_variance: float
    p_variance: float
    distance: float
    noise: float
    p_distance: float

    @property
    def smallest_p(self) -> float:
        """The smallest corrected p of its three tests."""
        return min(self.p_mean, self.p_variance, self.p_distance)

    @property
    def rank(self) -> tuple[float, float]:
        """Lower for what departs more, before any correction where that leaves nothing."""
        return self.smallest_p, -max(abs(self.t_mean), abs(self.t_variance), 2.0 * self.distance / self.noise)


class Way(NamedTuple):
    """A way to simulate a system: how enzymes are treated, None for as the file says, and the engine."""

    treatment: str | Mapping[str, str] | None = None
    engine: str = "exact"


class Turnovers(NamedTuple):
    """Net turnovers of a reaction by the end: mean and variance over mean, measured and as the enzymes predict at the start."""

    reaction: str
    mean: tuple[float, float]
    fano: tuple[float, float]
    predicted: tuple[float, float] | None


@dataclass(frozen=True)
class Comparison:
    """What came out. ways : what each is called; events : of both; runs : both, in memory; replicates : of each."""

    ways: tuple[str, str]
    rows: tuple[Difference, ...]
    turnovers: tuple[Turnovers, ...]
    events: tuple[int, int]
    runs: tuple[Run, Run]
    replicates: int

    @property
    def verdict(self) -> str:
        """ "consistent", "inconsistent", or "cannot answer" where nothing varies or changes."""
        if not self.rows:
            return "cannot answer"
        return "inconsistent" if min(r.smallest_p for r in self.rows) < FALSE_ALARM_RATE else "consistent"

    @property
    def reason(self) -> str:
        """The verdict in one sentence."""
        first, second = self.ways
        if not self.rows:
            return "nothing changes in this system, so there is nothing to compare"
        worst = min(self.rows, key=lambda r: r.smallest_p)
        if self.verdict == "inconsistent":
            which = {worst.p_mean: "mean", worst.p_variance: "variance", worst.p_distance: "distribution"}
            return (
                f"the {which[worst.smallest_p]} of {worst.quantity} at {worst.time_s:g} s departs "
                f"(corrected p = {worst.smallest_p:.2g}): {second} is not {first} here"
            )
        return (
            f"no departure of {second} from {first} in {3 * len(self.rows)} tests over {self.replicates} compartments each "
            f"(smallest corrected p = {worst.smallest_p:.2g})"
        )

    def worst(self) -> list[Difference]:
        """For each quantity the time at which it departs most."""
        found: dict[str, Difference] = {}
        for row in self.rows:
            if row.quantity not in found or row.rank < found[row.quantity].rank:
                found[row.quantity] = row
        return list(found.values())


def compare(
    system: System,
    ways: tuple[Way, Way],
    replicates: int,
    duration_s: float,
    seed: int = 0,
    threads: int | None = None,
) -> Comparison:
    """Simulate `replicates` compartments in each way, independently, and compare them at TIMES times.

    Raises InputError for bad treatments or engines, and for too few replicates.
    """
    if replicates < FEWEST:
        raise one_problem("compare", "replicates", f"{replicates} are too few; at least {FEWEST} of each are needed")
    if not system.enzymes and ways[0].engine == ways[1].engine:
        text = "has none, so there are no treatments to compare; engines can be: --engines exact,leap"
        raise one_problem(system.source or "compare", "enzymes", text)
    made = [
        run(
            system,
            replicates=replicates,
            duration=duration_s,
            sample_every=duration_s / TIMES,
            seed=seed,
            key=key,
            treatment=way.treatment if system.enzymes else None,
            engine=way.engine,
            leap_anyway=True,
            record="trajectories",
            statistics=False,
            estimate_error=False,
            threads=threads,
        )
        for key, way in enumerate(ways)
    ]
    pair = (made[0], made[1])
    return Comparison(
        names_of(ways),
        differences(quantities(pair[0]), quantities(pair[1]), pair[0].time_s),
        _turnovers(system, pair),
        (int(pair[0].events.sum()), int(pair[1].events.sum())),
        pair,
        replicates,
    )


def names_of(ways: tuple[Way, Way]) -> tuple[str, str]:
    """What to call two ways: by what sets them apart."""
    by_engine = ways[0].engine != ways[1].engine
    by_treatment = ways[0].treatment != ways[1].treatment

    def name(way: Way) -> str:
        how = way.treatment or "as in the file"
        treatment = how if isinstance(how, str) else ", ".join(f"{n} {t}" for n, t in how.items())
        engine = {"leap": "leaps"}.get(way.engine, way.engine)
        told = [part for part, differs in ((treatment, by_treatment), (engine, by_engine)) if differs]
        return ", ".join(told or [treatment if way.treatment else engine])

    return name(ways[0]), name(ways[1])


def quantities(one: Run) -> dict[str, Array]:
    """Totals of the file's species and readouts of a run, shape=(replicates, times)."""
    system = one.system
    column = {name: i for i, name in enumerate(one.species)}
    found: dict[str, Array] = {}
    for species in system.free_species:
        if species.enzyme is None:
            parts = copies_in(system, Reference("total", species.name))
            total = np.zeros(one.counts.shape[:2])
            for name, number in parts:
                total += number * one.counts[:, :, column[name]]
            found[f"total({species.name})"] = total
    for name in one.readout_units:
        found[name] = one.readout(name)
    return found


def differences(first: Mapping[str, Array], second: Mapping[str, Array], time_s: Array) -> tuple[Difference, ...]:
    """Test every quantity at every time but the first; what is constant alike or not finite is left out."""
    rows = []
    for name in first:
        for k in range(1, len(time_s)):
            a, b = first[name][:, k], second[name][:, k]
            if not (np.isfinite(a).all() and np.isfinite(b).all()) or (a.var() == b.var() == 0 and a[0] == b[0]):
                continue
            rows.append(_difference(name, float(time_s[k]), a, b))
    if not rows:
        return ()
    corrected = holm(np.array([[r.p_mean, r.p_variance, r.p_distance] for r in rows]).reshape(-1)).reshape(-1, 3)
    return tuple(
        r._replace(p_mean=float(p[0]), p_variance=float(p[1]), p_distance=float(p[2]))
        for r, p in zip(rows, corrected, strict=True)
    )


def _difference(name: str, time_s: float, a: Array, b: Array) -> Difference:
    n, m = len(a), len(b)
    t_mean, p_mean = _welch(a, b)
    t_variance, p_variance = _welch(np.abs(a - np.median(a)), np.abs(b - np.median(b)))
    size = np.sqrt(n * m / (n + m))
    distance = kolmogorov_distance(a, b)
    return Difference(
        name,
        time_s,
        (float(a.mean()), float(b.mean())),
        (float(a.std(ddof=1)), float(b.std(ddof=1))),
        t_mean,
        p_mean,
        t_variance,
        p_variance,
        distance,
        1.358 / float(size),
        float(kolmogorov((size + 0.12 + 0.11 / size) * distance)),  # Stephens, J. R. Stat. Soc. B 32:115 (1970)
    )


def _welch(a: Array, b: Array) -> tuple[float, float]:
    """Welch's t of two means (Biometrika 34:28, 1947), the second less the first, and its two-sided p."""
    va, vb = a.var(ddof=1) / len(a), b.var(ddof=1) / len(b)
    if va + vb == 0:
        return (0.0, 1.0) if a[0] == b[0] else (np.inf, 0.0)
    t = float((b.mean() - a.mean()) / np.sqrt(va + vb))
    freedom = (va + vb) ** 2 / (va**2 / (len(a) - 1) + vb**2 / (len(b) - 1))
    return t, float(2.0 * stdtr(freedom, -abs(t)))


def kolmogorov_distance(a: Array, b: Array) -> float:
    """Largest distance between two empirical distribution functions."""
    at = np.unique(np.concatenate([a, b]))
    below = [np.searchsorted(np.sort(x), at, side="right") / len(x) for x in (a, b)]
    return float(np.max(np.abs(below[0] - below[1])))


def _turnovers(system: System, runs: tuple[Run, Run]) -> tuple[Turnovers, ...]:
    """Of every reaction that enzymes carry at a net rate; predicted where one enzyme carries it alone."""
    carried: dict[str, list[str]] = {}
    for enzyme in system.enzymes:
        for activity in enzyme.activities:
            carried.setdefault(activity.reaction, []).append(enzyme.name)
    facts = lumping_facts(system)
    found = []
    for reaction, enzymes in carried.items():
        n = [one.turnovers(reaction, enzymes[0] if len(enzymes) == 1 else None)[:, -1].astype(float) for one in runs]
        if any(abs(x.mean()) < 5.0 * x.std(ddof=1) / np.sqrt(len(x)) or not x.var() for x in n):
            continue  # no net work to speak of
        predicted = None
        if len(enzymes) == 1 and enzymes[0] in facts:
            own = facts[enzymes[0]]
            how = [one.treatments.get(enzymes[0]) == "lumped" for one in runs]
            both = [dict(own.firing_fano if lumped else own.fano).get(reaction) for lumped in how]
            if both[0] is not None and both[1] is not None:
                predicted = (both[0], both[1])
        fano = [x.var(ddof=1) / abs(x.mean()) for x in n]
        found.append(
            Turnovers(reaction, (float(n[0].mean()), float(n[1].mean())), (float(fano[0]), float(fano[1])), predicted)
        )
    return tuple(found)
