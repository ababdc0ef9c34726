"""An enzyme as a plain frozen value: the graph of its states and steps, and which step turns which reaction over."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class EnzymeState:
    """One state of an enzyme; `name` is the species that counts it, `holds` the molecules bound: (species, number)."""

    name: str
    holds: tuple[tuple[str, int], ...] = ()


@dataclass(frozen=True)
class EnzymeStep:
    """One elementary reversible step between two states.

    Attributes: name : of the reaction in System.reactions that fires it; source, target : indices of states; binds,
    releases : the species its forward direction takes up or lets go, None for a turnover; forward, backward : /M/s in the
    direction that binds, else /s; origin : where the constants come from, in words,
    " *" after what is a default.
    """

    name: str
    source: int
    target: int
    binds: str | None
    releases: str | None
    forward: float
    backward: float
    origin: str

    @property
    def ligand(self) -> str | None:
        """The species bound or released, None for a turnover."""
        return self.binds if self.binds is not None else self.releases


@dataclass(frozen=True)
class Activity:
    """One reaction an enzyme catalyses, and how.

    Attributes: reaction : its name; mechanism : Cleland's name; direction : +1 when the constants hold for the reaction as
    written, -1 when they were measured backward; substrates, products : in the order bound and released, in that
    direction; kcat_per_s, KM_M, activity : what the file states, None where it does not; steps : indices of all steps the
    reaction goes through; substrate_steps, product_steps : for each substrate and product the steps that bind or release
    it; counted : the step whose net forward firing is one turnover in `direction`.
    """

    reaction: str
    mechanism: str
    direction: int
    substrates: tuple[str, ...]
    products: tuple[str, ...]
    kcat_per_s: float | None
    KM_M: tuple[float | None, ...]
    steps: tuple[int, ...]
    substrate_steps: tuple[tuple[int, ...], ...]
    product_steps: tuple[tuple[int, ...], ...]
    counted: int


@dataclass(frozen=True)
class Enzyme:
    """An enzyme: its states (the free one first), its steps and what they catalyse.

    Attributes: name : also of the free state's species; inhibitors : (species, Ki in mol/L); half_life_s : None when it
    keeps; active_fraction : share of the protein that is simulated; molar_mass : g/mol.
    """

    name: str
    label: str
    states: tuple[EnzymeState, ...]
    steps: tuple[EnzymeStep, ...]
    activities: tuple[Activity, ...]
    inhibitors: tuple[tuple[str, float], ...] = ()
    half_life_s: float | None = None
    active_fraction: float = 1.0
    molar_mass: float | None = None

    def activity(self, reaction: str) -> Activity:
        """How this enzyme catalyses `reaction`. Raises KeyError when it does not."""
        for activity in self.activities:
            if activity.reaction == reaction:
                return activity
        raise KeyError(reaction)
