"""Units that most files use, with what pint makes of them: reading them so spares a command the import of pint.

Anything else is pint's, by units.txt; a test holds this table against it.
"""

from __future__ import annotations

from typing import NamedTuple

_OF_KIND: dict[str, dict[str, float]] = {
    "concentration": {"M": 1.0, "mM": 1e-3, "uM": 1e-6, "µM": 1e-6, "nM": 1e-9, "pM": 1e-12},
    "time": {"s": 1.0, "ms": 1e-3, "us": 1e-6, "min": 60.0, "h": 3600.0, "day": 86400.0},
    "length": {"m": 1.0, "mm": 1e-3, "um": 1e-6, "µm": 1e-6, "nm": 1e-9},
    "volume": {"L": 1.0, "mL": 1e-3, "uL": 1e-6, "nL": 1e-9, "pL": 1e-12, "fL": 1e-15, "aL": 1e-18, "zL": 1e-21},
    "copies": {"copies": 1.0, "copy": 1.0},
    "energy": {"kJ/mol": 1.0, "J/mol": 1e-3, "kcal/mol": 4.184},
    "thermal energy": {"kT": 1.0},
    "temperature": {"K": 1.0, "degC": 1.0, "°C": 1.0},
    "mass concentration": {"g/L": 1.0, "mg/mL": 1.0, "ug/mL": 1e-3, "mg/L": 1e-3},
    "molar mass": {"kDa": 1000.0, "Da": 1.0, "g/mol": 1.0},
    "specific activity": {"U/mg": 1.6666666666666667e-05},
}
# of rate and equilibrium constants: (powers of mol/L, of 1/s) -> text -> factor
_OF_POWER: dict[tuple[int, int], dict[str, float]] = {
    (0, 1): {"/s": 1.0, "/ms": 1000.0, "/min": 0.016666666666666666, "/h": 0.0002777777777777778},
    (-1, 1): {"/M/s": 1.0, "/mM/s": 1e3, "/uM/s": 1e6, "/M/min": 0.016666666666666666},
    (-2, 1): {"/M^2/s": 1.0},
    (1, 1): {"M/s": 1.0, "mM/s": 1e-3, "uM/s": 1e-6, "nM/s": 1e-9},
    (-1, 0): {"/M": 1.0, "/mM": 1e3, "/uM": 1e6},
    (-2, 0): {"/M^2": 1.0},
    (0, 0): {"": 1.0},
}
_OFFSET = {"degC": 273.15, "°C": 273.15}


class CommonUnit(NamedTuple):
    """kind : as in quantities, None for constants; power : (powers of mol/L, of 1/s) or None; a value times `factor` plus
    `offset` is in driblet's unit."""

    kind: str | None
    power: tuple[int, int] | None
    factor: float
    offset: float = 0.0


COMMON_UNITS = {
    **{
        text: CommonUnit(kind, (1, 0) if kind == "concentration" else None, factor, _OFFSET.get(text, 0.0))
        for kind, texts in _OF_KIND.items()
        for text, factor in texts.items()
    },
    **{text: CommonUnit(None, power, factor) for power, texts in _OF_POWER.items() for text, factor in texts.items()},
}
