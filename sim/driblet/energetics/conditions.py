"""The surroundings at which an energy holds, and what they make of protons, magnesium and ions.

Debye-Hueckel, extended: ln gamma = -alpha(T) z^2 sqrt(I) / (1 + B sqrt(I)), B = 1.6 (L/mol)^0.5, alpha(T) = 1.10708 -
1.54508e-3 T + 5.95584e-6 T^2 (kg/mol)^0.5 (Alberty, Thermodynamics of Biochemical Reactions, 2003, section 3.5, from Clarke
& Glew, J. Chem. Soc. Faraday Trans. 1 76:1911, 1980; both from memory). Molalities are taken as mol/L.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from driblet.quantities import thermal_energy

PH_SCALES = ("activity", "concentration")
REFERENCE_TEMPERATURE = 298.15  # K, of the reference table
DEBYE_HUECKEL_B = 1.6  # (L/mol)^0.5
HIGHEST_IONIC_STRENGTH = 0.35  # mol/L, to which the extended law was fitted (Alberty 2003, from memory)
TRUSTED_TEMPERATURES = (273.15, 323.15)  # K; constant enthalpies of reaction mislead beyond
PROTON = "pH"
MAGNESIUM = "pMg"


@dataclass(frozen=True)
class Buffer:
    """A pH buffer: acid = base + proton.

    Attributes: name; concentration_M : of both forms together; pK : at 298.15 K and zero ionic strength;
    enthalpy_kJ_per_mol : of the dissociation; acid_charge : of the acid form.
    """

    name: str
    concentration_M: float
    pK: float
    enthalpy_kJ_per_mol: float
    acid_charge: int


@dataclass(frozen=True)
class Conditions:
    """Conditions at which energies hold; None where the file does not state one.

    Attributes: temperature_K; pH on `pH_scale`: "activity" as a meter reads it, or "concentration" of protons; pMg :
    -log10 of free Mg2+ in mol/L; ionic_strength_M : mol/L; total_magnesium_M : what pMg was solved from, if it was.
    """

    temperature_K: float
    pH: float | None = None
    pMg: float | None = None
    ionic_strength_M: float | None = None
    pH_scale: str = "activity"
    total_magnesium_M: float | None = None
    buffer: Buffer | None = None

    @property
    def RT_kJ_per_mol(self) -> float:
        """Thermal energy, kJ/mol."""
        return thermal_energy(self.temperature_K)

    def missing(self, with_magnesium: bool) -> list[str]:
        """The keys a transformed energy needs that are not stated."""
        needed = {"pH": self.pH, "ionic_strength": self.ionic_strength_M}
        if with_magnesium:
            needed["pMg"] = self.pMg
        return [key for key, value in needed.items() if value is None]

    def __str__(self) -> str:
        parts = [f"{self.temperature_K - 273.15:.4g} °C"]
        if self.pH is not None:
            parts.append(f"pH {self.pH:g}" + (" (concentration)" if self.pH_scale == "concentration" else ""))
        if self.pMg is not None:
            parts.append(f"pMg {self.pMg:.4g}")
        if self.ionic_strength_M is not None:
            parts.append(f"ionic strength {self.ionic_strength_M:g} M")
        return ", ".join(parts)


def debye_hueckel_alpha(temperature_K: float) -> float:
    """alpha of ln gamma = -alpha z^2 sqrt(I)/(1 + B sqrt(I)), (kg/mol)^0.5; 1.17582 at 298.15 K."""
    return 1.10708 - 1.54508e-3 * temperature_K + 5.95584e-6 * temperature_K**2


def ion_energy(temperature_K: float, ionic_strength_M: float) -> float:
    """-RT ln gamma of a singly charged ion, kJ/mol: an ion of charge z lies z^2 times this lower than at I = 0.

    Raises ValueError for a negative ionic strength.
    """
    if ionic_strength_M < 0:
        raise ValueError(f"an ionic strength of {ionic_strength_M!r} mol/L is negative")
    root = math.sqrt(ionic_strength_M)
    return thermal_energy(temperature_K) * debye_hueckel_alpha(temperature_K) * root / (1 + DEBYE_HUECKEL_B * root)


def proton_potential(conditions: Conditions) -> float:
    """Chemical potential of the proton, kJ/mol, zero at activity 1. Needs pH; on the concentration scale also I."""
    assert conditions.pH is not None
    potential = -conditions.RT_kJ_per_mol * math.log(10) * conditions.pH
    if conditions.pH_scale == "concentration":
        assert conditions.ionic_strength_M is not None
        potential -= ion_energy(conditions.temperature_K, conditions.ionic_strength_M)
    return potential
