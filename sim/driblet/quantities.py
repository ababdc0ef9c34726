"""Numbers with units as a user writes them, and the constants of nature.

The number is read by our own strict rule, the unit text by pint in our own short registry (units.txt). pint never sees
the number: it would read a typographic minus as plus, "1,5 mM" as 15 mM and "10 000 uM" as 0.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from functools import lru_cache
from importlib import resources
from typing import Any

from driblet.common_units import COMMON_UNITS

# exact by definition: BIPM, The International System of Units, 9th edition, 2019, section 2.2
AVOGADRO = 6.02214076e23  # 1/mol
_BOLTZMANN, _ELEMENTARY_CHARGE = 1.380649e-23, 1.602176634e-19  # J/K, C
GAS_CONSTANT = AVOGADRO * _BOLTZMANN / 1000.0  # kJ/(mol K)
FARADAY = AVOGADRO * _ELEMENTARY_CHARGE / 1000.0  # kJ/(mol V)

_NUMBER = re.compile(r"[+-]?\d+(\.\d*)?([eE][+-]?\d+)?")
# Our own grammar of unit texts: pint evaluates what it is given, and "M^9^9^9" would never come back.
_FACTOR = r"[A-Za-zµμ]+(?:(?:\^|\*\*)[+-]?[0-9]{1,2}|[⁺⁻]?[⁰¹²³⁴-⁹]{1,2})?"
_GAP = r"(?:\s*[*·/]\s*|\s+)"
_GROUP = rf"(?:{_FACTOR}|\(\s*{_FACTOR}(?:{_GAP}{_FACTOR})*\s*\))"
_UNIT = re.compile(rf"(?:1?\s*/\s*)?{_GROUP}(?:{_GAP}{_GROUP})*")
_LONGEST_UNIT = 60
_ADVICE = {
    "C": 'a bare C would be a charge; write "degC"',
    "c": 'write "degC" for degrees Celsius',
    "molar": "",
    "sec": 'write "s"',
    "hr": 'write "h"',
    "molecules": 'write "copies"',
    "molecule": 'write "copies"',
    "particles": 'write "copies"',
}

# kind -> (pint dimensionality, unit the value is converted to, an example for messages)
_KINDS: dict[str, tuple[dict[str, int], str, str]] = {
    "temperature": ({"[temperature]": 1}, "kelvin", '"30 degC"'),
    "time": ({"[time]": 1}, "second", '"20 min"'),
    "length": ({"[length]": 1}, "meter", '"200 nm"'),
    "volume": ({"[length]": 3}, "liter", '"4.2 aL"'),
    "concentration": ({"[substance]": 1, "[length]": -3}, "molar", '"4 mM"'),
    "copies": ({"[copies]": 1}, "copy", '"20 copies"'),
    "energy": (
        {"[mass]": 1, "[length]": 2, "[time]": -2, "[substance]": -1},
        "kilojoule / mole",
        '"-16.7 kJ/mol"',
    ),
    "thermal energy": ({"[thermal_energy]": 1}, "kT", '"-6.6 kT"'),
    "mass concentration": ({"[mass]": 1, "[length]": -3}, "gram / liter", '"20 ug/mL"'),
    "molar mass": ({"[mass]": 1, "[substance]": -1}, "gram / mole", '"82 kDa"'),
    "specific activity": (
        {"[substance]": 1, "[time]": -1, "[mass]": -1},
        "mole / second / gram",
        '"150 U/mg"',
    ),
}


def example_of(kind: str) -> str:
    """A quantity of `kind` as a message shows it, in quotes."""
    return _KINDS[kind][2]


class QuantityError(ValueError):
    """A text that is not a number with a unit; the message says what would be right."""


class OutOfRangeError(QuantityError):
    """A quantity that a double cannot hold in driblet's unit."""


