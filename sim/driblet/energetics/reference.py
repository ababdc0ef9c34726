"""The reference table: energies of formation of biochemical reactants, measured constants and buffers, with sources.

reference.toml holds the numbers; a system file may add or override reactants. Energies are given only for conditions that
are stated.
"""

from __future__ import annotations

import math
import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import lru_cache
from importlib import resources
from typing import Any, NamedTuple

from driblet.energetics.conditions import REFERENCE_TEMPERATURE, Conditions
from driblet.energetics.gibbs import standard_energy
from driblet.energetics.reactant_tables import completed, normal_form, read_reactants
from driblet.energetics.transform import Bound, IonicSpecies, Potentials, Reactant, reaction_energy, uptake
from driblet.errors import InputError, Problem
from driblet.quantities import read_quantity

TEMPERATURE_STEP = 5.0  # K, half of the step over which a sensitivity to temperature is taken
_WATER, _MAGNESIUM = "H2O", "Mg"
_SET_BY = {"h": "pH", "hplus": "pH", "mg": "pMg", "mg2": "pMg", "magnesium": "pMg"}


class NotInTableError(ValueError):
    """The table cannot give this energy; the text says which reactants or conditions are missing."""


@dataclass(frozen=True)
class MeasuredConstant:
    """A published apparent constant K' (relative to 1 mol/L) of a reaction.

    Attributes: key; change : reactant key -> net stoichiometric number; conditions, of which `assumed` names those the
    source leaves open; wins : whether it replaces the energies of formation, and `why`; sd_kJ_per_mol.
    """

    key: str
    change: Mapping[str, int]
    K: float
    conditions: Conditions
    source: str
    assumed: str = ""
    wins: bool = False
    why: str = ""
    sd_kJ_per_mol: float | None = None

    @property
    def dG0_kJ_per_mol(self) -> float:
        """-RT ln K' at its own conditions."""
        return standard_energy(self.K, self.conditions.temperature_K)


class BufferEntry(NamedTuple):
    """A buffer of the table: pK and enthalpy of dissociation at 298.15 K and I = 0, charge of the acid."""

    pK: float
    enthalpy_kJ_per_mol: float
    acid_charge: int


class ReferenceEnergy(NamedTuple):
    """What the table says about a reaction at stated conditions, kJ/mol.

    dG0 : the value to use; from_formation : what the energies of formation give; measured : the measured constant that
    wins, or None; sd : where the sources have one; estimated : reactants whose dependence on temperature is an estimate, if
    it matters, and estimate_sd : what that adds to the uncertainty.
    """

    dG0: float
    from_formation: float
    measured: MeasuredConstant | None
    sd: float | None
    estimated: tuple[str, ...]
    estimate_sd: float


class Sensitivity(NamedTuple):
    """How dG0' changes, kJ/mol: per unit of pH, per unit of pMg, per 10 K. pMg: zero where no reactant binds magnesium."""

    per_pH: float
    per_pMg: float
    per_10_K: float


