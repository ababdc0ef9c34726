"""From the text of a system file to a System: every problem is collected, then raised as one InputError."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from driblet.energetics.cycles import OpenCycle, unclosed_cycles
from driblet.energetics.reactant_tables import read_reactants
from driblet.energetics.reference import reference_table
from driblet.errors import InputError, Problem, one_problem
from driblet.quantities import QuantityError, thermal_energy
from driblet.system.additions import read_addition
from driblet.system.compartments import CompartmentReader
from driblet.system.conditions import read_conditions, with_free_magnesium
from driblet.system.enzymes import EnzymeReader, Expansion, catalysed_reactions
from driblet.system.equation import NAME, RESERVED, EquationError, read_equation
from driblet.system.expressions import ExpressionError, Names, read_value
from driblet.system.model import (
    Addition,
    Compartment,
    Conditions,
    Reaction,
    Readout,
    Requirement,
    RunSettings,
    Species,
    System,
)
from driblet.system.reactions import ReactionReader
from driblet.system.reference_energies import ReferenceEnergies
from driblet.system.requirements import read_requirement
from driblet.system.tables import (
    SECTIONS,
    EnergiesTable,
    RunTable,
    SpeciesTable,
    read_table,
    unknown_key,
)
from driblet.system.values import with_values

LARGEST_COUNT = 2.0**53
LARGEST_LOG_RATE = 200.0  # log10 of a propensity constant in 1/s; times (2^53)^3 it is still a double
HDF5_MAGIC = b"\x89HDF\r\n\x1a\n"


def load(path: str | Path, *, closure: bool = True) -> System:
    """Read and validate a system file. Raises InputError with every problem found.

    With closure=False energies that do not close a cycle are let pass: for `reconcile` alone.
    """
    source = str(path)
    try:
        data = Path(path).read_bytes()
    except (OSError, ValueError) as error:  # a ValueError when the name holds a NUL
        reason = getattr(error, "strerror", None) or str(error)
        raise one_problem(source, "", f"cannot be read: {reason.lower()}") from error
    if data.startswith(HDF5_MAGIC):
        raise one_problem(
            source, "", f"is an HDF5 file, not a system file: `driblet show {source}` prints what it holds"
        )
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise one_problem(source, "", "is not text in UTF-8, so it is no system file") from error
    return loads(text, source, closure=closure)


def loads(text: str, source: str = "system file", *, closure: bool = True) -> System:
    """Read and validate the text of a system file. Raises InputError with every problem found."""
    if not text.strip():
        raise one_problem(source, "", "is empty; `driblet new` writes a commented starter file")
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        reason = str(error)
        if "overwrite" in reason or "declare" in reason or "twice" in reason:
            reason += "; each name may be given once"
        raise one_problem(source, "", f"is not valid TOML: {reason[0].lower()}{reason[1:]}") from error
    except (ValueError, RecursionError) as error:  # an integer of thousands of digits, thousands of brackets
        raise one_problem(source, "", f"is not a system file: {error}") from error
    return build(raw, text, source, closure=closure)


def build(raw: Mapping[str, Any], text: str, source: str = "system file", *, closure: bool = True) -> System:
    """Validate a system file that is parsed already; `text` is kept as it is. Raises InputError with every problem."""
    builder = _Builder(raw, text, source, closure)
    system = builder.build()
    if builder.problems or system is None:
        raise InputError(source, builder.problems)
    return system


class _Builder:
    def __init__(self, raw: Mapping[str, Any], text: str, source: str, closure: bool) -> None:
        self.text, self.source, self.closure = text, source, closure
        self.problems: list[Problem] = []
        self.warnings: list[str] = []
        self.raw = with_values(raw, self.problems, self.warnings)

    def problem(self, key: str, text: str) -> None:
        self.problems.append(Problem(key, text))

    def build(self) -> System | None:
        for key in self.raw:
            if key not in SECTIONS:
                self.problem(key, unknown_key(key, list(SECTIONS)))
        title = self.raw.get("title", Path(self.source).stem)
        if not isinstance(title, str) or not title.strip():
            self.problem("title", "a text in quotes is needed")
        own = read_reactants(self.section("reactants", required=False), "reactants", self.problems)
        reference = reference_table().with_reactants(own)
        conditions = read_conditions(self.raw.get("conditions", {}), reference, self.problems)
        compartment = self.compartment()
        run = read_table(RunTable, self.raw.get("run", {}), "run", self.problems)
        species = self.species(run.loading if run else "nearest", compartment)
        if conditions and compartment:
            conditions = with_free_magnesium(conditions, reference, species, compartment, self.problems)
        unsolved = conditions is not None and conditions.total_magnesium_M is not None and conditions.pMg is None
        energies = ReferenceEnergies(reference, None if unsolved else conditions, self.warnings)
        reactions = self.reactions(energies, conditions)
        loading = run.loading if run else "nearest"
        expansions = self.enzymes(species, reactions, conditions, compartment, loading)
        additions = self.additions(species, expansions, run, loading)
        names = self.names(conditions)
        readouts = self.readouts(names)
        requirements = self.requirements(replace(names, readouts={r.name: r.expression for r in readouts}), run)
        settings = self.settings(run)
        if self.problems or not (conditions and compartment and settings):
            return None
        if self.closure:
            self.check_closure(species, reactions)
        stated = tuple(reactions)
        species += [one for e in expansions for one in e.species]
        reactions = [r for r in reactions if r.forward] + [r for e in expansions for r in e.reactions]
        self.check_rates(compartment, species, reactions)
        return System(
            title.strip(),
            conditions,
            compartment,
            tuple(species),
            tuple(reactions),
            tuple(readouts),
            settings,
            self.text,
            self.source,
            tuple(self.warnings),
            reference,
            requirements=tuple(requirements),
            enzymes=tuple(e.enzyme for e in expansions),
            stated=stated,
            additions=tuple(additions),
            treatments=tuple(
                (e.enzyme.name, how) for e in expansions if (how := e.treatment or run.treatment) is not None
            )
            if run
            else (),
        )

    def entries(self, name: str) -> Mapping[str, Any]:
        """A section as it stands in the file, empty when it is no table (which `section` reports)."""
        value = self.raw.get(name, {})
        return value if isinstance(value, Mapping) else {}

    def section(self, name: str, required: bool) -> Mapping[str, Any]:
        """The named tables of a section whose keys are the user's own names."""
        value = self.raw.get(name, {})
        if not isinstance(value, Mapping):
            self.problem(name, f"a table of named entries is needed, not {value!r}")
            return {}
        if required and not value:
            self.problem(name, "is missing or empty; at least one entry is needed")
        for entry in value:
            if not NAME.fullmatch(entry) or not entry.isascii():
                self.problem(
                    f'{name}."{entry}"',
                    "is not a name: a letter, then letters, digits or underscores "
                    '(label = "..." sets what figures show)',
                )
        return value

    def compartment(self) -> Compartment | None:
        section = self.section("compartments", required=True)
        if len(section) > 1:
            self.problem("compartments", f"{len(section)} are given; this version simulates exactly one")
        if not section:
            return None
        attachments = self.entries("attachments")
        reader = CompartmentReader(Path(self.source).parent, attachments, self.problems)
        compartment = reader.read(*next(iter(section.items())))
        self.text += reader.attached
        return compartment

    def species(self, default_loading: str, compartment: Compartment | None) -> list[Species]:
        species = []
        for name, value in self.section("species", required=True).items():
            path = f"species.{name}"
            if name in RESERVED:
                hint = "water is the solvent: write H2O in equations only" if name == "H2O" else "is a reserved word"
                self.problem(path, hint)
                continue
            short = not isinstance(value, Mapping)
            faults: list[Problem] = []
            table = read_table(SpeciesTable, {"amount": value} if short else value, path, faults)
            self.problems += [Problem(path if short else p.key, p.text) for p in faults]
            if table is None:
                continue
            loading = table.loading or default_loading
            try:
                copies = table.amount.to("copies") if table.amount.kind == "copies" else None
                concentration = None if copies is not None else table.amount.to("concentration")
            except QuantityError as error:
                self.problem(path, str(error))
                continue
            if table.held and copies is not None:
                self.problem(path, "a held species has a fixed concentration: give one, not copies")
            if table.held and concentration == 0:
                self.problem(path, "a species held at zero would stop its reactions one way; leave it out")
            if copies is not None and loading == "nearest" and copies != round(copies):
                self.problem(path, f'"{table.amount}" is fractional: only loading = "poisson" takes it as a mean')
            omega = compartment.omega if compartment else 1.0
            if not table.held and (copies if copies is not None else concentration * omega) > LARGEST_COUNT:  # type: ignore[operator]
                self.problem(path, f'"{table.amount}" is more than 2^53 copies, too many to count')
                copies, concentration = 0.0, None  # what follows looks for other problems, with numbers it can hold
            species.append(Species(name, table.label or name, concentration, copies, table.held, loading))
        return species

    def reactions(self, reference: ReferenceEnergies, conditions: Conditions | None) -> list[Reaction]:
        energies = read_table(EnergiesTable, self.raw.get("energies", {}), "energies", self.problems)
        species = self.entries("species")
        held = {n for n, v in species.items() if isinstance(v, Mapping) and v.get("held") is True}
        catalysed = catalysed_reactions(self.entries("enzymes"))
        reader = ReactionReader(set(species), held, conditions, self.problems, reference, catalysed)
        if energies is not None:
            reader.read_energies(energies)
        found = (reader.read(name, value) for name, value in self.section("reactions", required=True).items())
        return [reaction for reaction in found if reaction is not None]

    def enzymes(
        self,
        species: list[Species],
        reactions: list[Reaction],
        conditions: Conditions | None,
        compartment: Compartment | None,
        loading: str,
    ) -> list[Expansion]:
        section = self.section("enzymes", required=False)
        if conditions is None:
            return []
        reader = EnzymeReader(
            {s.name: s for s in species},
            {r.name: r for r in reactions},
            self.entries("reactions"),
            conditions.RT_kJ_per_mol,
            compartment.omega if compartment else 1.0,
            loading,
            self.problems,
        )
        found = (reader.read(name, value) for name, value in section.items())
        return [expansion for expansion in found if expansion is not None]

    def additions(
        self, species: list[Species], expansions: list[Expansion], run: RunTable | None, loading: str
    ) -> list[Addition]:
        known = {s.name: s for s in [*species, *(e.species[0] for e in expansions)]}
        declared = [*self.entries("species"), *self.entries("enzymes")]
        duration = run.duration if run else None
        found = (
            read_addition(name, value, known, declared, duration, loading, self.problems)
            for name, value in self.section("additions", required=False).items()
        )
        return sorted((a for a in found if a is not None), key=lambda a: a.at_s)

    def names(self, conditions: Conditions | None) -> Names:
        """What an expression of this file may refer to, the readouts apart."""
        species, reactions = self.entries("species"), self.entries("reactions")
        one_way = set()
        for name, value in reactions.items():
            try:
                if isinstance(value, Mapping) and not read_equation(str(value.get("equation"))).reversible:
                    one_way.add(name)
            except EquationError:
                continue
        RT = conditions.RT_kJ_per_mol if conditions else thermal_energy(298.15)
        return Names([*species, *self.entries("enzymes")], [r for r in reactions if r not in one_way], RT_kJ_per_mol=RT)

    def readouts(self, names: Names) -> list[Readout]:
        readouts = []
        for name, value in self.section("readouts", required=False).items():
            path = f"readouts.{name}"
            if not isinstance(value, str):
                self.problem(path, f"an expression in quotes is needed, not {value!r}")
                continue
            try:
                readouts.append(Readout(name, read_value(value, names)))
            except ExpressionError as error:
                self.problem(path, str(error))
        return readouts

    def requirements(self, names: Names, run: RunTable | None) -> list[Requirement]:
        duration = run.duration if run else None
        found = (
            read_requirement(name, value, names, duration, self.problems)
            for name, value in self.section("requirements", required=False).items()
        )
        return [requirement for requirement in found if requirement is not None]

    def settings(self, run: RunTable | None) -> RunSettings | None:
        if run is None:
            return None
        duration = run.duration or 0.0
        sample_every = run.sample_every or 0.0
        if duration and sample_every > duration:
            self.problem("run.sample_every", "is longer than the run")
        if duration and run.burn_in is not None and run.burn_in >= duration:
            self.problem("run.burn_in", "leaves nothing of the run; it is shorter than duration")
        return RunSettings(
            run.engine,
            run.replicates,
            duration,
            sample_every,
            run.seed,
            burn_in_s=run.burn_in,
            record=run.record,
            leap_tolerance=run.leap_tolerance,
        )

    def check_rates(self, compartment: Compartment, species: list[Species], reactions: list[Reaction]) -> None:
        """Refuse rate constants whose propensities a double could not hold."""
        held = {s.name: s.concentration_M for s in species if s.held and s.concentration_M}
        for reaction in reactions:
            for key, constant, terms in (
                ("forward", reaction.forward, reaction.equation.reactants),
                ("backward", reaction.backward, reaction.equation.products),
            ):
                if constant is None:
                    continue
                order = sum(number for name, number in terms if name not in held)
                log_rate = math.log10(constant) + (1 - order) * math.log10(compartment.omega)
                log_rate += sum(number * math.log10(held[name]) for name, number in terms if name in held)
                if log_rate > LARGEST_LOG_RATE:
                    self.problem(
                        f"reactions.{reaction.name}",
                        f"its {key} direction would fire 1e{log_rate:.0f} times a second; check the rate and the energy",
                    )
                    break

    def check_closure(self, species: list[Species], reactions: list[Reaction]) -> None:
        reversible = [r for r in reactions if r.dG0_kJ_per_mol is not None]
        matrix = stoichiometric_matrix([s.name for s in species], reversible)
        for cycle in unclosed_cycles(matrix, np.array([r.dG0_kJ_per_mol for r in reversible], dtype=float)):
            self.problem("reactions", describe_open_cycle(cycle, [r.name for r in reversible], self.source))