def read_number(text: str) -> float:
    """A number by the strict rule: an optional sign, digits, one point, an exponent; U+2212 reads as minus.

    Raises QuantityError for anything else, and for a number that is not finite as a double.
    """
    plain = text.replace("−", "-")
    if not _NUMBER.fullmatch(plain) or not plain.isascii():
        if "," in text:
            raise QuantityError(f'"{text}" is not a number: decimals take a point, thousands take nothing')
        if re.match(r"[+-]?\d", plain) and re.search(r"[^\d.eE+-]", plain):
            raise QuantityError(f'"{text}" is not a number: a space belongs between number and unit, as in "4 mM"')
        raise QuantityError(f'"{text}" is not a number: write it like 4, 0.25 or 1e-5')
    value = float(plain)
    if not math.isfinite(value):
        raise QuantityError(f'"{text}" is too large for a double')
    if value == 0.0 and re.search(r"[1-9]", re.split("[eE]", plain)[0]):
        raise QuantityError(f'"{text}" is too small for a double')
    return value


@lru_cache(maxsize=1)
def _registry() -> Any:
    import pint

    with resources.as_file(resources.files("driblet") / "units.txt") as path:
        return pint.UnitRegistry(str(path), on_redefinition="raise", autoconvert_offset_to_baseunit=True)


def check_unit(text: str) -> str:
    """A unit text such as "mM", "/M/s", "kJ/mol", without blanks around it; raises QuantityError with advice."""
    stripped = text.strip()
    if stripped not in COMMON_UNITS or not stripped:
        read_unit(stripped)
    return stripped


@lru_cache(maxsize=512)
def read_unit(text: str) -> Any:
    """The pint unit of a unit text; raises QuantityError with advice."""
    stripped = text.strip()
    advice = _ADVICE.get(stripped)
    if re.match(r"[+-]?\d", stripped) and not re.match(r"1\s*/", stripped):
        raise QuantityError(f'digits are grouped without a gap: "{stripped}" begins with a digit where a unit belongs')
    expression = stripped.replace("°C", "degC")
    if len(stripped) > _LONGEST_UNIT or not _UNIT.fullmatch(expression):
        raise QuantityError(f'"{stripped}" is not a unit: write one like mM, /M/s, kJ/mol or um^3')
    expression = expression.replace("·", "*")
    if expression.startswith("/"):
        expression = "1" + expression
    # "/M s" would be 1/M times s to pint; nobody means that
    if re.search(r"/\s*[^\s/()]+\s+[A-Za-zµμ]", expression):
        raise QuantityError(f'"{stripped}" can be read in two ways: write "/M/s" or "/(M s)"')
    from pint.errors import PintError

    registry = _registry()
    try:
        return registry.parse_units(expression)
    except (PintError, ValueError, TypeError, SyntaxError) as error:
        hint = f": {advice}" if advice else f", such as {', '.join(k[2] for k in list(_KINDS.values())[:5])}"
        raise QuantityError(f'"{stripped}" is not a unit driblet knows{hint}') from error


