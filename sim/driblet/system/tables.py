"""The tables of a system file as pydantic models, and pydantic's complaints as our one-line problems."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from difflib import get_close_matches
from typing import Annotated, Any, Literal, TypeVar

from pydantic import BaseModel, BeforeValidator, ConfigDict, Discriminator, Tag, ValidationError
from pydantic_core import PydanticCustomError

from driblet.energetics.conditions import PH_SCALES
from driblet.errors import Problem
from driblet.quantities import Quantity, QuantityError, example_of, read_quantity

ENGINES = ("exact", "leap", "auto")
TOLERANCES = (0.001, 0.3)  # of leaps
TREATMENTS = ("elementary", "lumped", "auto")  # of enzymes
LOADINGS = ("nearest", "poisson")
RECORDS = ("summary", "trajectories", "events")  # how much a run file keeps
WHEN = ("throughout", "at end", "once", "on average")  # when the condition of a requirement must hold
DENSEST = 1000.0  # mol/L, above any pure substance
COLDEST, HOTTEST = 200.0, 500.0  # K, with room for supercooled droplets and for pressure
MOST_REPLICATES, LARGEST_SEED = 10_000_000, 2**63 - 1
SHORTEST_TIME, LONGEST_TIME = 1e-15, 1e15  # s: from faster than a bond vibrates to 30 million years
ENERGY_WORDS = ("formation", "hydrolysis", "reference")  # where an energy can come from instead of being stated


def _complain(text: str) -> PydanticCustomError:
    return PydanticCustomError("driblet", "{text}", {"text": text})


def _of_kind(kind: str, allow_zero: bool = True, allow_negative: bool = False) -> Callable[[object], float]:
    def read(value: object) -> float:
        try:
            number = read_quantity(value, example=example_of(kind)).to(kind)
        except QuantityError as error:
            raise _complain(str(error)) from error
        if number < 0 and not allow_negative:
            raise _complain(f'"{value}" is negative; {kind} cannot be')
        if number == 0 and not allow_zero:
            raise _complain(f'"{value}" is zero; a {kind} above zero is needed')
        return number

    return read


def _temperature(value: object) -> float:
    kelvin = _of_kind("temperature", allow_zero=False)(value)
    if not COLDEST <= kelvin <= HOTTEST:
        raise _complain(f'"{value}" is no temperature of liquid water, {COLDEST:g} K to {HOTTEST:g} K; is it in degC?')
    return kelvin


def _concentration(value: object) -> float:
    molar = _of_kind("concentration")(value)
    if molar > DENSEST:
        raise _complain(f'"{value}" is denser than any substance; at most {DENSEST:g} M is read')
    return molar


def _time(value: object) -> float:
    seconds = _of_kind("time", allow_zero=False)(value)
    if not SHORTEST_TIME <= seconds <= LONGEST_TIME:
        raise _complain(f'"{value}" is out of range: a time from {SHORTEST_TIME:g} s to {LONGEST_TIME:g} s is needed')
    return seconds


def _quantity(value: object) -> Quantity:
    try:
        return read_quantity(value)
    except QuantityError as error:
        raise _complain(str(error)) from error


def _constant(value: object) -> Quantity:
    try:
        return read_quantity(value, allow_plain=True)
    except QuantityError as error:
        raise _complain(str(error)) from error


def _amount(value: object) -> Quantity:
    quantity = _quantity(value)
    if quantity.kind not in ("concentration", "copies"):
        raise _complain(f'"{value}" is no amount: a concentration ("4 mM") or a number ("20 copies") is needed')
    if quantity.value < 0:
        raise _complain(f'"{value}" is negative; an amount cannot be')
    if quantity.kind == "concentration":
        _concentration(value)
    return quantity


def _plain(low: float, high: float, what: str) -> Callable[[object], float]:
    def read(value: object) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise _complain(f"{value!r} is not {what}: a plain number from {low:g} to {high:g} is needed")
        if not low <= value <= high:
            raise _complain(f"{value!r} is not {what}: it lies between {low:g} and {high:g}")
        return float(value)

    return read


def _whole(low: int, high: int) -> Callable[[object], int]:
    def read(value: object) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise _complain(f"{value!r} will not do: a whole number from {low} to {high} is needed")
        return value

    return read


def _text(value: object) -> str:
    if not isinstance(value, str) or not value.strip():
        raise _complain(f"{value!r} will not do: a text in quotes is needed")
    return value


def _one_of(choices: tuple[object, ...]) -> Callable[[object], object]:
    def read(value: object) -> object:
        if value not in choices:
            raise _complain(f"{value!r} is not known here: {' or '.join(repr(c) for c in choices)}".replace("'", '"'))
        return value

    return read


def _yes_or_no(value: object) -> bool:
    if not isinstance(value, bool):
        raise _complain(f"{value!r} will not do: true or false is needed")
    return value


def _share(value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not 0 < value <= 1:
        hint = "; write 0.95 for 95 %" if isinstance(value, int | float) and 1 < value <= 100 else ""
        raise _complain(f"{value!r} is no share of compartments: a plain number above 0, at most 1, is needed{hint}")
    return float(value)


def _span(value: object) -> tuple[float, float]:
    if not isinstance(value, list) or len(value) != 2:
        raise _complain(f'{value!r} is no span: two times are needed, such as ["0 s", "20 min"]')
    start, end = (_of_kind("time")(v) for v in value)
    if not start < end:
        raise _complain(f'"{value[0]}" to "{value[1]}" is no span: it ends after it starts')
    return start, end


def _engine(value: object) -> object:
    if value not in ENGINES:
        raise _complain(unknown_engine(value))
    return value


def unknown_engine(value: object) -> str:
    """What to say of an engine that is none."""
    return f'"{value}" is not an engine: "exact", "leap" or "auto" is'


def read_tolerance(value: object) -> float:
    """A tolerance of leaps. Raises ValueError."""
    low, high = TOLERANCES
    if isinstance(value, bool) or not isinstance(value, int | float) or not low <= value <= high:
        raise _complain(f"{value!r} will not do: a plain number from {low:g} to {high:g} is needed; 0.01 is usual")
    return float(value)


Text = Annotated[str, BeforeValidator(_text)]
AnyQuantity = Annotated[Quantity, BeforeValidator(_quantity)]
Constant = Annotated[Quantity, BeforeValidator(_constant)]
Amount = Annotated[Quantity, BeforeValidator(_amount)]
Temperature = Annotated[float, BeforeValidator(_temperature)]
Time = Annotated[float, BeforeValidator(_time)]
BurnIn = Annotated[float, BeforeValidator(_of_kind("time"))]
Length = Annotated[float, BeforeValidator(_of_kind("length"))]
Concentration = Annotated[float, BeforeValidator(_concentration)]
EnergyChange = Annotated[float, BeforeValidator(_of_kind("energy", allow_negative=True))]
Loading = Annotated[Literal["nearest", "poisson"], BeforeValidator(_one_of(LOADINGS))]


class Table(BaseModel):
    """Base of all tables: unknown keys are errors."""

    # most files use a few of the tables: the others are never built
    model_config = ConfigDict(extra="forbid", frozen=True, arbitrary_types_allowed=True, defer_build=True)


PH = Annotated[float, BeforeValidator(_plain(0, 14, "a pH"))]
PMg = Annotated[float, BeforeValidator(_plain(-1, 14, "a pMg"))]
PHScale = Annotated[str, BeforeValidator(_one_of(PH_SCALES))]


class BufferTable(Table):
    name: Text
    concentration: Concentration
    pK: Annotated[float, BeforeValidator(_plain(0, 14, "a pK"))] | None = None
    acid_charge: Annotated[int, BeforeValidator(_whole(-4, 4))] | None = None
    enthalpy: EnergyChange | None = None


class ConditionsTable(Table):
    temperature: Temperature
    pH: PH | None = None
    pH_scale: PHScale = "activity"
    pMg: PMg | None = None
    total_magnesium: Concentration | None = None
    ionic_strength: Concentration | None = None
    buffer: BufferTable | None = None


class SpreadTable(Table):
    median: AnyQuantity | None = None
    cv: Annotated[float, BeforeValidator(_plain(0, 3, "a coefficient of variation"))] = 0.0
    csv: Text | None = None
    column: Text | None = None
    unit: Text | None = None


def _as_table(key: str) -> BeforeValidator:
    """Lets a bare value stand for a table with that one key."""
    return BeforeValidator(lambda value: value if isinstance(value, dict) else {key: value})


class CompartmentTable(Table):
    volume: Annotated[SpreadTable, _as_table("median")] | None = None
    diameter: Annotated[SpreadTable, _as_table("median")] | None = None
    wall: Length | None = None


class SpeciesTable(Table):
    amount: Amount
    held: Annotated[bool, BeforeValidator(_yes_or_no)] = False
    loading: Loading | None = None
    label: Text | None = None


class StatedAt(Table):
    """The conditions at which a value holds, where they are not the file's."""

    temperature: Temperature | None = None
    pH: PH | None = None
    pH_scale: PHScale | None = None
    pMg: PMg | None = None
    ionic_strength: Concentration | None = None