def stoichiometric_matrix(species: list[str], reactions: list[Reaction]) -> NDArray[np.int64]:
    """Net stoichiometric numbers, int64, shape=(species, reactions); water has no row."""
    row = {name: i for i, name in enumerate(species)}
    matrix = np.zeros((len(species), len(reactions)), dtype=np.int64)
    for j, reaction in enumerate(reactions):
        for name, number in reaction.equation.change.items():
            matrix[row[name], j] = number
    return matrix


def describe_cycle(weights: NDArray[np.int64], names: list[str]) -> str:
    """A cycle as text: "relay + leak - 2 shunt"."""
    text = ""
    for weight, name in zip(weights, names, strict=True):
        if weight:
            number = f"{abs(weight)} " if abs(weight) > 1 else ""
            sign = (" - " if weight < 0 else " + ") if text else ("-" if weight < 0 else "")
            text += f"{sign}{number}{name}"
    return text


def describe_open_cycle(cycle: OpenCycle, names: list[str], source: str) -> str:
    """The message for a cycle whose energies do not sum to zero."""
    return (
        f"the energies along the cycle {describe_cycle(cycle.reactions, names)} sum to {cycle.excess:+.6g} kJ/mol "
        f"where they must sum to zero; `driblet reconcile {source}` shows the nearest energies that do"
    )