@dataclass(frozen=True)
class Quantity:
    """A finite number and its unit, still as written; `to` converts.

    Attributes: value : float; unit_text : a unit that `check_unit` passed, "" for a plain number; text : the string it came
    from.
    """

    value: float
    unit_text: str
    text: str

    @property
    def unit(self) -> Any:
        """The unit as pint has it."""
        return read_unit(self.unit_text) if self.unit_text else _registry().dimensionless

    @property
    def kind(self) -> str | None:
        """Which of the named kinds this is ("time", "concentration", ...), or None."""
        common = COMMON_UNITS.get(self.unit_text)
        return common.kind if common else _kind_of(self.unit)

    def to(self, kind: str) -> float:
        """The value in driblet's unit of `kind`: K, s, m, L, mol/L, copies, kJ/mol, kT, g/L, g/mol, mol/(s g).

        Raises QuantityError when the dimension is another.
        """
        dimension, target, example = _KINDS[kind]
        common = COMMON_UNITS.get(self.unit_text)
        if common and common.kind == kind:
            return self._in_range(self.value * common.factor + common.offset)
        if self.kind != kind and dict(self.unit.dimensionality) != dimension:
            own = self.kind or f"in {self.unit:~}"
            article = "" if own.startswith("in ") else ("an " if own[0] in "aeiou" else "a ")
            raise QuantityError(
                f'"{self.text}" is {article}{own}; {"an" if kind[0] in "aeiou" else "a"} {kind} is needed here, '
                f"such as {example}"
            )
        return self._convert(target)

    def to_power(self, concentration: int, per_time: int = 0) -> float:
        """The value in (mol/L)^concentration / s^per_time, the unit of a rate or equilibrium constant.

        Raises QuantityError when the dimension is another.
        """
        common = COMMON_UNITS.get(self.unit_text)
        if common and common.power == (concentration, per_time):
            return self._in_range(self.value * common.factor)
        want: dict[str, int] = {}
        if concentration:
            want.update({"[substance]": concentration, "[length]": -3 * concentration})
        if per_time:
            want["[time]"] = -per_time
        if dict(self.unit.dimensionality) != want:
            raise QuantityError(
                f'"{self.text}" has the wrong unit: {power_unit(concentration, per_time) or "a plain number"} is needed'
            )
        parts = [f"molar ** {concentration}"] * bool(concentration) + [f"second ** -{per_time}"] * bool(per_time)
        return self._convert(" * ".join(parts) or "")

    def _convert(self, target: str) -> float:
        return self._in_range(_converted(self.value, self.unit, target))

    def _in_range(self, value: float) -> float:
        offset = self.kind == "temperature"  # zero kelvin is a true value of another scale
        if not math.isfinite(value) or (value == 0.0 and self.value != 0.0 and not offset):
            raise OutOfRangeError(f'"{self.text}" is out of the range of a double')
        return value

    def __str__(self) -> str:
        return self.text


# a sweep builds thousands of systems from the same few texts, and pint is most of the work of building one
@lru_cache(maxsize=512)
def _kind_of(unit: Any) -> str | None:
    dimension = dict(unit.dimensionality)
    return next((kind for kind, spec in _KINDS.items() if spec[0] == dimension), None)


@lru_cache(maxsize=8192)
def _converted(value: float, unit: Any, target: str) -> float:
    return float(_registry().Quantity(value, unit).to(target).magnitude)


def power_unit(concentration: int, per_time: int = 0) -> str:
    """How a unit (mol/L)^concentration / s^per_time is written in a system file, "" when there is none."""
    if concentration < 0:
        text = "/M" + (f"^{-concentration}" if concentration < -1 else "")
    else:
        text = "M" * (concentration > 0) + (f"^{concentration}" if concentration > 1 else "")
    return text + "/s" * per_time


def read_quantity(text: object, allow_plain: bool = False, example: str = '"4 mM"') -> Quantity:
    """Read `number unit` from a string; with `allow_plain` a number without a unit is dimensionless.

    `example` is what a message shows. Raises QuantityError with the advice a user needs.
    """
    if isinstance(text, bool) or not isinstance(text, str | int | float):
        raise QuantityError(f"a number with a unit in quotes is needed, such as {example}")
    if isinstance(text, int | float):
        if allow_plain:
            return Quantity(_finite(text), "", repr(text))
        raise QuantityError(f"a bare number {text!r} has no unit: write it in quotes with one, such as {example}")
    parts = text.split(None, 1)
    if not parts:
        raise QuantityError(f"an empty text where a number with a unit is needed, such as {example}")
    value = read_number(parts[0])
    if len(parts) == 1:
        if allow_plain:
            return Quantity(value, "", text)
        raise QuantityError(f'"{text}" has no unit: write one after a space, such as {example}')
    return Quantity(value, check_unit(parts[1]), text)


def _finite(value: float) -> float:
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        raise QuantityError(f"{value!r} is not a finite number")
    return number


def thermal_energy(temperature_K: float) -> float:
    """RT in kJ/mol."""
    return GAS_CONSTANT * temperature_K


def copies_per_molar(volume_L: float) -> float:
    """Omega = N_A V, the copies that 1 mol/L amounts to in `volume_L`."""
    return float(AVOGADRO * volume_L)
