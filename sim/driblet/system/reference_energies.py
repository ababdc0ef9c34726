"""What the reference table does for the energies of one file: look up, carry to the file's conditions, doubt.

An energy from the table is a number once a system is built; the network and everything after it see only dG0'.
"""

from __future__ import annotations

from dataclasses import replace
from itertools import product
from typing import NamedTuple

from driblet.energetics.conditions import HIGHEST_IONIC_STRENGTH, TRUSTED_TEMPERATURES, Conditions
from driblet.energetics.reactant_tables import COMPOSITION_SD
from driblet.energetics.reference import NotInTableError, Reference
from driblet.system.equation import WATER, Equation

KCAL = 4.184
CLOSE, FAR, ABSURD = (
    3.5,
    6.0,
    12.0,
)  # kJ/mol: handbook and table agree within the first; beyond the last nothing published is
# where conditions are not stated, the span a sensible author may have meant
_PH, _PMG, _IONIC = (6.0, 9.0), (2.0, 14.0), (0.02, 0.35)


class TableEnergy(NamedTuple):
    """An energy the table gave or carried: dG0' and its sd in kJ/mol, and how it came about."""

    dG0: float
    sd: float | None
    note: str


def full_change(equation: Equation) -> dict[str, int]:
    """Net stoichiometric numbers of a reaction, water included."""
    change = dict(equation.change)
    if equation.water:
        change[WATER] = equation.water
    return change


class ReferenceEnergies:
    """The table as one file uses it: its reactants, its conditions, and the warnings it has given rise to."""

    def __init__(self, table: Reference, conditions: Conditions | None, warnings: list[str]) -> None:
        self.table, self.conditions, self.warnings = table, conditions, warnings
        self._doubted = False

    def looked_up(self, path: str, equation: Equation) -> TableEnergy:
        """energy = "reference". Raises NotInTableError."""
        if self.conditions is None:  # at fault already; the result is thrown away
            return TableEnergy(0.0, None, "")
        found = self.table.energy(full_change(equation), self.conditions)
        self._doubt_conditions()
        note = f"reference table at {self.conditions}"
        if found.measured:
            m = found.measured
            assumed = f" ({m.assumed} assumed)" if m.assumed else ""
            note = (
                f"measured constant of {m.source}, carried from {m.conditions}{assumed} to {self.conditions}; "
                f"energies of formation give {found.from_formation:.2f} kJ/mol: {m.why}"
            )
        if found.estimate_sd >= 0.05:
            note += f"; dependence on temperature estimated for {', '.join(found.estimated)}: ±{found.estimate_sd:.1f} kJ/mol"
        self._warn_of_composition(path, found.estimated)
        return TableEnergy(found.dG0, found.sd, note)

    def carried(self, path: str, equation: Equation, dG0: float, stated: Conditions) -> TableEnergy | None:
        """An energy stated at other conditions, at the file's; None, with a warning, where the table cannot."""
        if self.conditions is None or stated == self.conditions:
            return None
        change = full_change(equation)
        try:
            value = self.table.carried(change, dG0, stated, self.conditions)
        except NotInTableError as error:
            self.warnings.append(f"{path}: used as given, not carried from {stated} to {self.conditions}: {error}")
            return None
        self._doubt_conditions()
        self._warn_of_composition(path, [r.key for r, _ in self.table.terms(change)] if (
            stated.temperature_K != self.conditions.temperature_K) else [])  # fmt: skip
        note = f"{dG0:.2f} kJ/mol at {stated}, carried by {value - dG0:+.2f} kJ/mol to {self.conditions}"
        return TableEnergy(value, None, note)

    def check_plausible(self, path: str, equation: Equation, dG0: float) -> None:
        """Warn where an energy is far from what the table says of the same reaction."""
        span = self._plausible(equation)
        if span is None:
            return
        low, high = span
        nearest = min(max(dG0, low), high)
        distance = abs(dG0 - nearest)
        if distance <= FAR:
            return
        expected = f"{low:.1f}" if high - low < 0.1 else f"{low:.1f} to {high:.1f}"
        for changed, what in (
            (dG0 * KCAL, "kcal/mol written as kJ/mol"),
            (dG0 / KCAL, "kJ/mol written as kcal/mol"),
            (-dG0, "the reaction read the other way round"),
        ):
            if low - CLOSE <= changed <= high + CLOSE:
                self.warnings.append(
                    f"{path}: {dG0:.4g} kJ/mol is implausible, the reference table says {expected}: it looks like {what}"
                )
                return
        if distance > ABSURD:
            self.warnings.append(
                f"{path}: {dG0:.4g} kJ/mol is implausible, the reference table says {expected}: check value, sign and unit"
            )

    def _plausible(self, equation: Equation) -> tuple[float, float] | None:
        """The least and the greatest dG0' that the table, or a measured constant in it, gives for a reaction."""
        if self.conditions is None:
            return None
        try:
            terms = self.table.terms(full_change(equation))
        except NotInTableError:
            return None
        c = self.conditions
        corners = [
            replace(c, pH=pH, pMg=pMg, ionic_strength_M=ionic)
            for pH, pMg, ionic in product(
                _PH if c.pH is None else (c.pH,),
                _PMG if c.pMg is None else (c.pMg,),
                _IONIC if c.ionic_strength_M is None else (c.ionic_strength_M,),
            )
        ]
        shifts = [0.0]
        for constant, sign in self.table.measured_for(terms):
            shifts.append(sign * constant.dG0_kJ_per_mol - self.table.from_formation(terms, constant.conditions))
        values = [self.table.from_formation(terms, corner) for corner in corners]
        return min(values) + min(shifts), max(values) + max(shifts)

    def _warn_of_composition(self, path: str, names: list[str] | tuple[str, ...]) -> None:
        missing = [n for n in names if self.table.reactants[n].entropy_sd >= COMPOSITION_SD]
        if missing and self.conditions is not None:
            self.warnings.append(
                f"{path}: no enthalpy for {', '.join(missing)}: the entropy is estimated from composition, good to about "
                f"{COMPOSITION_SD * 10:.1f} kJ/mol per 10 K"
            )

    def _doubt_conditions(self) -> None:
        if self._doubted or self.conditions is None:
            return
        self._doubted = True
        ionic, T = self.conditions.ionic_strength_M, self.conditions.temperature_K
        if ionic is not None and ionic > HIGHEST_IONIC_STRENGTH:
            self.warnings.append(
                f"conditions.ionic_strength: {ionic:g} M is above {HIGHEST_IONIC_STRENGTH} M, where the extended "
                "Debye-Hueckel law holds: energies from the reference table are extrapolated"
            )
        if not TRUSTED_TEMPERATURES[0] <= T <= TRUSTED_TEMPERATURES[1]:
            self.warnings.append(
                f"conditions.temperature: {T - 273.15:.4g} degC is outside 0 to 50 degC: energies from the reference table "
                "are extrapolated from 25 degC with constant enthalpies"
            )
