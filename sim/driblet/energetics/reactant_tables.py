"""Reads [reactants.NAME] tables, the same form in reference.toml and in a system file, and completes their enthalpies."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import replace
from difflib import get_close_matches
from typing import Any

import numpy as np

from driblet.energetics.conditions import REFERENCE_TEMPERATURE
from driblet.energetics.transform import IonicSpecies, Reactant
from driblet.errors import Problem
from driblet.quantities import QuantityError, read_quantity

_KEYS = ("name", "aliases", "atoms", "species", "sd", "enthalpy_estimated", "source", "note")
_SPECIES_KEYS = ("energy", "enthalpy", "charge", "hydrogens", "magnesiums")
_COUNTS = {"charge": (-20, 20), "hydrogens": (0, 1000), "magnesiums": (0, 10)}
ESTIMATE_SD = 0.04  # kJ/(mol K): of an entropy estimated by analogy, as `enthalpy_estimated` marks
COMPOSITION_SD = 0.085  # kJ/(mol K): root mean square error of an entropy from composition, each left out in turn


class _FaultError(Exception):
    """One fault of one key."""


def normal_form(name: str) -> str:
    """A name without what writers differ in: case, spaces, underscores, hyphens, and the compartment in brackets."""
    return re.sub(r"[^0-9a-z]", "", re.sub(r"\(.*\)", "", name).lower())


def read_reactants(tables: object, path: str, problems: list[Problem]) -> list[Reactant]:
    """Every [reactants.NAME] table of `tables`; what is wrong is added to `problems` and the table left out."""
    if not isinstance(tables, Mapping):
        problems.append(Problem(path, f"a table of reactants is needed, not {tables!r}"))
        return []
    found = []
    for key, value in tables.items():
        own = f"{path}.{key}"
        before = len(problems)
        reactant = _read_one(key, value, own, problems)
        if reactant is not None and len(problems) == before:
            found.append(reactant)
    return found


def _read_one(key: str, value: object, path: str, problems: list[Problem]) -> Reactant | None:
    if not isinstance(value, Mapping):
        problems.append(Problem(path, f"a table of keys is needed, not {value!r}"))
        return None
    _check_keys(value, _KEYS, path, problems)
    got: dict[str, Any] = {}
    for name, reader in (("name", _text), ("aliases", _texts), ("atoms", _atoms), ("sd", _energy), ("source", _text),
                         ("note", _text), ("enthalpy_estimated", _flag)):  # fmt: skip
        if name in value:
            try:
                got[name] = reader(value[name])
            except (_FaultError, QuantityError) as error:
                problems.append(Problem(f"{path}.{name}", str(error)))
    if "atoms" not in value:
        problems.append(
            Problem(f"{path}.atoms", "is missing: the elements a reaction conserves, such as { C = 6, O = 6 }")
        )
    if got.get("sd", 0.0) < 0:
        problems.append(Problem(f"{path}.sd", f'"{value["sd"]}" is negative; a standard deviation cannot be'))
    species = _species_list(value.get("species"), f"{path}.species", problems)
    if not species:
        return None
    return Reactant(
        key,
        got.get("name", key),
        got.get("atoms", {}),
        tuple(species),
        got.get("source", "this system file"),
        tuple(got.get("aliases", ())),
        got.get("note", ""),
        got.get("sd"),
        ESTIMATE_SD if got.get("enthalpy_estimated") else 0.0,
    )


def _species_list(value: object, path: str, problems: list[Problem]) -> list[IonicSpecies]:
    if not isinstance(value, list) or not value:
        problems.append(Problem(path, "a list of at least one species is needed: { energy, charge, hydrogens, ... }"))
        return []
    found = []
    for i, entry in enumerate(value, start=1):
        own = f"{path}[{i}]"
        if not isinstance(entry, Mapping):
            problems.append(Problem(own, f"a table {{ energy, charge, hydrogens, ... }} is needed, not {entry!r}"))
            continue
        _check_keys(entry, _SPECIES_KEYS, own, problems)
        got: dict[str, Any] = {"magnesiums": 0, "enthalpy": None}
        for name in _SPECIES_KEYS:
            if name not in entry:
                if name not in got:
                    problems.append(Problem(f"{own}.{name}", "is missing and has no default"))
                continue
            try:
                got[name] = _count(entry[name], *_COUNTS[name]) if name in _COUNTS else _energy(entry[name])
            except (_FaultError, QuantityError) as error:
                problems.append(Problem(f"{own}.{name}", str(error)))
        if all(name in got for name in _SPECIES_KEYS):
            found.append(IonicSpecies(**got))
            if found[-1].electrons != found[0].electrons:
                problems.append(
                    Problem(
                        own,
                        "its charge does not go with its hydrogens and magnesiums: against the first species the charge "
                        "must rise by one for each H and by two for each Mg",
                    )
                )
    return found


def _check_keys(value: Mapping[str, Any], known: Sequence[str], path: str, problems: list[Problem]) -> None:
    for key in value:
        if key not in known:
            close = get_close_matches(str(key), known, 1)
            hint = f'did you mean "{close[0]}"?' if close else f"known here: {', '.join(known)}"
            problems.append(Problem(f"{path}.{key}", f'"{key}" is not a key here; {hint}'))


def _text(value: object) -> str:
    if not isinstance(value, str) or not value.strip():
        raise _FaultError(f"{value!r} will not do: a text in quotes is needed")
    return value


def _texts(value: object) -> list[str]:
    if not isinstance(value, list):
        raise _FaultError(f"{value!r} will not do: a list of texts is needed")
    return [_text(v) for v in value]


def _flag(value: object) -> bool:
    if not isinstance(value, bool):
        raise _FaultError(f"{value!r} will not do: true or false is needed")
    return value


def _atoms(value: object) -> dict[str, int]:
    if not isinstance(value, Mapping):
        raise _FaultError(f"{value!r} will not do: a table such as {{ C = 6, O = 6 }} is needed")
    for element in value:
        if element in ("H", "Mg"):
            raise _FaultError(f"{element} is left out: it is exchanged at fixed {'pH' if element == 'H' else 'pMg'}")
    return {str(element): _count(number, 1, 10_000) for element, number in value.items()}


def _count(value: object, low: int, high: int) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
        raise _FaultError(f"{value!r} will not do: a whole number from {low} to {high} is needed")
    return value


def _energy(value: object) -> float:
    return read_quantity(value, example='"-16.7 kJ/mol"').to("energy")


def completed(reactants: Sequence[Reactant], magnesium_enthalpy: float) -> list[Reactant]:
    """The same reactants with an enthalpy for every species.

    A species without one binds its protons and magnesium athermally. A reactant whose first species has none takes its
    entropy from its composition: the part that composition explains cancels in every balanced reaction, so cycles still
    close, and what remains is the residual of the reactants that are known.
    """
    entropies = _entropies_from_composition(reactants)
    out = []
    for reactant in reactants:
        first = reactant.species[0]
        parent = first.enthalpy
        spread = reactant.entropy_sd
        if parent is None:
            parent = first.energy + REFERENCE_TEMPERATURE * entropies[reactant.key]
            spread = COMPOSITION_SD
        filled = []
        for s in reactant.species:
            enthalpy = s.enthalpy
            if enthalpy is None or first.enthalpy is None:
                enthalpy = parent + (s.magnesiums - first.magnesiums) * magnesium_enthalpy
            filled.append(s._replace(enthalpy=enthalpy))
        out.append(replace(reactant, species=tuple(filled), entropy_sd=spread))
    return out


def _entropies_from_composition(reactants: Sequence[Reactant]) -> dict[str, float]:
    """Entropies of formation in kJ/(mol K), linear in what reactions conserve, fitted where enthalpies are known."""
    elements = sorted({e for r in reactants for e in r.atoms})
    rows = {r.key: np.array([*(r.atoms.get(e, 0) for e in elements), r.electrons], dtype=float) for r in reactants}
    known = [r for r in reactants if r.species[0].enthalpy is not None]
    if not known:
        return {r.key: 0.0 for r in reactants}
    design = np.array([rows[r.key] for r in known])
    entropy = np.array([(r.species[0].enthalpy - r.species[0].energy) / REFERENCE_TEMPERATURE for r in known])  # type: ignore[operator]
    coefficients, *_ = np.linalg.lstsq(design, entropy, rcond=None)
    return {key: float(row @ coefficients) for key, row in rows.items()}
