"""[values]: a quantity named once, used by name wherever a key takes a quantity or a number.

A quantity begins with a digit or a sign, so a name in its place cannot be mistaken for one. Keys that hold names or prose
are left alone, as are readouts and requirements, whose names are species.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from driblet.errors import Problem
from driblet.quantities import QuantityError, read_quantity
from driblet.system.equation import NAME, RESERVED
from driblet.system.tables import ENERGY_WORDS

SECTION = "values"
_LEFT_ALONE = frozenset({"title", SECTION, "attachments", "reactants", "readouts", "requirements"})
_NAMES = frozenset({"catalyses", "mechanism", "binds", "releases", "direction", "species", "engine", "loading", "name"})
_PROSE = _NAMES | {"title", "label", "equation", "one_way", "csv", "column", "unit", "pH_scale", "record", "treatment"}


def with_values(raw: Mapping[str, Any], problems: list[Problem], warnings: list[str]) -> Mapping[str, Any]:
    """The parsed file with every name of a value replaced by the value; faults of [values] go to the problems."""
    section = raw.get(SECTION)
    if section is None:
        return raw
    if not isinstance(section, Mapping):
        problems.append(Problem(SECTION, f"a table of named quantities is needed, not {section!r}"))
        return raw
    values = {}
    for name, value in section.items():
        key = f"{SECTION}.{name}"
        if not NAME.fullmatch(name) or name in RESERVED or name in ENERGY_WORDS:
            problems.append(Problem(key, "is no name for a value: a letter, then letters, digits or underscores"))
            continue
        try:
            read_quantity(value, allow_plain=True)
        except QuantityError as error:
            problems.append(Problem(key, str(error)))
        values[name] = value  # a faulty one is not reported again where it is used
    used: set[str] = set()

    def replaced(item: Any, key: str) -> Any:
        if isinstance(item, str) and item in values and key not in _PROSE:
            used.add(item)
            return values[item]
        if isinstance(item, Mapping):
            return {k: replaced(v, k) for k, v in item.items()}
        if isinstance(item, list):
            return [replaced(v, key) for v in item]
        return item

    out = {name: part if name in _LEFT_ALONE else replaced(part, name) for name, part in raw.items()}
    warnings += [f"{SECTION}.{name} is used by no key" for name in values if name not in used]
    return out
