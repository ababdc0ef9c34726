"""[enzymes.NAME] tables -> enzymes, and the species and elementary reactions they expand to.

Free enzyme and complexes are species with names no user can type (`kinase`, `kinase.ATP`, `kinase.ATP.sugar`), each step
a reversible reaction whose energy follows from its constants, so that network, engines and laws need to know nothing of
enzymes. All of an enzyme starts free.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping
from typing import NamedTuple

from driblet.errors import Problem
from driblet.quantities import Quantity, QuantityError
from driblet.system.enzyme_tables import ActivityTable, EnzymeTable, SaturableTable
from driblet.system.equation import RESERVED, Equation
from driblet.system.expressions import nearest
from driblet.system.mechanisms import MECHANISMS, ActivitySpec, Assembler, Enzyme, EnzymeStep, MechanismError
from driblet.system.model import Reaction, Species
from driblet.system.saturable import MOST_MOLECULES, saturable_enzyme, saturable_reaction
from driblet.system.tables import read_table

LARGEST_COUNT = 2.0**53
LUMPED = "lumped"
SMALLEST_CONSTANT, LARGEST_CONSTANT = (
    1e-30,
    1e30,
)  # of any constant, in mol/L and s: products of several stay in a double


class Expansion(NamedTuple):
    """An enzyme with the species and reactions that stand for it; treatment : as its table asks, None where it does not."""

    enzyme: Enzyme
    species: tuple[Species, ...]
    reactions: tuple[Reaction, ...]
    treatment: str | None = None


class _Fault(Exception):
    """A problem of one key below an enzyme's table."""

    def __init__(self, key: str, text: str) -> None:
        super().__init__(text)
        self.key, self.text = key, text


def catalysed_reactions(section: Mapping[str, object]) -> frozenset[str]:
    """Names of the reactions that the tables of [enzymes] say they catalyse, before anything is validated."""
    found: list[object] = []
    for value in section.values():
        if isinstance(value, Mapping):
            also = value.get("also")
            found += [value.get("catalyses"), *(also if isinstance(also, Mapping) else ())]
    return frozenset(name for name in found if isinstance(name, str))


