"""A system as plain frozen values: what `load` returns and everything downstream reads. Units are in the names."""

from __future__ import annotations

import html
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field

from driblet.energetics.conditions import Conditions
from driblet.energetics.reference import Reference
from driblet.quantities import copies_per_molar
from driblet.system.equation import Equation
from driblet.system.expressions import Condition, Expression
from driblet.system.mechanisms.enzyme import Enzyme
from driblet.system.rate_factors import RateFactor


@dataclass(frozen=True)
class Compartment:
    """A compartment whose size may differ between replicates: lognormal, or drawn from measured sizes.

    Attributes: volume_L : of the median compartment, wall taken off; cv : coefficient of variation of the diameter
    (`by_diameter`) or of the volume; diameter_m, wall_m : outer diameter of the median compartment and wall thickness;
    sizes_L : inner volumes as measured, rising, each as likely as any other, or empty.
    """

    name: str
    volume_L: float
    cv: float = 0.0
    diameter_m: float | None = None
    wall_m: float = 0.0
    sizes_L: tuple[float, ...] = field(default=(), repr=False, compare=False)  # long, and told apart by the text

    @property
    def by_diameter(self) -> bool:
        """Whether the spread is one of diameters."""
        return self.diameter_m is not None

    @property
    def omega(self) -> float:
        """N_A V of the median compartment: copies per mol/L."""
        return copies_per_molar(self.volume_L)


@dataclass(frozen=True)
class Species:
    """A species and its load: a concentration in mol/L or a number of copies, exactly one; held: a concentration.

    enzyme : the enzyme of which this is a state, None for a species of the file; holds : what that state has bound.
    """

    name: str
    label: str
    concentration_M: float | None
    copies: float | None
    held: bool = False
    loading: str = "nearest"
    enzyme: str | None = None
    holds: tuple[tuple[str, int], ...] = ()

    def mean_copies(self, omega: float) -> float:
        """Mean copies in a compartment of `omega` copies per mol/L."""
        return self.copies if self.copies is not None else (self.concentration_M or 0.0) * omega


@dataclass(frozen=True)
class Reaction:
    """A reaction whose reverse rate its energy has fixed.

    Attributes: dG0_kJ_per_mol : dG0', None for one way; K : exp(-dG0'/RT) relative to 1 mol/L; forward, backward : rate
    constants in (mol/L)^(1-m)/s of v = k prod [A_i]^nu_i; energy_from : what in the file set dG0', energy_note : how, where
    the reference table had a part in it; one_way : the reason. A reaction that enzymes alone carry has rate constants of
    zero and stands in System.stated only; enzyme : the one whose elementary step, or lumped reaction, this is, else None;
    factor : what multiplies the law of mass action in both directions, None for none; turns : what one forward firing turns
    over, (reaction of the file, times), for a reaction that an enzyme carries.
    """

    name: str
    label: str
    equation: Equation
    dG0_kJ_per_mol: float | None
    K: float | None
    forward: float
    backward: float | None
    energy_from: str
    energy_sd_kJ_per_mol: float | None = None
    one_way: str | None = None
    energy_note: str = ""
    enzyme: str | None = None
    factor: RateFactor | None = None
    turns: tuple[tuple[str, int], ...] = ()


@dataclass(frozen=True)
class Readout:
    """A named expression of counts, concentrations or a reaction's momentary Gibbs energy."""

    name: str
    expression: Expression


@dataclass(frozen=True)
class Addition:
    """Something added in mid-run: to every compartment a concentration in mol/L or a number of copies, exactly one."""

    name: str
    at_s: float
    species: str
    concentration_M: float | None
    copies: float | None
    loading: str = "nearest"

    def mean_copies(self, omega: float) -> float:
        """Mean copies added to a compartment of `omega` copies per mol/L."""
        return self.copies if self.copies is not None else (self.concentration_M or 0.0) * omega


@dataclass(frozen=True)
class Requirement:
    """What a condition must do over a span of time, to be met in a stated share of compartments.

    Attributes: must : the condition; when : "throughout", "at end", "once" or "on average"; during_s : start and end of the
    span, s, None for the whole run; averaged_over_s : s, None where the state of each moment counts; share : in (0, 1],
    None where none is asked for.
    """

    name: str
    must: Condition
    when: str
    during_s: tuple[float, float] | None = None
    averaged_over_s: float | None = None
    share: float | None = None

    def span_s(self, duration_s: float) -> tuple[float, float]:
        """Start and end of the span in a run of `duration_s`."""
        return self.during_s or (0.0, duration_s)

    @property
    def averaged(self) -> bool:
        """Whether averages over time are judged, not the state of each moment."""
        return self.when == "on average" or self.averaged_over_s is not None


