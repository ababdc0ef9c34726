"""The tables of [enzymes] and [additions] as pydantic models."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BeforeValidator, Field

from driblet.quantities import Quantity
from driblet.system.tables import (
    TREATMENTS,
    Amount,
    AnyQuantity,
    Loading,
    Table,
    Text,
    Time,
    _as_table,
    _complain,
    _of_kind,
    _one_of,
    _plain,
    _quantity,
)

DIRECTIONS = ("forward", "backward")
AMOUNT_KINDS = ("concentration", "copies", "mass concentration")


def _enzyme_amount(value: object) -> Quantity:
    quantity = _quantity(value)
    if quantity.kind not in AMOUNT_KINDS:
        raise _complain(
            f'"{value}" is no amount of enzyme: a concentration ("80 nM"), a number ("20 copies") or a mass '
            'concentration ("20 ug/mL", with molar_mass) is needed'
        )
    if quantity.value < 0:
        raise _complain(f'"{value}" is negative; an amount cannot be')
    return quantity


def _names(value: object) -> tuple[str, ...]:
    if not isinstance(value, list) or not all(isinstance(name, str) for name in value):
        raise _complain(f'{value!r} will not do: a list of species is needed, such as ["ATP", "sugar"]')
    return tuple(value)


Names = Annotated[tuple[str, ...], BeforeValidator(_names)]
MolarMass = Annotated[float, BeforeValidator(_of_kind("molar mass", allow_zero=False))]


class StepTable(Table):
    forward: AnyQuantity | None = None
    backward: AnyQuantity | None = None


class InhibitorTable(Table):
    Ki: AnyQuantity
    on_rate: AnyQuantity | None = None


class ActivityTable(Table):
    mechanism: Text
    binds: Names | None = None
    releases: Names | None = None
    direction: Annotated[Literal["forward", "backward"], BeforeValidator(_one_of(DIRECTIONS))] | None = None
    kcat: AnyQuantity | None = None
    activity: AnyQuantity | None = None
    KM: dict[str, AnyQuantity] = Field(default_factory=dict)
    Kd: dict[str, AnyQuantity] = Field(default_factory=dict)
    interaction: Annotated[float, BeforeValidator(_plain(1e-6, 1e6, "an interaction factor"))] | None = None
    steps: dict[str, StepTable] | None = None


class EnzymeTable(ActivityTable):
    amount: Annotated[Quantity, BeforeValidator(_enzyme_amount)]
    catalyses: Text | None = None
    loading: Loading | None = None
    label: Text | None = None
    molar_mass: MolarMass | None = None
    active_fraction: Annotated[float, BeforeValidator(_plain(1e-9, 1, "an active fraction"))] = 1.0
    half_life: Time | None = None
    treatment: Annotated[str, BeforeValidator(_one_of(TREATMENTS))] | None = None
    inhibitors: dict[str, Annotated[InhibitorTable, _as_table("Ki")]] = Field(default_factory=dict)
    also: dict[str, ActivityTable] = Field(default_factory=dict)


class SaturableTable(Table):
    """An enzyme without a mechanism."""

    law: Annotated[Literal["saturable"], BeforeValidator(_one_of(("saturable",)))]
    amount: Annotated[Quantity, BeforeValidator(_enzyme_amount)]
    catalyses: Text
    direction: Annotated[Literal["forward", "backward"], BeforeValidator(_one_of(DIRECTIONS))] | None = None
    kcat: AnyQuantity | None = None
    activity: AnyQuantity | None = None
    KM: dict[str, AnyQuantity] = Field(default_factory=dict)
    loading: Loading | None = None
    label: Text | None = None
    molar_mass: MolarMass | None = None
    active_fraction: Annotated[float, BeforeValidator(_plain(1e-9, 1, "an active fraction"))] = 1.0
    half_life: Time | None = None


class AdditionTable(Table):
    at: Time
    species: Text
    amount: Amount
    loading: Loading | None = None