class Reference:
    """Reactants by name, with what can be computed from them."""

    def __init__(
        self,
        reactants: Sequence[Reactant],
        measured: Sequence[MeasuredConstant] = (),
        buffers: Mapping[str, BufferEntry] | None = None,
        ambiguous: Mapping[str, Sequence[str]] | None = None,
    ) -> None:
        magnesium = next(r for r in reactants if r.key == _MAGNESIUM).species[0]
        assert magnesium.enthalpy is not None
        self.stated = {r.key: r for r in reactants}  # as the sources have them, enthalpies left open included
        self.magnesium_ion: IonicSpecies = magnesium
        self.reactants = {r.key: r for r in completed(reactants, magnesium.enthalpy)}
        self.measured, self.buffers, self.ambiguous = tuple(measured), dict(buffers or {}), dict(ambiguous or {})
        self._unclear = {normal_form(name) for name in self.ambiguous}
        self._by_name: dict[str, Reactant] = {}
        for reactant in self.reactants.values():
            for name in (reactant.key, reactant.name, *reactant.aliases):
                self._by_name[normal_form(name)] = reactant

    def with_reactants(self, own: Sequence[Reactant]) -> Reference:
        """A table in which `own` reactants are added, or take the place of those whose key or alias they bear."""
        if not own:
            return self
        replaced: dict[str, Reactant] = {}
        for reactant in own:
            old = self.find(reactant.key)
            if old is not None:
                names = tuple(dict.fromkeys((*reactant.aliases, old.key, *old.aliases)))
                replaced[old.key] = replace(reactant, key=old.key, aliases=(*names, reactant.key))
            else:
                replaced[reactant.key] = reactant
        kept = [r for r in self.stated.values() if r.key not in replaced]
        ambiguous = {n: k for n, k in self.ambiguous.items() if normal_form(n) not in map(normal_form, replaced)}
        return Reference([*kept, *replaced.values()], self.measured, self.buffers, ambiguous)

    def find(self, name: str) -> Reactant | None:
        """The reactant of a name or alias; case, underscores and a compartment in brackets do not matter."""
        plain = normal_form(name)
        return None if plain in self._unclear else self._by_name.get(plain)

    def buffer(self, name: str) -> BufferEntry | None:
        """The buffer of that name, or None."""
        return next((b for n, b in self.buffers.items() if normal_form(n) == normal_form(name)), None)

    def load(self, concentrations: Mapping[str, float]) -> list[tuple[Reactant, float]]:
        """The reactants of the table among named concentrations in mol/L; names it does not know are left out."""
        found = ((self.find(name), amount) for name, amount in concentrations.items())
        return [(reactant, amount) for reactant, amount in found if reactant is not None and reactant.key != _MAGNESIUM]

    def terms(self, change: Mapping[str, int]) -> list[tuple[Reactant, int]]:
        """Reactants and net numbers of a reaction, water included.

        change : name -> net stoichiometric number, "H2O" included. Raises NotInTableError naming every reactant that is
        not there, and for a reaction that does not balance.
        """
        wrong = [self._why_missing(name) for name in change if self.find(name) is None or self._set_outside(name)]
        if wrong:
            raise NotInTableError("; ".join(wrong))
        terms: dict[str, int] = {}
        for name, number in change.items():
            reactant = self.find(name)
            assert reactant is not None
            terms[reactant.key] = terms.get(reactant.key, 0) + number
        found = [(self.reactants[key], number) for key, number in terms.items() if number]
        _check_balance(found)
        return found

    def _set_outside(self, name: str) -> str | None:
        return _SET_BY.get(normal_form(name))

    def _why_missing(self, name: str) -> str:
        outside = self._set_outside(name)
        if outside:
            return f"{name} is set by the {outside} of [conditions]: leave it out of the equation"
        choices = next((k for n, k in self.ambiguous.items() if normal_form(n) == normal_form(name)), None)
        if choices:
            meant = " or ".join(f"{key} ({self.reactants[key].name})" for key in choices)
            return f'"{name}" means different things to different people; the table has {meant}'
        return f'"{name}" is not in the reference table (`driblet reference` lists it; [reactants.{name}] adds it)'

    def energy(self, change: Mapping[str, int], conditions: Conditions) -> ReferenceEnergy:
        """dG0' of a reaction at `conditions`.

        Raises NotInTableError when a reactant is missing, the reaction does not balance, or a condition is not stated.
        """
        terms = self.terms(change)
        require(terms, conditions)
        formation = self.from_formation(terms, conditions)
        winner = self.measured_for(terms, winners_only=True)
        if winner:
            constant, sign = winner[0]
            there = self.from_formation(terms, constant.conditions)
            value: float = sign * constant.dG0_kJ_per_mol + formation - there
            sd = constant.sd_kJ_per_mol
            away = conditions.temperature_K - constant.conditions.temperature_K
        else:
            value, sd = formation, _combined_sd(terms)
            away = conditions.temperature_K - REFERENCE_TEMPERATURE
        guessed = [(r, n) for r, n in terms if r.entropy_sd] if away else []
        estimate_sd = abs(away) * math.sqrt(math.fsum((n * r.entropy_sd) ** 2 for r, n in guessed))
        names = tuple(r.key for r, _ in guessed)
        return ReferenceEnergy(value, formation, winner[0][0] if winner else None, sd, names, estimate_sd)

    def from_formation(self, terms: Sequence[tuple[Reactant, int]], conditions: Conditions) -> float:
        """dG0' from the energies of formation alone, kJ/mol; `conditions` must state all that is needed."""
        return reaction_energy(terms, Potentials.of(conditions, self.magnesium_ion))

    def measured_for(
        self, terms: Sequence[tuple[Reactant, int]], winners_only: bool = False
    ) -> list[tuple[MeasuredConstant, int]]:
        """Measured constants of this reaction, each with +1, or -1 where it was reported the other way round."""
        wanted = {reactant.key: number for reactant, number in terms}
        found = []
        for constant in self.measured:
            if constant.wins or not winners_only:
                for sign in (1, -1):
                    if {key: sign * number for key, number in constant.change.items()} == wanted:
                        found.append((constant, sign))
        return found

    def carried(self, change: Mapping[str, int], dG0: float, stated: Conditions, wanted: Conditions) -> float:
        """An energy that holds at `stated`, carried to `wanted` by what the table says of the difference.

        Raises NotInTableError when the table cannot.
        """
        terms = self.terms(change)
        require(terms, stated)
        require(terms, wanted)
        return dG0 + self.from_formation(terms, wanted) - self.from_formation(terms, stated)

    def sensitivity(self, change: Mapping[str, int], conditions: Conditions) -> Sensitivity:
        """How dG0' answers to pH, pMg and temperature at `conditions`; raises NotInTableError as `energy` does."""
        terms = self.terms(change)
        require(terms, conditions)
        taken = self.uptake(change, conditions)
        slope = conditions.RT_kJ_per_mol * math.log(10)
        warm, cold = (
            self.from_formation(terms, replace(conditions, temperature_K=conditions.temperature_K + step))
            for step in (TEMPERATURE_STEP, -TEMPERATURE_STEP)
        )
        return Sensitivity(slope * taken.hydrogens, slope * taken.magnesiums, warm - cold)

    def uptake(self, change: Mapping[str, int], conditions: Conditions) -> Bound:
        """Protons and magnesium one turn takes up, and its change of charge; raises NotInTableError."""
        terms = self.terms(change)
        require(terms, conditions)
        return uptake(terms, Potentials.of(conditions, self.magnesium_ion))


