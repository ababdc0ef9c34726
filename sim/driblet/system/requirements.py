"""One [requirements.NAME] table -> Requirement: what must hold, when, during which span, in which share."""

from __future__ import annotations

from collections.abc import Mapping

from driblet.errors import Problem
from driblet.system.expressions import ExpressionError, Names, read_condition
from driblet.system.model import Requirement
from driblet.system.tables import RequirementTable, read_table

_ROUNDING = 1e-12


def read_requirement(
    name: str, value: object, names: Names, duration_s: float | None, problems: list[Problem]
) -> Requirement | None:
    """The Requirement of one table, or None after adding what is wrong to the problems."""
    path = f"requirements.{name}"
    table = read_table(RequirementTable, value, path, problems)
    condition = None
    text = value.get("must") if isinstance(value, Mapping) else None
    if isinstance(text, str) and text.strip():
        try:
            condition = read_condition(text, names)
        except ExpressionError as error:
            problems.append(Problem(f"{path}.must", str(error)))
    if table is None or condition is None:
        return None
    if table.when == "on average" and table.averaged_over is not None:
        text = 'does not go with "on average", which takes the whole span; with "throughout" each stretch is judged'
        problems.append(Problem(f"{path}.averaged_over", text))
    requirement = Requirement(name, condition, table.when, table.during, table.averaged_over, table.share)
    if duration_s is not None:
        problems += span_problems(requirement, duration_s)
    return requirement


def span_problems(requirement: Requirement, duration_s: float) -> list[Problem]:
    """What is wrong with the span of a requirement in a run of `duration_s`."""
    path = f"requirements.{requirement.name}"
    start, end = requirement.span_s(duration_s)
    if end > duration_s * (1 + _ROUNDING):
        return [
            Problem(f"{path}.during", f"ends at {end:g} s, beyond the run of {duration_s:g} s; a longer run is needed")
        ]
    over = requirement.averaged_over_s
    if over is not None and over > (end - start) * (1 + _ROUNDING):
        return [Problem(f"{path}.averaged_over", f"{over:g} s is longer than the span of {end - start:g} s")]
    return []
