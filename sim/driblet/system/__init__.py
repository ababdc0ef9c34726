"""The system file: its schema, its equations and expressions, and the System they build."""

from driblet.system.build import load, loads
from driblet.system.model import Compartment, Conditions, Reaction, Readout, RunSettings, Species, System

__all__ = ["Compartment", "Conditions", "Reaction", "Readout", "RunSettings", "Species", "System", "load", "loads"]
