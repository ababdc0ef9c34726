"""[additions.NAME]: what is added to every compartment in mid-run."""

from __future__ import annotations

from collections.abc import Collection, Mapping

from driblet.errors import Problem
from driblet.quantities import QuantityError
from driblet.system.enzyme_tables import AdditionTable
from driblet.system.expressions import nearest
from driblet.system.model import Addition, Species
from driblet.system.tables import read_table


def read_addition(
    name: str,
    value: object,
    species: Mapping[str, Species],
    declared: Collection[str],
    duration_s: float | None,
    loading: str,
    problems: list[Problem],
) -> Addition | None:
    """One addition, or None after adding what is wrong to the problems.

    species : all that can be named, enzymes (as their free form) included, that are sound; declared : the names of those
    that are not, too; duration_s : None when the file states none.
    """
    path = f"additions.{name}"
    table = read_table(AdditionTable, value, path, problems)
    if table is None:
        return None
    before = len(problems)

    def problem(key: str, text: str) -> None:
        problems.append(Problem(f"{path}.{key}", text))

    one = species.get(table.species)
    if one is None and table.species in declared:
        return None  # its own fault has been told
    if one is None:
        problem("species", f'"{table.species}" is not in [species]{nearest(table.species, species)}')
    elif one.held:
        problem("species", f"{table.species} is held at a fixed concentration, so adding some changes nothing")
    if duration_s is not None and table.at >= duration_s:
        problem("at", f"comes at {table.at:g} s, after the end of the run at {duration_s:g} s")
    how = table.loading or loading
    copies = concentration = None
    try:
        if table.amount.kind == "copies":
            copies = table.amount.to("copies")
            if how == "nearest" and copies != round(copies):
                problem("amount", f'"{table.amount}" is fractional: only loading = "poisson" takes it as a mean')
        else:
            concentration = table.amount.to("concentration")
    except QuantityError as error:
        problem("amount", str(error))
    if table.amount.value == 0:
        problem("amount", "is zero, so nothing would be added")
    return Addition(name, table.at, table.species, concentration, copies, how) if len(problems) == before else None
