"""Enzyme mechanisms: graphs of states and steps, the constants of the steps, and what an enzyme does at steady state."""

from driblet.system.mechanisms.assemble import ActivitySpec, Assembler
from driblet.system.mechanisms.constants import MechanismError
from driblet.system.mechanisms.enzyme import Activity, Enzyme, EnzymeState, EnzymeStep
from driblet.system.mechanisms.graph import MECHANISMS
from driblet.system.mechanisms.steady_state import measured_constants, turnover_rates

__all__ = [
    "MECHANISMS",
    "Activity",
    "ActivitySpec",
    "Assembler",
    "Enzyme",
    "EnzymeState",
    "EnzymeStep",
    "MechanismError",
    "measured_constants",
    "turnover_rates",
]