class EnzymeReader:
    """Reads enzyme tables against the species and reactions of one file, collecting problems."""

    def __init__(
        self,
        species: Mapping[str, Species],
        reactions: Mapping[str, Reaction],
        declared: Mapping[str, object],
        RT_kJ_per_mol: float,
        omega: float,
        loading: str,
        problems: list[Problem],
    ) -> None:
        """reactions : those that are sound; declared : all of the file, so that a faulty one is not called unknown."""
        self.species, self.known, self.declared = species, reactions, declared
        self.RT, self.omega, self.loading, self.problems = RT_kJ_per_mol, omega, loading, problems

    def read(self, name: str, value: object) -> Expansion | None:
        """The expansion of one table, or None after adding what is wrong to the problems."""
        path = f"enzymes.{name}"
        before = len(self.problems)
        if name in self.species:
            self.problems.append(Problem(path, f"is also the name of a species; call the enzyme {name}_enzyme, say"))
        if name in RESERVED:
            self.problems.append(Problem(path, "is a reserved word"))
        if isinstance(value, Mapping) and "law" in value:
            return self._saturable(name, value, path, before)
        table = read_table(EnzymeTable, value, path, self.problems)
        if table is None:
            return None
        assembler = Assembler(name, self.RT)
        tables: dict[str, tuple[str, ActivityTable]] = {}
        if table.catalyses is None:
            text = "is missing: an enzyme that catalyses nothing does nothing; name the reaction it catalyses"
            self._problem(path, "catalyses", text)
        else:
            tables[table.catalyses] = (path, table)
        for reaction, activity in table.also.items():
            if reaction in tables:
                self._problem(f"{path}.also", reaction, "is catalysed by this enzyme already")
            tables.setdefault(reaction, (f"{path}.also.{reaction}", activity))
        for reaction, (where, activity) in tables.items():
            # after a fault it is not known which constants an earlier reaction would have fixed
            certain = len(self.problems) == before
            try:
                spec = self._activity(reaction, activity, table, assembler, certain)
                if spec is not None:
                    assembler.add(spec)
                    if not all(0 < k < math.inf for step in assembler.steps for k in (step.forward, step.backward)):
                        raise ArithmeticError
            except ArithmeticError:
                key = "kcat" if activity.steps is None else "steps"
                self._problem(where, key, "its steps leave the range of a double; check the units")
            except _Fault as fault:
                self._problem(where, fault.key, fault.text)
            except MechanismError as error:
                self._problem(where, error.key or "mechanism", str(error))
        amount = self._attempt(path, "amount", self._amount, table)
        for ligand, inhibitor in table.inhibitors.items():
            key = f"inhibitors.{ligand}"
            try:
                self._inhibit(assembler, key, ligand, inhibitor.Ki, inhibitor.on_rate)
            except _Fault as fault:
                self._problem(path, fault.key, fault.text)
        if len(self.problems) > before or amount is None:
            return None
        enzyme = assembler.enzyme(table.label or name, table.half_life, table.active_fraction, table.molar_mass)
        twice = [n for n, times in Counter(step.name for step in enzyme.steps).items() if times > 1]
        if twice:  # a reaction called "binds_ATP", say
            self._problem(path, "", f"two of its steps would be called {twice[0]}; rename the reaction")
            return None
        return self._expand(enzyme, amount, table.loading or self.loading)._replace(treatment=table.treatment)

    def _saturable(self, name: str, value: Mapping[str, object], path: str, before: int) -> Expansion | None:
        """An enzyme without a mechanism: one state, one reaction."""
        table = read_table(SaturableTable, value, path, self.problems)
        if table is None:
            return None
        try:
            reaction = self._catalysed(table.catalyses, "catalyses")
            found = None if reaction is None else self._saturable_constants(table, reaction)
        except _Fault as fault:
            self._problem(path, fault.key, fault.text)
            found = None
        amount = self._attempt(path, "amount", self._amount, table)
        if len(self.problems) > before or amount is None or reaction is None or found is None:
            return None
        direction, kcat, KM = found
        facts = {
            "half_life_s": table.half_life,
            "active_fraction": table.active_fraction,
            "molar_mass": table.molar_mass,
        }
        enzyme = saturable_enzyme(name, table.label or name, reaction, direction, kcat, KM, **facts)
        made = self._expand(enzyme, amount, table.loading or self.loading)
        carried = saturable_reaction(name, reaction, direction, kcat, KM)
        return made._replace(reactions=(carried, *made.reactions), treatment=LUMPED)

    def _saturable_constants(self, table: SaturableTable, reaction: Reaction) -> tuple[int, float, dict[str, float]]:
        direction = -1 if table.direction == "backward" else 1
        sides = (reaction.equation.reactants, reaction.equation.products)[::direction]
        for terms, what in zip(sides, ("takes", "gives"), strict=True):
            molecules = sum(number for _, number in terms)
            if molecules > MOST_MOLECULES:
                raise _Fault(
                    "catalyses", f"{reaction.name} {what} {molecules} molecules; a saturable law has at most 2 a side"
                )
        if (table.kcat is None) == (table.activity is None):
            raise _Fault("kcat", "one of kcat and activity is needed")
        kcat = self._kcat(table, table)
        ligands = tuple(n for terms in sides for n, _ in terms)
        KM = self._constants("KM", table.KM, reaction.name, ligands, ())
        missing = [n for n, _ in sides[0] if n not in KM]
        if missing:
            raise _Fault("KM", f"the K_M of {', '.join(missing)} is missing")
        return direction, kcat, KM

    def _attempt(self, path: str, key: str, read, table: EnzymeTable | SaturableTable):  # type: ignore[no-untyped-def]
        try:
            return read(table)
        except _Fault as fault:
            self._problem(path, fault.key, fault.text)
        except QuantityError as error:
            self._problem(path, key, str(error))
        return None

    def _problem(self, path: str, key: str, text: str) -> None:
        self.problems.append(Problem(f"{path}.{key}" if key else path, text))

    def _amount(self, table: EnzymeTable | SaturableTable) -> tuple[float | None, float | None]:
        """(mol/L, None) or (None, copies) of active enzyme."""
        given = table.amount
        if given.kind == "copies":
            copies = given.to("copies") * table.active_fraction
            if (table.loading or self.loading) == "nearest" and abs(copies - round(copies)) > 1e-9:
                what = (
                    f'"{given}" is' if table.active_fraction == 1 else f'"{given}" of which this fraction is active is'
                )
                raise _Fault("amount", f'{what} fractional: only loading = "poisson" takes it as a mean')
            copies = round(copies) if (table.loading or self.loading) == "nearest" else copies
            result: tuple[float | None, float | None] = (None, float(copies))
        elif given.kind == "mass concentration":
            if table.molar_mass is None:
                raise _Fault("molar_mass", f'is missing: "{given}" is a mass, and molecules are counted')
            result = (given.to("mass concentration") / table.molar_mass * table.active_fraction, None)
        else:
            result = (given.to("concentration") * table.active_fraction, None)
        total = result[1] if result[1] is not None else (result[0] or 0.0) * self.omega
        if total > LARGEST_COUNT:
            raise _Fault("amount", f'"{given}" is more than 2^53 copies, too many to count')
        return result

    def _activity(
        self, name: str, table: ActivityTable, enzyme: EnzymeTable, assembler: Assembler, certain: bool
    ) -> ActivitySpec | None:
        reaction = self._catalysed(name, "catalyses" if table is enzyme else "")
        if reaction is None:
            return None
        assert reaction.K is not None
        equation = reaction.equation
        direction = -1 if table.direction == "backward" else 1
        sides = (equation.reactants, equation.products)[::direction]
        mechanism, substrates, products = self._order(name, table, *sides)
        K = reaction.K if direction == 1 else 1.0 / reaction.K
        known = ("kcat", "activity", "steps")
        given = [key for key in known if getattr(table, key) is not None]
        if len(given) != 1:
            text = "one of kcat, activity and steps is needed" + (f", not {' and '.join(given)}" if given else "")
            raise _Fault(given[1] if given else "kcat", text)
        if table.interaction is not None and mechanism != "random bi bi":
            raise _Fault("interaction", f"{mechanism} has none: its substrates bind in one order")
        if table.steps is not None:
            for key in ("KM", "Kd", "interaction"):
                if getattr(table, key):
                    raise _Fault(key, "follows from steps; leave one of the two out")
            steps = {key: self._step(key, step.forward, step.backward) for key, step in table.steps.items()}
            return ActivitySpec(name, mechanism, direction, substrates, products, K, steps=steps)
        kcat = self._kcat(table, enzyme)
        shared = assembler.shared(mechanism, substrates, products)
        KM = self._constants("KM", table.KM, name, substrates, products)
        Kd = self._constants("Kd", table.Kd, name, substrates + products, ())
        for key, values in (("KM", KM), ("Kd", Kd)):
            for ligand in shared & set(values):
                raise _Fault(f"{key}.{ligand}", "is fixed by an earlier reaction of this enzyme, which binds it too")
        missing = [n for n in dict.fromkeys(substrates) if n not in KM and n not in shared]
        if missing and not certain:
            return None
        if missing:
            raise _Fault("KM", f"the K_M of {', '.join(missing)} is missing")
        return ActivitySpec(name, mechanism, direction, substrates, products, K, kcat, KM, Kd, table.interaction or 1.0)

    def _catalysed(self, name: str, key: str) -> Reaction | None:
        """A reaction that an enzyme can catalyse, None for one whose own fault is told elsewhere."""
        reaction = self.known.get(name)
        if reaction is None:
            if name not in self.declared:
                raise _Fault(key, f'"{name}" is not in [reactions]{nearest(name, list(self.declared))}')
            return None
        equation = reaction.equation
        if reaction.K is None:
            raise _Fault("catalyses", f'{name} is one way; an enzyme needs the energy of its reaction: write "<=>"')
        both = {n for n, _ in equation.reactants} & {n for n, _ in equation.products}
        if both:
            raise _Fault("catalyses", f"{', '.join(sorted(both))} stands on both sides of {name}; leave it out of both")
        return reaction

    def _order(
        self,
        name: str,
        table: ActivityTable,
        left: tuple[tuple[str, int], ...],
        right: tuple[tuple[str, int], ...],
    ) -> tuple[str, tuple[str, ...], tuple[str, ...]]:
        """The mechanism, and substrates and products in the order bound and released."""
        counts = (sum(n for _, n in left), sum(n for _, n in right))
        fitting = [m for m, size in MECHANISMS.items() if size == counts]
        if table.mechanism not in MECHANISMS:
            known = ", ".join(f'"{m}"' for m in (fitting or MECHANISMS))
            raise _Fault("mechanism", f'"{table.mechanism}" is not known; for {name}: {known}')
        if table.mechanism not in fitting:
            known = " or ".join(f'"{m}"' for m in fitting) or "no mechanism here"
            raise _Fault(
                "mechanism",
                f"{name} takes {counts[0]} and gives {counts[1]} molecules, water not counted, which "
                f"{table.mechanism} does not; {known} does",
            )
        ordered = []
        for key, terms, what in (("binds", left, "taken up"), ("releases", right, "given off")):
            written = tuple(n for n, number in terms for _ in range(number))
            stated: tuple[str, ...] | None = getattr(table, key)
            if stated is not None:
                for ligand in stated:
                    if ligand not in written:
                        raise _Fault(key, f'"{ligand}" is not {what} by {name}{nearest(ligand, set(written))}')
                if Counter(stated) != Counter(written):
                    raise _Fault(key, f"must name each molecule {what} by {name} once: {', '.join(written)}")
            ordered.append(stated or written)
        return table.mechanism, ordered[0], ordered[1]

    def _kcat(self, table: ActivityTable | SaturableTable, enzyme: EnzymeTable | SaturableTable) -> float:
        if table.kcat is not None:
            return _positive("kcat", table.kcat, table.kcat.to_power, 0, 1)
        assert table.activity is not None
        if enzyme.molar_mass is None:
            raise _Fault("molar_mass", f'is missing: an activity ("{table.activity}") is per mass, kcat per molecule')
        if table.direction is None:
            raise _Fault("direction", 'is missing: state whether the activity was measured "forward" or "backward"')
        per_gram = _positive("activity", table.activity, table.activity.to, "specific activity")
        # U/mg are of all the protein; the simulated, active part of it does all the work
        return per_gram * enzyme.molar_mass / enzyme.active_fraction

    def _constants(
        self,
        key: str,
        given: Mapping[str, Quantity],
        reaction: str,
        ligands: tuple[str, ...],
        products: tuple[str, ...],
    ) -> dict[str, float]:
        out = {}
        for name, quantity in given.items():
            if name in products:
                raise _Fault(f"{key}.{name}", f"is a product here; give its dissociation constant, as Kd.{name}")
            if name not in ligands:
                raise _Fault(f"{key}.{name}", f'"{name}" is no ligand of {reaction}{nearest(name, set(ligands))}')
            out[name] = _positive(f"{key}.{name}", quantity, quantity.to, "concentration")
        return out

    def _step(self, key: str, forward: Quantity | None, backward: Quantity | None) -> tuple[float | None, float | None]:
        orders = (1, 0) if key.startswith("binds_") else (0, 1) if key.startswith("releases_") else (0, 0)
        values = []
        for which, quantity, order in (("forward", forward, orders[0]), ("backward", backward, orders[1])):
            where = f"steps.{key}.{which}"
            values.append(None if quantity is None else _positive(where, quantity, quantity.to_power, -order, 1))
        return values[0], values[1]

    def _inhibit(self, assembler: Assembler, key: str, ligand: str, Ki: Quantity, on_rate: Quantity | None) -> None:
        if ligand not in self.species:
            raise _Fault(key, f'"{ligand}" is not in [species]{nearest(ligand, self.species)}')
        if assembler.holds(ligand):
            raise _Fault(key, f"{ligand} binds the free enzyme already, as a substrate or product")
        K = _positive(f"{key}.Ki", Ki, Ki.to, "concentration")
        on = None if on_rate is None else _positive(f"{key}.on_rate", on_rate, on_rate.to_power, -1, 1)
        assembler.inhibit(ligand, K, on)

    def _expand(self, enzyme: Enzyme, amount: tuple[float | None, float | None], loading: str) -> Expansion:
        species = []
        for i, state in enumerate(enzyme.states):
            concentration, copies = amount if i == 0 else (None, 0.0)
            species.append(
                Species(
                    state.name,
                    enzyme.label if i == 0 else state.name,
                    concentration,
                    copies,
                    False,
                    loading if i == 0 else "nearest",
                    enzyme=enzyme.name,
                    holds=state.holds,
                )
            )
        water = {a.counted: a.direction * self.known[a.reaction].equation.water for a in enzyme.activities}
        turns = {a.counted: ((a.reaction, a.direction),) for a in enzyme.activities}
        reactions = [
            self._reaction(enzyme, step, water.get(k, 0), turns.get(k, ())) for k, step in enumerate(enzyme.steps)
        ]
        if enzyme.half_life_s is not None:
            rate = math.log(2.0) / enzyme.half_life_s
            for state in enzyme.states:
                bound = state.name.removeprefix(enzyme.name).lstrip(".").replace(".", "_")
                name = f"{enzyme.name}.inactivates" + (f"_with_{bound}" if bound else "")
                equation = Equation(((state.name, 1),), state.holds, 0, False)
                reason = f"{enzyme.label} inactivates for good"
                reactions.append(
                    Reaction(
                        name, name, equation, None, None, rate, None, "one way", one_way=reason, enzyme=enzyme.name
                    )
                )
        return Expansion(enzyme, tuple(species), tuple(reactions))

    def _reaction(self, enzyme: Enzyme, step: EnzymeStep, water: int, turns: tuple[tuple[str, int], ...]) -> Reaction:
        taken = ((step.binds, 1),) if step.binds is not None else ()
        let_go = ((step.releases, 1),) if step.releases is not None else ()
        left = ((enzyme.states[step.source].name, 1), *taken)
        right = ((enzyme.states[step.target].name, 1), *let_go)
        ln_K = math.log(step.forward) - math.log(step.backward)
        return Reaction(
            step.name,
            step.name,
            Equation(left, right, water, True),
            -self.RT * ln_K,
            step.forward / step.backward,
            step.forward,
            step.backward,
            "enzyme",
            enzyme=enzyme.name,
            turns=turns,
        )


def _positive(key: str, quantity: Quantity, convert, *kind) -> float:  # type: ignore[no-untyped-def]
    try:
        value = float(convert(*kind))
    except QuantityError as error:
        raise _Fault(key, str(error)) from error
    if value <= 0:
        raise _Fault(key, f'"{quantity}" will not do: it must be above zero')
    if not SMALLEST_CONSTANT <= value <= LARGEST_CONSTANT:
        raise _Fault(key, f'"{quantity}" is far outside what any enzyme shows; check the unit')
    return value
