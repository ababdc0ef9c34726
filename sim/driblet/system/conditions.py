"""The [conditions] table -> Conditions, with free magnesium solved where the total is given."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from driblet.energetics.conditions import Buffer, Conditions
from driblet.energetics.magnesium import CannotBeMetError, check_ionic_strength, solved_pMg
from driblet.energetics.reference import BufferEntry, Reference
from driblet.errors import Problem
from driblet.system.model import Compartment, Species
from driblet.system.tables import BufferTable, ConditionsTable, read_table


def read_conditions(value: object, reference: Reference, problems: list[Problem]) -> Conditions | None:
    """The Conditions of the table, or None after adding what is wrong to `problems`."""
    table = read_table(ConditionsTable, value, "conditions", problems)
    if table is None:
        return None
    if table.pMg is not None and table.total_magnesium is not None:
        problems.append(Problem("conditions.total_magnesium", "pMg is what it would be solved for; give one of them"))
    buffer = _buffer(table.buffer, reference, problems) if table.buffer else None
    return Conditions(
        table.temperature,
        table.pH,
        table.pMg,
        table.ionic_strength,
        table.pH_scale,
        table.total_magnesium,
        buffer,
    )


def _buffer(table: BufferTable, reference: Reference, problems: list[Problem]) -> Buffer | None:
    known = reference.buffer(table.name)
    if known is None and (table.pK is None or table.acid_charge is None):
        names = ", ".join(reference.buffers)
        problems.append(
            Problem(
                "conditions.buffer.name",
                f'"{table.name}" is not in the reference table ({names}); give its pK and acid_charge',
            )
        )
        return None
    known = known or BufferEntry(0.0, 0.0, 0)
    return Buffer(
        table.name,
        table.concentration,
        known.pK if table.pK is None else table.pK,
        known.enthalpy_kJ_per_mol if table.enthalpy is None else table.enthalpy,
        known.acid_charge if table.acid_charge is None else table.acid_charge,
    )


def with_free_magnesium(
    conditions: Conditions,
    reference: Reference,
    species: Sequence[Species],
    compartment: Compartment,
    problems: list[Problem],
) -> Conditions:
    """`conditions` with pMg solved from total_magnesium at the initial composition of the median compartment."""
    if conditions.total_magnesium_M is None or conditions.pMg is not None:
        return conditions
    path = "conditions.total_magnesium"
    missing = conditions.missing(with_magnesium=False)
    if missing:
        keys = " and ".join(f"conditions.{key}" for key in missing)
        problems.append(Problem(path, f"needs {keys}: what binds magnesium depends on it"))
        return conditions
    load = reference.load({s.name: s.mean_copies(compartment.omega) / compartment.omega for s in species})
    try:
        pMg = solved_pMg(conditions.total_magnesium_M, load, conditions, reference.magnesium_ion)
        check_ionic_strength(pMg, conditions.total_magnesium_M, conditions.ionic_strength_M or 0.0)
    except CannotBeMetError as error:
        problems.append(Problem(path, f"cannot be met: {error}"))
        return conditions
    return replace(conditions, pMg=pMg)
