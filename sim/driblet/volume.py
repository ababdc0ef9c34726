"""A system in a compartment of another size: a small one is less work, a very large one shows means without noise."""

from __future__ import annotations

from dataclasses import replace

from driblet.system import Species, System


def at_volume(system: System, volume_L: float) -> System:
    """The system in one compartment of another volume, its concentrations kept, all compartments of one size.

    Amounts given as copies change with the volume, to the nearest copy; an enzyme keeps one copy at least.
    """
    compartment = system.compartment
    factor = volume_L / compartment.volume_L
    small = replace(compartment, volume_L=volume_L, cv=0.0, diameter_m=None, wall_m=0.0, sizes_L=())

    def scaled(species: Species) -> Species:
        copies = None if species.copies is None else species.copies * factor
        if copies is not None and species.loading == "nearest":
            copies = float(round(copies))
        made = replace(species, copies=copies)
        is_free_enzyme = species.enzyme is not None and species.name == species.enzyme
        if (
            is_free_enzyme
            and species.loading == "nearest"
            and made.mean_copies(small.omega) < 0.5 < species.mean_copies(1e30)
        ):
            return replace(made, concentration_M=None, copies=1.0)
        return made

    additions = tuple(
        a if a.copies is None else replace(a, copies=float(round(a.copies * factor))) for a in system.additions
    )
    return replace(system, compartment=small, species=tuple(scaled(s) for s in system.species), additions=additions)
