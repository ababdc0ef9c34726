"""Which enzymes are lumped: what the file and the caller ask for, whether the criteria allow it, and what auto takes.

Measured against exact simulations (3,000 of each, lumped and elementary; common practice, no source): nothing shows while an
enzyme's states settle 100 times faster than its ligands change, it is under 5 % of every ligand, and nothing is looked at before
10 of its settling times. c2/c1 of the enzyme's generator is its settling time (system/mechanisms/turnover_noise.py).
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from driblet.errors import InputError, Problem, one_problem
from driblet.lumping import ELEMENTARY, LUMPED, is_lumped, lumped_enzymes, treated
from driblet.network import Network
from driblet.system.expressions import nearest
from driblet.system.mechanisms import Enzyme, MechanismError
from driblet.system.mechanisms.steady_state import generator, stationary
from driblet.system.mechanisms.turnover_noise import turnover_noise
from driblet.system.model import System
from driblet.system.tables import TREATMENTS

AUTO = "auto"
SETTLED, LARGEST_SHARE, SETTLING_TIMES = 100.0, 0.05, 10.0
RAPID_EQUILIBRIUM_TOLERANCE = 0.01  # of |J_RE/J - 1|, below which taking binding for an equilibrium is allowed
_FAST = 1e9  # times faster binding stands for an equilibrium
Array = NDArray[np.float64]


@dataclass(frozen=True)
class LumpingFacts:
    """What decides whether an enzyme may be lumped, at one composition.

    Attributes: enzyme; settling_s : c2/c1; ligand, ligand_s : the ligand that changes fastest and its count over the gross
    rate at which reactions change it, s, None where none changes; rarest, share : the ligand of which the enzyme is the
    largest share, and that share; first_output_s : the first time looked at, None where the file states none;
    rapid_equilibrium : for each reaction J_RE/J - 1, None where nothing flows; fano : for each reaction the variance of its
    net turnovers over their mean, and firing_fano what exact firing of the lumped network shows instead, None where nothing
    flows; cannot : why it cannot be lumped at all, else "".
    """

    enzyme: str
    settling_s: float | None = None
    ligand: str | None = None
    ligand_s: float | None = None
    rarest: str | None = None
    share: float | None = None
    first_output_s: float | None = None
    rapid_equilibrium: tuple[tuple[str, float | None], ...] = ()
    fano: tuple[tuple[str, float | None], ...] = ()
    firing_fano: tuple[tuple[str, float | None], ...] = ()
    cannot: str = ""

    @property
    def failures(self) -> tuple[str, ...]:
        """Where the criteria fail, each with its number."""
        if self.cannot:
            return (self.cannot,)
        found: list[str] = []
        if self.settling_s is None:
            return ()  # nobody asked
        if self.ligand_s is not None and self.ligand_s < SETTLED * self.settling_s:
            times = self.ligand_s / self.settling_s
            found.append(
                f"its states settle in {self.settling_s:.2g} s and {self.ligand} changes within {self.ligand_s:.2g} s, "
                f"{times:.2g} times that, where {SETTLED:g} are needed"
            )
        if self.share is not None and self.share > LARGEST_SHARE:
            found.append(
                f"it is {100 * self.share:.2g} % of {self.rarest}, where {100 * LARGEST_SHARE:g} % are the most"
            )
        if self.first_output_s is not None and self.first_output_s < SETTLING_TIMES * self.settling_s:
            found.append(
                f"it is looked at after {self.first_output_s:.2g} s, before {SETTLING_TIMES:g} settling times "
                f"({SETTLING_TIMES * self.settling_s:.2g} s) are over"
            )
        return tuple(found)


@dataclass(frozen=True)
class Choice:
    """How one enzyme is treated: what was asked for, what is taken, the facts behind it, and what the file says."""

    enzyme: str
    asked: str
    taken: str
    facts: LumpingFacts
    stated: str = ELEMENTARY

    @property
    def why(self) -> str:
        """One sentence."""
        failures = "; ".join(self.facts.failures)
        if self.taken == LUMPED and not failures:
            return f"{self.enzyme} is lumped: {_fine(self.facts)}"
        if self.taken == LUMPED:
            return f"{self.enzyme} is lumped as asked, though {failures}: expect a bias"
        return f"{self.enzyme} stays elementary: {failures}" if failures else f"{self.enzyme} stays elementary as asked"


def _fine(facts: LumpingFacts) -> str:
    assert facts.settling_s is not None
    parts = [f"its states settle in {facts.settling_s:.2g} s"]
    if facts.ligand_s is not None:
        parts.append(f"{facts.ligand} changes within {facts.ligand_s:.2g} s")
    if facts.share is not None:
        parts.append(f"it is {100 * facts.share:.2g} % of {facts.rarest}")
    return ", ".join(parts)


def with_treatments(
    system: System,
    asked: str | Mapping[str, str] | None = None,
    first_output_s: float | None = None,
    engine: str | None = None,
) -> tuple[System, tuple[Choice, ...]]:
    """`system` as its file and `asked` say, and the choices behind it; only enzymes with steps have one.

    asked : one treatment for all enzymes or some by name, before what the file says; first_output_s : the first time after
    the start at which something is looked at; engine : the run's, as the file says where None: "auto" decides on enzymes too
    where neither the file nor the caller says how. A lumping that the criteria advise against is done, with a warning in
    System.warnings. Raises InputError for unknown enzymes or treatments, and for enzymes that cannot be lumped.
    """
    wanted = _wanted(system, asked, AUTO if (engine or system.settings.engine) == AUTO else ELEMENTARY)
    choices = []
    facts = lumping_facts(system, first_output_s) if set(wanted.values()) - {ELEMENTARY} else {}
    for enzyme in system.enzymes:
        if not enzyme.steps:
            continue
        ask = wanted[enzyme.name]
        own = facts.get(enzyme.name, LumpingFacts(enzyme.name))
        taken = ask
        if ask == AUTO:
            taken = ELEMENTARY if own.failures else LUMPED
        choices.append(Choice(enzyme.name, ask, taken, own, dict(system.treatments).get(enzyme.name, ELEMENTARY)))
    made = treated(system, {c.enzyme: c.taken for c in choices})
    doubts = [c.why for c in choices if c.taken == LUMPED and c.facts.failures]
    doubts += _estimates(made)
    return replace(made, warnings=(*made.warnings, *(d for d in doubts if d not in made.warnings))), tuple(choices)


def _wanted(system: System, asked: str | Mapping[str, str] | None, unstated: str) -> dict[str, str]:
    wanted = {e.name: unstated for e in system.enzymes}
    wanted.update(system.treatments)
    by_name = {e.name: asked for e in system.enzymes} if isinstance(asked, str) else dict(asked or {})
    if isinstance(asked, str) and asked not in TREATMENTS:
        raise one_problem(system.source or "run", "treatment", unknown_treatment(asked))
    problems = [Problem("treatment", unknown_treatment(t)) for t in by_name.values() if t not in TREATMENTS]
    problems += [
        Problem("treatment", f'"{name}" is not an enzyme of this system{nearest(name, list(wanted))}')
        for name in by_name
        if name not in wanted
    ]
    if problems:
        raise InputError(system.source or "run", problems)
    wanted.update(by_name)
    for enzyme in system.enzymes:  # a system that is lumped already is not asked again
        if enzyme.steps and is_lumped(system, enzyme.name) and wanted[enzyme.name] == AUTO:
            wanted[enzyme.name] = LUMPED
    return wanted


def unknown_treatment(text: str) -> str:
    """What to say of a treatment that is none."""
    return f'"{text}" is not a treatment; known: {", ".join(TREATMENTS)}'


def _estimates(system: System) -> list[str]:
    """Notes on readouts whose free counts are estimated, and on Gibbs energies, which are of totals."""
    from driblet.free_counts import estimated_names
    from driblet.system.expressions import references

    estimated = estimated_names(system)
    enzymes = ", ".join(e.name for e in lumped_enzymes(system))
    notes = []
    for readout in system.readouts:
        found = references(readout.expression.root)
        names = sorted({r.name for r in found if r.kind in ("count", "conc") and r.name in estimated})
        energies = sorted({r.name for r in found if r.kind == "gibbs"})
        held = sorted({n for e in energies for n in system.reaction(e).equation.change if n in estimated})
        if held:
            notes.append(
                f"readout {readout.name}: {', '.join(f'gibbs({e})' for e in energies)} takes {', '.join(held)} as counted, "
                f"free and bound together, {enzymes} being lumped"
            )
        if names:
            notes.append(
                f"readout {readout.name}: free {', '.join(names)} estimated from the states of {enzymes}, lumped: total "
                "less what they hold on average"
            )
    return notes


def lumping_facts(system: System, first_output_s: float | None = None) -> dict[str, LumpingFacts]:
    """The facts of every enzyme with steps at the start, in the median compartment, additions left out."""
    omega = system.compartment.omega
    here = {
        s.name: s.concentration_M if s.concentration_M is not None else (s.copies or 0.0) / omega
        for s in system.species
        if s.enzyme is None or s.name == s.enzyme
    }
    found, can = {}, {}
    for enzyme in system.enzymes:
        if not enzyme.steps:
            continue
        try:
            turnover_noise(enzyme)
            can[enzyme.name] = LUMPED
        except MechanismError as error:
            found[enzyme.name] = LumpingFacts(enzyme.name, cannot=str(error))
    flows = _gross_flows(treated(system, can), omega)
    for enzyme in system.enzymes:
        if enzyme.name in can:
            found[enzyme.name] = _facts(system, enzyme, here, flows, omega, first_output_s)
    return found


def _gross_flows(system: System, omega: float) -> dict[str, float]:
    """Molecules of each free species that firings change, in either direction, 1/s, at the mean load."""
    network = Network.of(system)
    rates = network.rates(np.array([omega]))[0]
    n = np.array([s.mean_copies(omega) for s in system.free_species])
    flow = np.zeros(len(n))
    factors = network.factors(n, rates, exact=False)
    for j, channel in enumerate(network.channels):
        w = rates[j] * factors[j] * np.prod([n[i] ** k for i, k in channel.reactants])
        for i, amount in channel.change:
            flow[i] += w * abs(amount)
    return dict(zip(network.species, flow.tolist(), strict=True))


def _facts(
    system: System,
    enzyme: Enzyme,
    here: Mapping[str, float],
    flows: Mapping[str, float],
    omega: float,
    first_output_s: float | None,
) -> LumpingFacts:
    noise = turnover_noise(enzyme)
    x = noise.ligands({name: max(here[name], 1e-30) for name, _ in noise.variables})
    ligands = list(dict.fromkeys(name for name, _ in noise.variables))
    held = {s.name for s in system.held_species}
    changing = {n: here[n] * omega / flows[n] for n in ligands if n not in held and here[n] > 0 and flows[n] > 0}
    fastest = min(changing, key=lambda n: changing[n]) if changing else None
    copies = here[enzyme.name]
    shares = {n: copies / here[n] for n in ligands if n not in held and here[n] > 0}
    rarest = max(shares, key=lambda n: shares[n]) if shares else None
    names = [a.reaction for a in enzyme.activities]
    J, C = noise.rates(x), noise.covariances(x)
    gross = _one_way(enzyme, here)
    net = [float(j) if abs(j) > 1e-9 * g else None for j, g in zip(J, gross, strict=True)]
    return LumpingFacts(
        enzyme.name,
        float(noise.relaxation_s(x)),
        fastest,
        changing[fastest] if fastest else None,
        rarest,
        shares[rarest] if rarest else None,
        first_output_s,
        tuple(zip(names, _rapid_equilibrium(enzyme, here, net), strict=True)),
        tuple(
            (n, None if j is None else float(C[a, a]) / abs(j)) for a, (n, j) in enumerate(zip(names, net, strict=True))
        ),
        tuple((n, None if j is None else g / abs(j)) for n, g, j in zip(names, gross, net, strict=True)),
    )


def _one_way(enzyme: Enzyme, here: Mapping[str, float]) -> list[float]:
    """Forward plus backward turnovers of each activity per copy as the lumped reactions fire them, 1/s."""
    from driblet.system.mechanisms.king_altman import flux_laws

    x = turnover_noise(enzyme).ligands({name: max(here[name], 1e-30) for name, _ in turnover_noise(enzyme).variables})
    total = np.zeros(len(enzyme.activities))
    for law in flux_laws(enzyme):
        ratio = float(law.numerator(x) / law.denominator(x))
        there = law.forward * float(np.prod([here[n] for n in law.reactants]))
        back = law.backward * float(np.prod([here[n] for n in law.products]))
        total += np.array(law.turns) ** 2 * (there + back) * ratio
    return [float(t) for t in total]


def _rapid_equilibrium(enzyme: Enzyme, here: Mapping[str, float], net: list[float | None]) -> list[float | None]:
    """J_RE/J - 1 of each activity: by how much taking binding for an equilibrium would err."""
    fast = replace(
        enzyme,
        steps=tuple(
            s if s.ligand is None else replace(s, forward=s.forward * _FAST, backward=s.backward * _FAST)
            for s in enzyme.steps
        ),
    )
    share = stationary(generator(fast, {name: max(c, 1e-30) for name, c in here.items()}))
    out: list[float | None] = []
    for activity, j in zip(enzyme.activities, net, strict=True):
        step = enzyme.steps[activity.counted]
        if j is None or step.ligand is not None:
            out.append(None)
            continue
        quick = activity.direction * float(share[step.source] * step.forward - share[step.target] * step.backward)
        out.append(quick / j - 1.0)
    return out


def treatment_facts(choices: tuple[Choice, ...]) -> dict[str, str]:
    """What a run file keeps of the choices, as JSON under one key; nothing where all enzymes are elementary unasked."""
    if all(c.asked == c.taken == c.stated == ELEMENTARY for c in choices):
        return {}
    kept = {
        c.enzyme: {
            "asked": c.asked,
            "taken": c.taken,
            "why": c.why,
            "fano": dict(c.facts.fano),
            "firing_fano": dict(c.facts.firing_fano),
        }
        for c in choices
    }
    return {"treatments": json.dumps(kept, sort_keys=True)}


def read_treatments(text: str) -> str | dict[str, str]:
    """The text of a command-line option: one treatment for all, or "kinase=lumped,other=auto"."""
    if "=" not in text:
        return text.strip()
    pairs = [part.partition("=") for part in text.split(",")]
    return {name.strip(): treatment.strip() for name, _, treatment in pairs}