class EnergyTable(StatedAt):
    value: AnyQuantity
    sd: AnyQuantity | None = None


class ConstantTable(StatedAt):
    value: Constant


def _energy_tag(value: object) -> str:
    return "word" if isinstance(value, str) and value in ENERGY_WORDS else "table"


Energy = Annotated[
    Annotated[EnergyTable, _as_table("value"), Tag("table")]
    | Annotated[Literal["formation", "hydrolysis", "reference"], Tag("word")],
    Discriminator(_energy_tag),
]


class ReactionTable(Table):
    equation: Text
    energy: Energy | None = None
    K: Annotated[ConstantTable, _as_table("value")] | None = None
    Kd: AnyQuantity | None = None
    forward: AnyQuantity | None = None
    backward: AnyQuantity | None = None
    one_way: Text | None = None
    label: Text | None = None


class EnergiesTable(Table):
    formation: dict[str, AnyQuantity] = {}
    hydrolysis: dict[str, AnyQuantity] = {}


class RequirementTable(Table):
    must: Text
    when: Annotated[str, BeforeValidator(_one_of(WHEN))]
    averaged_over: Time | None = None
    during: Annotated[tuple[float, float], BeforeValidator(_span)] | None = None
    share: Annotated[float, BeforeValidator(_share)] | None = None