def require(terms: Sequence[tuple[Reactant, int]], conditions: Conditions) -> None:
    """Raise NotInTableError when `conditions` leave open what the energy of `terms` depends on."""
    missing = conditions.missing(any(reactant.binds_magnesium for reactant, _ in terms))
    if missing:
        keys = " and ".join(f"conditions.{key}" for key in missing)
        raise NotInTableError(f"{keys} must be stated: the energy depends on {'it' if len(missing) == 1 else 'them'}")


def _combined_sd(terms: Sequence[tuple[Reactant, int]]) -> float | None:
    known = [(n * r.sd_kJ_per_mol) ** 2 for r, n in terms if r.sd_kJ_per_mol is not None]
    return math.sqrt(math.fsum(known)) if known else None


def _check_balance(terms: Sequence[tuple[Reactant, int]]) -> None:
    sums: dict[str, int] = {}
    for reactant, number in terms:
        for element, count in reactant.atoms.items():
            sums[element] = sums.get(element, 0) + number * count
    excess = {element: n for element, n in sums.items() if n}
    electrons = sum(number * reactant.electrons for reactant, number in terms)
    if not excess and not electrons:
        return
    waters = excess.get("O", 0)
    if set(excess) == {"O"} and electrons == 2 * waters:
        side = "left" if waters > 0 else "right"
        raise NotInTableError(f"does not balance: {abs(waters)} H2O is missing on the {side}")
    parts = [f"{n:+d} {element.replace('_', ' ')}" for element, n in excess.items()]
    if not excess:
        parts = [f"{electrons:+d} electrons; a partner that is reduced or oxidised is missing"]
    raise NotInTableError(f"does not balance (right less left): {', '.join(parts)}")


@lru_cache(maxsize=1)
def reference_table() -> Reference:
    """The table that comes with driblet."""
    source = resources.files("driblet.energetics") / "reference.toml"
    raw = tomllib.loads(source.read_text(encoding="utf-8"))
    problems: list[Problem] = []
    reactants = read_reactants(raw["reactants"], "reactants", problems)
    if problems:
        raise InputError("reference.toml", problems)
    measured = [_read_measured(key, value) for key, value in raw["measured"].items()]
    buffers = {
        name: BufferEntry(b["pK"], read_quantity(b["enthalpy"]).to("energy"), b["acid_charge"])
        for name, b in raw["buffers"].items()
    }
    return Reference(reactants, measured, buffers, raw["ambiguous"])


def _read_measured(key: str, value: Mapping[str, Any]) -> MeasuredConstant:
    conditions = Conditions(
        read_quantity(value["temperature"]).to("temperature"),
        value["pH"],
        value["pMg"],
        read_quantity(value["ionic_strength"]).to("concentration"),
    )
    sd = read_quantity(value["sd"]).to("energy") if "sd" in value else None
    return MeasuredConstant(
        key,
        value["change"],
        value["K"],
        conditions,
        value["source"],
        value.get("assumed", ""),
        value.get("wins", False),
        value.get("why", ""),
        sd,
    )
