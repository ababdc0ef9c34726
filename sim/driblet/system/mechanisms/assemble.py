"""Puts the reactions of one enzyme together: which states and steps they share, and the constants of every step.

The first reaction sets the constants of the steps it uses; a later one that uses the same step (the binding of a common
substrate, the first half of a common ping pong) takes them over. Each reaction's steps satisfy the Haldane relation
exactly: the product of forward over backward constants along one turnover is K'.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from driblet.energetics.cycles import cycles, reconciled
from driblet.system.mechanisms.constants import (
    FASTEST,
    FASTEST_ON,
    ChainConstants,
    MechanismError,
    Pair,
    Problem,
    Product,
    Substrate,
    chain_time,
    solve,
)
from driblet.system.mechanisms.enzyme import Activity, Enzyme, EnzymeState, EnzymeStep
from driblet.system.mechanisms.graph import (
    FREE,
    Chain,
    Link,
    Square,
    State,
    is_form,
    ping_pong,
    species_of,
    square,
)

DISAGREEMENT = 0.01  # kJ/mol by which constants that are all given may miss closure, all of them being rounded
FIRST_HALF = "_first_half"
# In the words that say where a constant comes from, " *" marks a default.


@dataclass(frozen=True)
class ActivitySpec:
    """One reaction of an enzyme as its table states it, in the direction it was measured in.

    Attributes: reaction, mechanism, direction, substrates, products : as in Activity; K : of that direction, relative to
    1 mol/L; kcat_per_s; KM_M, Kd_M : mol/L by species; interaction; steps : microscopic constants (forward, backward) by
    key, None where it is left to follow, or None when kcat and K_M are given.
    """

    reaction: str
    mechanism: str
    direction: int
    substrates: tuple[str, ...]
    products: tuple[str, ...]
    K: float
    kcat_per_s: float | None = None
    KM_M: Mapping[str, float] = field(default_factory=dict)
    Kd_M: Mapping[str, float] = field(default_factory=dict)
    interaction: float = 1.0
    steps: Mapping[str, tuple[float | None, float | None]] | None = None


class _Constants(NamedTuple):
    forward: float
    backward: float
    origin: str


class Assembler:
    """Collects the activities of one enzyme; `enzyme()` gives the result."""

    def __init__(self, name: str, RT_kJ_per_mol: float) -> None:
        self.name, self.RT = name, RT_kJ_per_mol
        self.states: dict[State, int] = {FREE: 0}
        self.steps: list[EnzymeStep] = []
        self.between: dict[tuple[State, State], int] = {}
        self.activities: list[Activity] = []
        self.inhibitors: list[tuple[str, float]] = []

    def add(self, spec: ActivitySpec) -> None:
        """Add one reaction. Raises MechanismError when no constants can satisfy what is stated."""
        if spec.mechanism == "random bi bi":
            graph = square(spec.substrates, spec.products)
            links: tuple[Link, ...] = graph.links
            turnovers = {graph.turnover: spec.reaction}
            taken, given = graph.binding, graph.release
            constants = self._given(spec, links, turnovers) if spec.steps is not None else self._square(spec, graph)
        else:
            chains = self._chains(spec.mechanism, spec.substrates, spec.products)
            links = tuple(link for chain in chains for link in chain.links)
            names = [spec.reaction] if len(chains) == 1 else [spec.reaction + FIRST_HALF, spec.reaction]
            turnovers = {chain.turnover: name for chain, name in zip(chains, names, strict=True)}
            taken = tuple((link,) for chain in chains for link in chain.binding)  # type: ignore[assignment]
            given = tuple((link,) for chain in chains for link in chain.release)  # type: ignore[assignment]
            constants = self._given(spec, links, turnovers) if spec.steps is not None else self._chained(spec, chains)
        index = [self._place(link, turnovers.get(link) or link.key, constants.get(link)) for link in links]
        where = dict(zip(links, index, strict=True))
        counted = next(link for link, name in turnovers.items() if name == spec.reaction)
        self.activities.append(
            Activity(
                spec.reaction,
                spec.mechanism,
                spec.direction,
                spec.substrates,
                spec.products,
                spec.kcat_per_s,
                tuple(spec.KM_M.get(name) for name in spec.substrates),
                tuple(index),
                tuple(tuple(where[link] for link in group) for group in taken),
                tuple(tuple(where[link] for link in group) for group in given),
                where[counted],
            )
        )

    def inhibit(self, species: str, Ki_M: float, on: float | None = None) -> None:
        """A competitive inhibitor: it binds the free enzyme and nothing else binds then."""
        origin = "Ki and on-rate"
        if on is None:
            on, origin = min(1e7, FASTEST / Ki_M), "Ki; on-rate *"
        self._place(Link(FREE, (species,), binds=species), f"binds_{species}", _Constants(on, on * Ki_M, origin))
        self.inhibitors.append((species, Ki_M))

    def shared(self, mechanism: str, substrates: tuple[str, ...], products: tuple[str, ...]) -> set[str]:
        """The ligands of a reaction to be added whose steps have constants from an earlier reaction already."""
        if mechanism == "random bi bi":
            return set()
        chains = self._chains(mechanism, substrates, products)
        links = [link for chain in chains for link in (*chain.binding, *chain.release)]
        return {link.binds or link.releases or "" for link in links if self._known(link) is not None}

    def holds(self, ligand: str) -> bool:
        """Whether the free enzyme binds `ligand` in some step already."""
        return (FREE, (ligand,)) in self.between

    def enzyme(
        self,
        label: str,
        half_life_s: float | None = None,
        active_fraction: float = 1.0,
        molar_mass: float | None = None,
    ) -> Enzyme:
        """The finished enzyme."""
        states = tuple(EnzymeState(self._state_name(state), _held(state)) for state in self.states)
        return Enzyme(
            self.name,
            label,
            states,
            tuple(self.steps),
            tuple(self.activities),
            tuple(self.inhibitors),
            half_life_s,
            active_fraction,
            molar_mass,
        )

    def _state_name(self, state: State) -> str:
        return ".".join((self.name, *state))

    def _place(self, link: Link, key: str, constants: _Constants | None) -> int:
        """The index of the step for a link, made if it is not there yet."""
        known = self._known(link)
        if known is not None:
            return known
        assert constants is not None
        for state in (link.source, link.target):
            self.states.setdefault(state, len(self.states))
        self.between[link.source, link.target] = len(self.steps)
        self.steps.append(
            EnzymeStep(
                f"{self.name}.{key}",
                self.states[link.source],
                self.states[link.target],
                species_of(link.binds) if link.binds is not None else None,
                species_of(link.releases) if link.releases is not None else None,
                *constants,
            )
        )
        return len(self.steps) - 1

    def _known(self, link: Link) -> int | None:
        forward = self.between.get((link.source, link.target))
        return forward if forward is not None else self.between.get((link.target, link.source))

    def _along(self, link: Link) -> tuple[float, float] | None:
        """Constants of a step that is there already, in the direction of `link`."""
        k = self._known(link)
        if k is None:
            return None
        step = self.steps[k]
        same = (link.source, link.target) in self.between
        return (step.forward, step.backward) if same else (step.backward, step.forward)

    def _pair(self, link: Link) -> Pair | None:
        known = self._along(link)
        if known is None:
            return None
        return Pair(*known) if link.binds is not None else Pair(known[1], known[0])

    @staticmethod
    def _chains(mechanism: str, substrates: tuple[str, ...], products: tuple[str, ...]) -> tuple[Chain, ...]:
        if mechanism == "ping pong bi bi":
            return ping_pong((substrates[0], substrates[1]), (products[0], products[1]))
        return (Chain(FREE, FREE, substrates, products),)

    def _chained(self, spec: ActivitySpec, chains: Sequence[Chain]) -> dict[Link, _Constants]:
        assert spec.kcat_per_s is not None
        if len(chains) == 1:
            return self._chain(spec, chains[0], spec.kcat_per_s, spec.K)
        known = [self._along(chain.turnover) for chain in chains]
        if known == [None, None]:
            root, halves, errors = math.sqrt(spec.K), [], []
            for chain in chains:
                try:
                    halves.append(self._chain(spec, chain, 2.0 * spec.kcat_per_s, root))
                except MechanismError as error:
                    errors.append(error.scaled(lambda rate: 0.5 * rate))
            if errors:
                raise min(errors, key=lambda error: math.inf if error.largest is None else error.largest)
            return {**halves[0], **halves[1]}
        done, other = (chains[0], chains[1]) if known[0] is not None else (chains[1], chains[0])
        time, K = self._finished(done)
        left = 1.0 / spec.kcat_per_s - time
        if left <= 0:
            raise MechanismError(
                f"{spec.kcat_per_s:.4g} /s is more than the half it shares allows: below {1 / time:.4g} /s", "kcat"
            )
        try:
            return self._chain(spec, other, 1.0 / left, spec.K / K)
        except MechanismError as error:
            raise error.scaled(lambda rate: 1.0 / (time + 1.0 / rate)) from None

    def _finished(self, chain: Chain) -> tuple[float, float]:
        """Turnover time and equilibrium constant of a half whose steps are all known."""
        substrates = [self._pair(link) for link in chain.binding]
        products = [self._pair(link) for link in chain.release]
        along = self._along(chain.turnover)
        assert along is not None
        pairs, released = [p for p in substrates if p], [p for p in products if p]
        K = along[0] / along[1] * math.prod(p.Kd for p in released) / math.prod(p.Kd for p in pairs)
        return chain_time(pairs, released, *along), K

    def _chain(self, spec: ActivitySpec, chain: Chain, kcat: float, K: float) -> dict[Link, _Constants]:
        """Constants of one chain whose turnover takes 1/kcat; K_M is taken at the kcat of the whole reaction."""
        assert spec.kcat_per_s is not None
        factor = kcat / spec.kcat_per_s
        last = len(chain.substrates) - 1
        substrates = []
        for i, link in enumerate(chain.binding):
            name, fixed = chain.substrates[i], self._pair(link)
            KM = spec.KM_M[name] * factor if fixed is None else None
            substrates.append(Substrate(KM, spec.Kd_M.get(name), i < last, fixed))
        products = [Product(spec.Kd_M.get(link.releases or ""), self._pair(link)) for link in chain.release]
        try:
            found = solve(Problem(kcat, K, tuple(substrates), tuple(products)))
        except MechanismError as error:
            raise error.named(chain.substrates) from None
        return self._chain_constants(spec, chain, found)

    def _chain_constants(self, spec: ActivitySpec, chain: Chain, found: ChainConstants) -> dict[Link, _Constants]:
        out = {chain.turnover: _Constants(found.forward, found.backward, "kcat and the energy")}
        last = len(chain.substrates) - 1
        for i, (link, pair) in enumerate(zip(chain.binding, found.substrates, strict=True)):
            default = "k_off = kcat *" if i == last else "Kd = KM *"
            stated = "Kd" if chain.substrates[i] in spec.Kd_M else default
            out[link] = _Constants(pair.on, pair.off, f"kcat/KM; {stated}")
        for link, pair in zip(chain.release, found.products, strict=True):
            stated = "Kd" if link.releases in spec.Kd_M else "as weak as allowed *"
            out[link] = _Constants(pair.off, pair.on, stated)
        return out

    def _square(self, spec: ActivitySpec, graph: Square) -> dict[Link, _Constants]:
        assert spec.kcat_per_s is not None
        if any(self._known(link) is not None for link in graph.links):
            raise MechanismError(
                "a random mechanism cannot take over steps of another reaction: list it first, or make it an enzyme of "
                "its own",
                "mechanism",
            )
        names = spec.substrates
        substrates = tuple(Substrate(spec.KM_M[name], spec.Kd_M.get(name)) for name in names)
        products = tuple(Product(spec.Kd_M.get(name)) for name in spec.products)
        try:
            found = solve(Problem(spec.kcat_per_s, spec.K, substrates, products, True, spec.interaction))
        except MechanismError as error:
            raise error.named(names) from None
        out = {graph.turnover: _Constants(found.forward, found.backward, "kcat and the energy")}
        factor = "" if spec.interaction == 1.0 else f"; interaction {spec.interaction:g}"
        for (alone, with_other), pair, name in zip(graph.binding, found.substrates, names, strict=True):
            origin = f"kcat/KM; {'Kd' if name in spec.Kd_M else 'k_off = kcat *'}"
            out[with_other] = _Constants(pair.on, pair.off, origin)
            off = min(FASTEST, pair.off / spec.interaction)
            out[alone] = _Constants(off * spec.interaction / pair.Kd, off, f"closed square{factor}")
        for (alone, with_other), pair, name in zip(graph.release, found.products, spec.products, strict=True):
            stated = "Kd" if name in spec.Kd_M else "as weak as allowed *"
            out[with_other] = _Constants(pair.off, pair.on, stated)
            out[alone] = _Constants(pair.off, pair.on, "closed square")
        return out

    def _given(
        self, spec: ActivitySpec, links: Sequence[Link], turnovers: Mapping[Link, str]
    ) -> dict[Link, _Constants]:
        """Microscopic constants as stated; what is left out follows from closure, and closure is made exact."""
        assert spec.steps is not None
        keys = [turnovers.get(link) or link.key for link in links]
        unknown = sorted(set(spec.steps) - set(keys))
        if unknown:
            raise MechanismError(
                f'"{unknown[0]}" is no step of {spec.mechanism} here; its steps: {", ".join(keys)}', "steps"
            )
        energies = np.full(len(links), math.nan)
        sd = np.zeros(len(links))
        for i, (link, key) in enumerate(zip(links, keys, strict=True)):
            shared = self._along(link)
            if shared is None and key not in spec.steps:
                raise MechanismError(f"the step {key} is missing; {', '.join(keys)} are needed", "steps")
            if shared is not None and key in spec.steps:
                raise MechanismError("is shared with an earlier reaction of this enzyme, which gave it", f"steps.{key}")
            forward, backward = shared if shared is not None else spec.steps[key]
            if forward is None and backward is None:
                raise MechanismError("needs its forward or its backward constant", f"steps.{key}")
            if forward is not None and backward is not None:
                energies[i] = -self.RT * math.log(forward / backward)
            sd[i] = 0.0 if shared is not None else 1.0
        energies = self._closed(spec, links, keys, energies, sd)
        out = {}
        for link, key, energy in zip(links, keys, energies, strict=True):
            if self._along(link) is not None:
                continue
            forward, backward = spec.steps[key]
            origin = "given" if forward is not None and backward is not None else "given; rest from energy"
            derived = "forward" if forward is None else "backward" if backward is None else ""
            if forward is None:
                assert backward is not None
                forward = backward * math.exp(-energy / self.RT)
            found = _Constants(forward, forward * math.exp(energy / self.RT), origin)
            if derived:
                _refuse_too_fast(link, key, derived, found)
            out[link] = found
        return out

    def _closed(
        self,
        spec: ActivitySpec,
        links: Sequence[Link],
        keys: Sequence[str],
        energies: NDArray[np.float64],
        sd: NDArray[np.float64],
    ) -> NDArray[np.float64]:
        """All energies of the steps, kJ/mol: the missing ones solved for, closure checked and then made exact."""
        matrix = _stoichiometry(spec, links)
        basis = cycles(matrix).astype(float)
        missing = np.isnan(energies)
        overall = -self.RT * math.log(spec.K)
        all_energies = np.append(np.where(missing, 0.0, energies), overall)
        known = -basis @ all_energies
        for_missing = basis[:, :-1][:, missing]
        if missing.any():
            if np.linalg.matrix_rank(for_missing) < missing.sum():
                names = ", ".join(key for key, gap in zip(keys, missing, strict=True) if gap)
                raise MechanismError(
                    f"{names}: the energy fixes one constant a cycle, not all that are left out", "steps"
                )
            all_energies[:-1][missing] = np.linalg.lstsq(for_missing, known, rcond=None)[0]
        excess = basis @ all_energies
        worst = int(np.argmax(np.abs(excess)))
        if abs(excess[worst]) > DISAGREEMENT:
            raise MechanismError(_discrepancy(spec, keys, basis[worst], excess[worst], overall), "steps")
        moved = reconciled(matrix, all_energies, np.append(np.where(sd > 0, 1.0, 0.0), 0.0))
        return moved[:-1]


def _refuse_too_fast(link: Link, key: str, derived: str, found: _Constants) -> None:
    """Raises MechanismError for a constant that follows from the energy and that no molecule can have."""
    value = found.forward if derived == "forward" else found.backward
    second_order = (link.binds if derived == "forward" else link.releases) is not None
    limit, unit = (FASTEST_ON, "1e9 /M/s") if second_order else (FASTEST, "1e6 /s")
    if value > limit:
        raise MechanismError(
            f"its {derived} constant would follow from the energy as {value:.3g}{unit[3:]}; at most {unit} is possible, "
            "so another constant must give way",
            f"steps.{key}",
        )


def _stoichiometry(spec: ActivitySpec, links: Sequence[Link]) -> NDArray[np.int64]:
    """Rows for states and ligands, a column for each step and a last one for the reaction."""
    rows: dict[object, int] = {}

    def row(item: object) -> int:
        return rows.setdefault(item, len(rows))

    entries = []
    for j, link in enumerate(links):
        entries += [(row(link.source), j, -1), (row(link.target), j, 1)]
        if link.binds is not None:
            entries.append((row(species_of(link.binds)), j, -1))
        if link.releases is not None:
            entries.append((row(species_of(link.releases)), j, 1))
    entries += [(row(name), len(links), -1) for name in spec.substrates]
    entries += [(row(name), len(links), 1) for name in spec.products]
    matrix = np.zeros((len(rows), len(links) + 1), dtype=np.int64)
    for i, j, number in entries:
        matrix[i, j] += number
    return matrix


def _discrepancy(
    spec: ActivitySpec, keys: Sequence[str], weights: NDArray[np.float64], excess: float, overall: float
) -> str:
    turns = -weights[-1]
    path = " ".join(
        ("− " if w < 0 else "+ ") + (f"{abs(w):g} " if abs(w) != 1 else "") + key
        for w, key in zip(weights[:-1], keys, strict=True)
        if w
    ).removeprefix("+ ")
    if not turns:
        return f"the constants along {path} sum to {excess:+.4g} kJ/mol where they must cancel; leave one of them out"
    found = overall + excess / turns
    return (
        f"the steps {path} mean {found:.6g} kJ/mol for {spec.reaction} ({spec.mechanism}), its energy says {overall:.6g}: "
        f"{excess / turns:+.4g} kJ/mol too much; leave one constant out and it follows"
    )


def _held(state: State) -> tuple[tuple[str, int], ...]:
    count: dict[str, int] = {}
    for ligand in state:
        if not is_form(ligand):
            count[species_of(ligand)] = count.get(species_of(ligand), 0) + 1
    return tuple(count.items())