class RunTable(Table):
    engine: Annotated[str, BeforeValidator(_engine)] = "exact"
    replicates: Annotated[int, BeforeValidator(_whole(1, MOST_REPLICATES))] = 100
    duration: Time | None = None
    sample_every: Time | None = None
    burn_in: BurnIn | None = None
    record: Annotated[str, BeforeValidator(_one_of(RECORDS))] = "trajectories"
    loading: Loading = "nearest"
    seed: Annotated[int, BeforeValidator(_whole(0, LARGEST_SEED))] = 0
    treatment: Annotated[str, BeforeValidator(_one_of(TREATMENTS))] | None = None
    leap_tolerance: Annotated[float, BeforeValidator(read_tolerance)] = 0.01


SECTIONS = (
    "title", "values", "conditions", "compartments", "species", "reactants", "energies", "reactions", "enzymes",
    "additions", "readouts", "requirements", "run", "attachments",
)  # fmt: skip
TableType = TypeVar("TableType", bound=Table)


def read_table(model: type[TableType], value: object, path: str, problems: list[Problem]) -> TableType | None:
    """Validate one table; on failure append a problem per fault and return None."""
    if not isinstance(value, Mapping):
        problems.append(Problem(path, f"a table of keys is needed, not {value!r}"))
        return None
    try:
        return model.model_validate(value)
    except ValidationError as error:
        for fault in error.errors(include_url=False):
            problems.append(_problem(model, value, path, fault))
        return None


def _problem(model: type[Table], value: Mapping[str, Any], path: str, fault: Any) -> Problem:
    location = [str(part) for part in fault["loc"]]
    if location[1:2] == ["table"]:
        del location[1]  # pydantic's name for a branch, not a key of the file
    if len(location) > 1 and location[-1] in ("median", "value") and not isinstance(value.get(location[0]), Mapping):
        location.pop()  # a bare value stood for the table
    key = ".".join([path, *location])
    kind = fault["type"]
    if kind == "extra_forbidden":
        return Problem(key, unknown_key(location[-1], _keys_at(model, location[:-1])))
    if kind == "missing":
        return Problem(key, "is missing and has no default")
    if kind == "driblet":
        return Problem(key, fault["ctx"]["text"])
    if kind in ("dict_type", "model_type"):
        return Problem(key, f"a table of keys is needed, not {fault['input']!r}")
    return Problem(key, f"{fault['input']!r} will not do: {fault['msg'][0].lower()}{fault['msg'][1:]}")


def _keys_at(model: type[Table], location: list[str]) -> list[str]:
    for part in location:
        annotation = model.model_fields[part].annotation if part in model.model_fields else None
        # the annotation names the model of a nested table; the entries of a table of tables have names of their own
        nested = [t for t in _subclasses(Table) if f".{t.__name__}" in repr(annotation)]
        if nested:
            model = nested[0]
    return list(model.model_fields)


def _subclasses(model: type[Table]) -> list[type[Table]]:
    return [t for child in model.__subclasses__() for t in (child, *_subclasses(child))]


def unknown_key(key: str, known: list[str]) -> str:
    """The text for a key that is not one of `known`."""
    close = [k for k in known if k.lower() == key.lower()] or get_close_matches(key, known, 1)
    hint = f'did you mean "{close[0]}"?' if close else f"known here: {', '.join(known)}"
    return f'"{key}" is not a key here; {hint}'
