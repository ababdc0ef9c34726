"""One reaction table -> Reaction: any two of energy (or K, Kd), forward and backward fix the third."""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping
from dataclasses import replace

from driblet.energetics.gibbs import (
    LARGEST_EXPONENT,
    energy_by_combination,
    energy_of_formation,
    equilibrium_constant,
    standard_energy,
)
from driblet.energetics.reference import NotInTableError
from driblet.errors import Problem
from driblet.quantities import GAS_CONSTANT, OutOfRangeError, Quantity, QuantityError, power_unit
from driblet.system.equation import WATER, Equation, EquationError, read_equation
from driblet.system.expressions import nearest
from driblet.system.model import Conditions, Reaction
from driblet.system.reference_energies import ReferenceEnergies
from driblet.system.tables import EnergiesTable, EnergyTable, ReactionTable, StatedAt, read_table

MOST_MOLECULES = 3
AGREEMENT = 0.01  # kJ/mol by which an energy and a pair of rate constants may differ, all three being rounded
_KEYS = ("energy", "K", "Kd")


class _FaultError(Exception):
    """A problem of one key of one reaction; caught where the table is read."""


class ReactionReader:
    """Reads reaction tables against the species and conditions of one file, collecting problems."""

    def __init__(
        self,
        species: set[str],
        held: set[str],
        conditions: Conditions | None,
        problems: list[Problem],
        reference: ReferenceEnergies,
        catalysed: Collection[str] = (),
    ) -> None:
        """catalysed : names of reactions that enzymes carry; they need no rate of their own."""
        self.species, self.held, self.conditions, self.problems = species, held, conditions, problems
        self.reference, self.catalysed = reference, catalysed
        self.formation: dict[str, float] = {}
        self.hydrolysis: list[tuple[dict[str, int], float]] = []

    @property
    def temperature(self) -> float:
        # a file whose temperature is at fault still has its other problems found; the result is thrown away
        return self.conditions.temperature_K if self.conditions else 298.15

    def read_energies(self, table: EnergiesTable) -> None:
        """Take the formation energies and the hydrolysis reactions that reactions may refer to."""
        for name, quantity in table.formation.items():
            try:
                self.formation[name] = self._energy(quantity)
            except QuantityError as error:
                self.problems.append(Problem(f"energies.formation.{name}", str(error)))
        for text, quantity in table.hydrolysis.items():
            key = f'energies.hydrolysis."{text}"'
            try:
                equation = read_equation(text)
                if equation.water != -1:
                    raise EquationError(f'"{text}" does not take up one H2O on the left, as a hydrolysis does')
                self.hydrolysis.append((equation.change, self._energy(quantity)))
                self.reference.check_plausible(key, equation, self.hydrolysis[-1][1])
            except (EquationError, QuantityError) as error:
                self.problems.append(Problem(key, str(error)))

    def read(self, name: str, value: object) -> Reaction | None:
        """The Reaction of one table, or None after adding what is wrong to the problems."""
        path = f"reactions.{name}"
        table = read_table(ReactionTable, value, path, self.problems)
        text = value.get("equation") if isinstance(value, Mapping) else None
        if not isinstance(text, str) or not text.strip():
            return None
        try:
            equation = read_equation(text)
        except EquationError as error:
            self.problems.append(Problem(f"{path}.equation", str(error)))
            return None
        self._check_species(equation, path)
        if table is None:
            return None
        before = len(self.problems)
        if equation.reversible:
            reaction = self._reversible(name, table, equation, path)
        else:
            reaction = self._one_way(name, table, equation, path)
        return reaction if len(self.problems) == before else None

    def _check_species(self, equation: Equation, path: str) -> None:
        for name, _ in equation.reactants + equation.products:
            if name not in self.species and name != WATER:
                self.problems.append(
                    Problem(f"{path}.equation", f'"{name}" is not in [species]{nearest(name, self.species)}')
                )
        # products of a one-way reaction never meet
        for terms in (equation.reactants, equation.products) if equation.reversible else (equation.reactants,):
            counted = sum(n for name, n in terms if name not in self.held)
            if counted > MOST_MOLECULES:
                self.problems.append(
                    Problem(
                        f"{path}.equation",
                        f"{counted} molecules would have to meet at once; "
                        f"split it into steps of at most {MOST_MOLECULES}",
                    )
                )

    def _one_way(self, name: str, table: ReactionTable, equation: Equation, path: str) -> Reaction | None:
        if table.one_way is None:
            self._problem(
                path,
                "one_way",
                'a one-way reaction needs its reason, such as one_way = "escapes as gas"; '
                'or write "<=>" and its energy',
            )
        for key in (*_KEYS, "backward"):
            if getattr(table, key) is not None:
                self._problem(path, key, 'a one-way reaction has none; write "<=>" in the equation to use it')
        if table.forward is None:
            self._problem(path, "forward", "is missing: a one-way reaction needs its rate constant")
            return None
        forward = self._rate(path, "forward", table.forward, equation.reactants)
        if forward is None:
            return None
        return Reaction(
            name, table.label or name, equation, None, None, forward, None, "one way", one_way=table.one_way
        )

    def _reversible(self, name: str, table: ReactionTable, equation: Equation, path: str) -> Reaction | None:
        if table.one_way is not None:
            self._problem(path, "one_way", 'goes with "->"; this equation is reversible')
        given = [key for key in _KEYS if getattr(table, key) is not None]
        if len(given) > 1:
            self._problem(path, given[1], f"{' and '.join(given)} say the same thing; give one of them")
            return None
        forward = self._rate(path, "forward", table.forward, equation.reactants)
        backward = self._rate(path, "backward", table.backward, equation.products)
        if (table.forward is not None and forward is None) or (table.backward is not None and backward is None):
            return None
        sd, note = None, ""
        try:
            dG0 = None
            if table.energy == "reference":
                dG0, sd, note = self.reference.looked_up(f"{path}.energy", equation)
            elif given:
                dG0, note = self._carried(path, given[0], table, equation)
        except (QuantityError, _FaultError, EquationError, NotInTableError) as error:
            self._problem(path, given[0], str(error))
            return None
        if isinstance(table.energy, EnergyTable) and table.energy.sd is not None:
            try:
                sd = self._energy(table.energy.sd)
            except QuantityError as error:
                self._problem(path, "energy.sd", str(error))
                return None
            if sd < 0:
                self._problem(path, "energy.sd", f'"{table.energy.sd}" is negative; a standard deviation cannot be')
                return None
        if forward is None and backward is None and name not in self.catalysed:
            text = "is missing: a rate constant, forward or backward, is needed with the energy, or an enzyme"
            self._problem(path, "forward", text)
            return None
        if dG0 is None and (forward is None or backward is None):
            self._problem(path, "energy", "is missing: give energy, K or Kd, or both forward and backward")
            return None
        return self._combine(name, table, equation, path, dG0, forward, backward, given, sd, note)

    def _combine(
        self,
        name: str,
        table: ReactionTable,
        equation: Equation,
        path: str,
        dG0: float | None,
        forward: float | None,
        backward: float | None,
        given: list[str],
        sd: float | None,
        note: str,
    ) -> Reaction | None:
        RT = GAS_CONSTANT * self.temperature
        if forward is not None and backward is not None:
            from_rates = -RT * (math.log(forward) - math.log(backward))
            if dG0 is None:
                dG0 = from_rates
            elif abs(from_rates - dG0) > AGREEMENT:
                self._problem(
                    path,
                    "backward",
                    f"forward/backward means {from_rates:.4g} kJ/mol, {given[0]} says "
                    f"{dG0:.4g}: leave one of the three out",
                )
                return None
        assert dG0 is not None
        try:
            K = equilibrium_constant(dG0, self.temperature)
        except OverflowError:
            self._problem(
                path,
                given[0] if given else "forward",
                f"{dG0:.6g} kJ/mol is more than {LARGEST_EXPONENT:g} RT: "
                "K' is out of the range of a double; check the unit",
            )
            return None
        alone = forward is None and backward is None  # enzymes carry it alone
        if forward is None:
            forward = 0.0 if backward is None else backward * K
        backward = forward / K
        if not alone and not (0 < forward < math.inf and 0 < backward < math.inf):
            self._problem(path, "forward", "the reverse rate constant is out of the range of a double; check the units")
            return None
        origin = "rates" if not given else given[0]
        if origin == "energy" and isinstance(table.energy, str):
            origin = table.energy
        if origin != "reference":
            self.reference.check_plausible(f"{path}.{given[0] if given else 'forward'}", equation, dG0)
        return Reaction(name, table.label or name, equation, dG0, K, forward, backward, origin, sd, energy_note=note)

    def _carried(self, path: str, key: str, table: ReactionTable, equation: Equation) -> tuple[float, str]:
        """The stated energy at the file's conditions, and how it got there."""
        stated_at = table.K if table.K is not None else table.energy
        dG0 = self._stated_energy(table, equation, self.temperature)
        if self.conditions is None or not isinstance(stated_at, StatedAt):
            return dG0, ""
        there = stated_conditions(stated_at, self.conditions)
        if there == self.conditions:
            return dG0, ""
        value_there = self._stated_energy(table, equation, there.temperature_K)
        carried = self.reference.carried(f"{path}.{key}", equation, value_there, there)
        return (dG0, f"as given at {there}, not carried") if carried is None else (carried.dG0, carried.note)

    def _stated_energy(self, table: ReactionTable, equation: Equation, temperature: float) -> float:
        """dG0' as stated; a constant or an energy in kT means one at `temperature`."""
        if table.K is not None:
            K = table.K.value.to_power(equation.order_change)
            return self._from_constant(K, table.K.value, temperature)
        if table.Kd is not None:
            if equation.order_change == 0:
                raise _FaultError("a dissociation constant needs a side with more molecules; use K or energy")
            Kd = table.Kd.to_power(abs(equation.order_change))
            return self._from_constant(
                Kd if equation.order_change > 0 else 1 / Kd if Kd else 0.0, table.Kd, temperature
            )
        if table.energy == "formation":
            change = dict(equation.change)
            if equation.water:
                change[WATER] = equation.water
            missing = sorted(n for n in change if n not in self.formation)
            if missing:
                raise _FaultError(f"no energy of formation for {', '.join(missing)} in [energies.formation]")
            return energy_of_formation(change, self.formation)
        if table.energy == "hydrolysis":
            result = energy_by_combination(equation.change, self.hydrolysis)
            if result is None:
                raise _FaultError("the reaction is not a sum of the hydrolyses in [energies.hydrolysis]")
            if round(-sum(result[1])) != equation.water:
                raise _FaultError("the water in the equation does not match the hydrolyses it is a sum of")
            return result[0]
        assert isinstance(table.energy, EnergyTable)
        return self._energy(table.energy.value, temperature)

    def _from_constant(self, K: float, quantity: Quantity, temperature: float) -> float:
        if not 0 < K < math.inf:
            raise _FaultError(f'"{quantity}" will not do: an equilibrium constant is above zero and finite')
        return standard_energy(K, temperature)

    def _energy(self, quantity: Quantity, temperature: float | None = None) -> float:
        if quantity.kind == "thermal energy":
            return quantity.to("thermal energy") * GAS_CONSTANT * (temperature or self.temperature)
        return quantity.to("energy")

    def _rate(
        self, path: str, key: str, quantity: Quantity | None, reactants: tuple[tuple[str, int], ...]
    ) -> float | None:
        if quantity is None:
            return None
        order = sum(n for _, n in reactants)
        try:
            value = quantity.to_power(1 - order, 1)
        except OutOfRangeError as error:
            self._problem(path, key, str(error))
            return None
        except QuantityError:
            unit = power_unit(1 - order, 1)
            what = "one molecule" if order == 1 else f"{order} molecules" if order else "nothing"
            self._problem(path, key, f'"{quantity}" has the wrong unit: a rate from {what} has the unit {unit}')
            return None
        if value <= 0:
            self._problem(path, key, f'"{quantity}" will not do: a rate constant is above zero')
            return None
        return value

    def _problem(self, path: str, key: str, text: str) -> None:
        self.problems.append(Problem(f"{path}.{key}", text))


def stated_conditions(table: StatedAt, conditions: Conditions) -> Conditions:
    """The conditions a value was stated at: the keys its table gives, the file's for the rest."""
    given = {
        "temperature_K": table.temperature,
        "pH": table.pH,
        "pH_scale": table.pH_scale,
        "pMg": table.pMg,
        "ionic_strength_M": table.ionic_strength,
    }
    return replace(conditions, **{key: value for key, value in given.items() if value is not None})  # type: ignore[arg-type]
