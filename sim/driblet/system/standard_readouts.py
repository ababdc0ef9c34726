"""Readouts that go by a standard name where their species are there.

energy_charge: (ATP + ADP/2) / (ATP + ADP + AMP), Atkinson, Biochemistry 7:4030 (1968). phosphorylation_potential:
[ATP] / ([ADP][Pi]) of the free species, in 1/M, as in Veech, Raijman & Krebs, Biochem. J. 117:499 (1970).
X_per_Y: the ratio of a couple, for any two species.
"""

from __future__ import annotations

from collections.abc import Collection

STANDARD_NAMES = {
    "energy_charge": ("ATP", "ADP", "AMP"),
    "phosphorylation_potential": ("ATP", "ADP", "Pi"),
}
_TEXTS = {
    "energy_charge": "(total(ATP) + 0.5 * total(ADP)) / (total(ATP) + total(ADP) + total(AMP))",
    "phosphorylation_potential": "conc(ATP) / (conc(ADP) * conc(Pi))",
}


def standard_readout(name: str, species: Collection[str]) -> str | None:
    """The expression a standard name stands for, or None when it is none or its species are missing."""
    if name in STANDARD_NAMES:
        return _TEXTS[name] if all(s in species for s in STANDARD_NAMES[name]) else None
    parts = name.split("_per_")
    for cut in range(1, len(parts)):
        above, below = "_per_".join(parts[:cut]), "_per_".join(parts[cut:])
        if above in species and below in species:
            return f"total({above}) / total({below})"
    return None
