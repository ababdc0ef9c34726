"""The system file: its schema, its equations and expressions, and the System they build."""

from driblet.system.build import load, loads
from driblet.system.mechanisms.enzyme import Enzyme
from driblet.system.model import Addition, Compartment, Conditions, Reaction, Readout, RunSettings, Species, System

__all__ = [
    "Addition",
    "Compartment",
    "Conditions",
    "Enzyme",
    "Reaction",
    "Readout",
    "RunSettings",
    "Species",
    "System",
    "load",
    "loads",
]