@dataclass(frozen=True)
class RunSettings:
    """How a system is run unless the caller says otherwise.

    Attributes: burn_in_s : stated time after which a run counts as stationary, None to have it found; record : "summary",
    "trajectories" or "events", how much the run file keeps; leap_tolerance : the share by which a reaction's gross rate may
    be expected to change in one leap.
    """

    engine: str = "exact"
    replicates: int = 100
    duration_s: float = 0.0
    sample_every_s: float = 0.0
    seed: int = 0
    burn_in_s: float | None = None
    record: str = "trajectories"
    leap_tolerance: float = 0.01


@dataclass(frozen=True)
class System:
    """A validated, immutable description of one compartment and what happens in it.

    Attributes: title, conditions, compartment, species, reactions, readouts, settings, requirements; text : the system file it
    was read from, kept for provenance; source : its name for messages; warnings : what is doubtful in the file, one line each;
    reference : the table its energies come from, the file's own reactants included; enzymes : what they are, while species
    and reactions hold the states and steps they expand to, after those of the file; stated : the reactions of the file,
    those that enzymes alone carry included; additions : in the order they happen; treatments : (enzyme, "elementary",
    "lumped" or "auto") as the file asks, or, once lumping has made its system of it, as it is.
    """

    title: str
    conditions: Conditions
    compartment: Compartment
    species: tuple[Species, ...]
    reactions: tuple[Reaction, ...]
    readouts: tuple[Readout, ...]
    settings: RunSettings
    requirements: tuple[Requirement, ...] = field(default=(), kw_only=True)
    text: str = field(default="", repr=False)
    source: str = field(default="", repr=False)
    warnings: tuple[str, ...] = ()
    reference: Reference | None = field(default=None, repr=False, compare=False)
    enzymes: tuple[Enzyme, ...] = field(default=(), kw_only=True)
    stated: tuple[Reaction, ...] = field(default=(), kw_only=True)
    additions: tuple[Addition, ...] = field(default=(), kw_only=True)
    treatments: tuple[tuple[str, str], ...] = field(default=(), kw_only=True)

    def __post_init__(self) -> None:
        if not self.stated:
            object.__setattr__(self, "stated", tuple(r for r in self.reactions if r.enzyme is None))

    def reaction(self, name: str) -> Reaction:
        """A reaction of the file by its name. Raises KeyError for an unknown one."""
        for reaction in self.stated:
            if reaction.name == name:
                return reaction
        raise KeyError(name)

    def one_way_names(self, among: Collection[int] | None = None) -> list[str]:
        """Names for the one-way reactions (of those with these indices), the inactivation of an enzyme as one."""
        named = {
            r.name if r.enzyme is None else f"inactivation of {r.enzyme}": None
            for i, r in enumerate(self.reactions)
            if r.backward is None and (among is None or i in among)
        }
        return list(named)

    @property
    def free_species(self) -> tuple[Species, ...]:
        """The species whose counts change, in the order of the file."""
        return tuple(s for s in self.species if not s.held)

    @property
    def held_species(self) -> tuple[Species, ...]:
        """The chemostatted species."""
        return tuple(s for s in self.species if s.held)

    def held_concentrations(self) -> Mapping[str, float]:
        """Fixed concentration of each held species, mol/L."""
        return {s.name: s.concentration_M or 0.0 for s in self.held_species}

    def __repr__(self) -> str:
        return f"<driblet System {self.title!r}: {len(self.species)} species, {len(self.reactions)} reactions>"

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><td>{html.escape(r.name)}</td><td>{html.escape(str(r.equation))}</td>"
            f"<td>{'one way' if r.dG0_kJ_per_mol is None else f'{r.dG0_kJ_per_mol:.2f} kJ/mol'}</td></tr>"
            for r in self.reactions
        )
        return (
            f"<b>{html.escape(self.title)}</b>: {len(self.species)} species in "
            f"{self.compartment.volume_L * 1e15:.4g} fL<table><tr><th>reaction</th><th>equation</th>"
            f"<th>ΔG°′</th></tr>{rows}</table>"
        )
