"""The strict number rule (design.md section 4 lists the spellings) and the units around it."""

from __future__ import annotations

import math
import string
import subprocess
import sys
from contextlib import suppress

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import constants

from driblet import quantities
from driblet.common_units import COMMON_UNITS
from driblet.quantities import (
    OutOfRangeError,
    Quantity,
    QuantityError,
    power_unit,
    read_number,
    read_quantity,
    read_unit,
)


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("4", 4.0),
        ("+4", 4.0),
        ("-4", -4.0),
        ("−4", -4.0),  # U+2212
        ("4.", 4.0),
        ("0.25", 0.25),
        ("1e-5", 1e-5),
        ("1E5", 1e5),
        ("1e−5", 1e-5),
        ("6.022e23", 6.022e23),
        ("0", 0.0),
        ("0e-400", 0.0),
        ("1.7976931348623157e308", 1.7976931348623157e308),
        ("5e-324", 5e-324),
        ("0007", 7.0),
    ],
)
def test_numbers_read(text: str, value: float) -> None:
    assert read_number(text) == value


@pytest.mark.parametrize(
    "text",
    [
        "", "1,5", "1.000,5", "10_000", "10 000", "1 e5", "١", "４", "²", "½", ".5", "1..5", "1.5.2", "1e", "e5", "1e5.0",
        "--4", "+-4", "- 4", "–4", "—4", "0x10", "1_0", "nan", "NaN", "inf", "-inf", "Infinity", "1e400", "-1e309", "1e-400",
        "4mM", "4%", "1/3", "1*3", "(4)", "4j", "four", "\x004", "4\n", "1'000", "1\u202f000",
    ],
)  # fmt: skip
def test_numbers_refused(text: str) -> None:
    with pytest.raises(QuantityError):
        read_number(text)


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_double_survives_its_own_text(value: float) -> None:
    assert read_number(repr(value)) == value


@given(st.text(max_size=12))
def test_nothing_but_the_grammar_is_a_number(text: str) -> None:
    try:
        value = read_number(text)
    except QuantityError:
        return
    assert set(text) <= set(string.digits + "+-−.eE")
    assert math.isfinite(value)


# expected values are hand arithmetic in the SI definitions of the prefixes
@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("4 mM", "concentration", 4e-3),
        ("4 uM", "concentration", 4e-6),
        ("4 µM", "concentration", 4e-6),  # U+00B5
        ("4 μM", "concentration", 4e-6),  # U+03BC
        ("4 mmol/L", "concentration", 4e-3),
        ("4 mol/m^3", "concentration", 4e-3),
        ("4 mol m^-3", "concentration", 4e-3),
        ("4 mol·m⁻³", "concentration", 4e-3),
        ("4  nM", "concentration", 4e-9),
        ("  4 nM  ", "concentration", 4e-9),
        ("30 degC", "temperature", 303.15),
        ("30 °C", "temperature", 303.15),
        ("-10 degC", "temperature", 263.15),
        ("-273.15 degC", "temperature", 0.0),
        ("310.15 K", "temperature", 310.15),
        ("20 min", "time", 1200.0),
        ("1.5 h", "time", 5400.0),
        ("2 day", "time", 172800.0),
        ("250 ms", "time", 0.25),
        ("200 nm", "length", 2e-7),
        ("4.2 aL", "volume", 4.2e-18),
        ("1 um^3", "volume", 1e-15),
        ("1 µm³", "volume", 1e-15),
        ("1 nm**3", "volume", 1e-24),
        ("1 mL", "volume", 1e-3),
        ("20 copies", "copies", 20.0),
        ("1 copy", "copies", 1.0),
        ("-16.7 kJ/mol", "energy", -16.7),
        ("−16.7 kJ/mol", "energy", -16.7),
        ("-16.7 kJ mol^-1", "energy", -16.7),
        ("-7.3 kcal/mol", "energy", -30.5432),  # the thermochemical calorie, 4.184 J by definition
        ("500 J/mol", "energy", 0.5),
        ("-6.6 kT", "thermal energy", -6.6),
    ],
)
def test_quantities_convert(text: str, kind: str, value: float) -> None:
    quantity = read_quantity(text)
    assert quantity.kind == kind
    assert quantity.to(kind) == pytest.approx(value, rel=1e-14, abs=1e-300)
    assert str(quantity) == text


@pytest.mark.parametrize(
    ("text", "advice"),
    [
        ("1,5 mM", "a point"),
        ("10 000 uM", "gap"),
        ("10_000 uM", "space"),
        ("4mM", "space"),
        ("30 C", "degC"),
        ("30 c", "degC"),
        ("4 MM", "is not a unit"),
        ("4 Mm", "is not a unit"),
        ("20 molecules", "copies"),
        ("20 hr", '"h"'),
        ("20 sec", '"s"'),
        ("4 /M s", "two ways"),
        ("4 J/mol K", "two ways"),
        ("4", "has no unit"),
        ("", "empty"),
        ("   ", "empty"),
        ("mM", "not a number"),
        ("mM 4", "not a number"),
        ("1e400 mM", "too large"),
        ("nan mM", "not a number"),
        ("inf s", "not a number"),
        ("4 mM+mM", "is not a unit"),
        ("4 mM-mM", "is not a unit"),
        ("4 mM/1000", "is not a unit"),
        ("4 %", "is not a unit"),
        ("4 M^", "is not a unit"),
        ("4 M^0.5", "is not a unit"),
        ("4 M^^2", "is not a unit"),
        ("4 M^9^9^9^9", "is not a unit"),  # 9^9^9^9 would never be computed
        ("4 M**9**9**9", "is not a unit"),
        ("4 M^999999999", "is not a unit"),
        ("4 M/0", "is not a unit"),
        ("4 ()", "is not a unit"),
        ("4 (M", "is not a unit"),
        ("4 M)", "is not a unit"),
        ("4 /", "is not a unit"),
        ("4 *", "is not a unit"),
        ("4 **", "is not a unit"),
        ("4 " + "(" * 3000 + "M" + ")" * 3000, "is not a unit"),
        ("4 " + "M " * 3000, "is not a unit"),
        ("4 pi", "is not a unit"),
        ("4 __import__('os')", "is not a unit"),
        ("4 kkM", "is not a unit"),
        ("4 °", "is not a unit"),
        ("4 lambda", "is not a unit"),
    ],
)
def test_quantities_refused_with_advice(text: str, advice: str) -> None:
    with pytest.raises(QuantityError) as caught:
        read_quantity(text)
    assert advice in str(caught.value)


@pytest.mark.parametrize("value", [None, True, False, [], {}, b"4 mM", ["4 mM"], 4, 4.5, math.nan, math.inf, 10**400])
def test_bare_values_are_refused_as_quantities(value: object) -> None:
    with pytest.raises(QuantityError):
        read_quantity(value)


@pytest.mark.parametrize(("value", "number"), [(754, 754.0), (0.5, 0.5), ("754", 754.0), ("2e5", 2e5)])
def test_plain_numbers_where_they_are_allowed(value: object, number: float) -> None:
    quantity = read_quantity(value, allow_plain=True)
    assert quantity.value == number
    assert quantity.to_power(0) == number


@pytest.mark.parametrize("value", [True, math.nan, -math.inf, 10**400, "1,5", [], None])
def test_plain_numbers_refused(value: object) -> None:
    with pytest.raises(QuantityError):
        read_quantity(value, allow_plain=True)


@pytest.mark.parametrize(
    ("text", "concentration", "per_time", "value"),
    [
        ("5 /s", 0, 1, 5.0),
        ("5 1/s", 0, 1, 5.0),
        ("6 /min", 0, 1, 0.1),
        ("2 /M/s", -1, 1, 2.0),
        ("2 /(M s)", -1, 1, 2.0),
        ("2 M^-1 s^-1", -1, 1, 2.0),
        ("2 /uM/s", -1, 1, 2e6),
        ("2 L/mol/s", -1, 1, 2.0),
        ("3 /mM^2/s", -2, 1, 3e6),
        ("1 uM/s", 1, 1, 1e-6),
        ("5 nM", 1, 0, 5e-9),
        ("2e5 /M", -1, 0, 2e5),
        ("2 /mM^2", -2, 0, 2e6),
        ("4 M^2", 2, 0, 4.0),
    ],
)
def test_constants_convert(text: str, concentration: int, per_time: int, value: float) -> None:
    assert read_quantity(text).to_power(concentration, per_time) == pytest.approx(value, rel=1e-14)


@pytest.mark.parametrize(
    ("text", "concentration", "per_time"), [("5 /s", -1, 1), ("5 M", 0, 0), ("5 /M/s", 0, 1), ("5 K/s", 0, 1)]
)
def test_constants_of_another_dimension_are_refused(text: str, concentration: int, per_time: int) -> None:
    with pytest.raises(QuantityError, match="wrong unit"):
        read_quantity(text).to_power(concentration, per_time)


@pytest.mark.parametrize(
    ("text", "kind", "needed"),
    [
        ("4 mM", "volume", '"4.2 aL"'),
        ("4 mM", "energy", '"-16.7 kJ/mol"'),
        ("20 kJ", "energy", "energy"),
        ("20 kJ/mol/K", "energy", "energy"),
        ("4 s", "copies", '"20 copies"'),
        ("4 kT", "energy", '"-16.7 kJ/mol"'),
    ],
)
def test_another_kind_is_refused_with_an_example(text: str, kind: str, needed: str) -> None:
    with pytest.raises(QuantityError) as caught:
        read_quantity(text).to(kind)
    assert needed in str(caught.value)


@pytest.mark.parametrize(
    ("text", "kind"), [("1e308 km", "length"), ("1e-322 zM", "concentration"), ("1e308 kcal/mol", "energy")]
)
def test_values_a_double_cannot_hold_are_refused(text: str, kind: str) -> None:
    with pytest.raises(OutOfRangeError, match="out of the range"):
        read_quantity(text).to(kind)


@pytest.mark.parametrize(
    ("concentration", "per_time", "text"),
    [
        (0, 1, "/s"),
        (-1, 1, "/M/s"),
        (-2, 1, "/M^2/s"),
        (1, 1, "M/s"),
        (1, 0, "M"),
        (2, 0, "M^2"),
        (-1, 0, "/M"),
        (0, 0, ""),
    ],
)
def test_power_units_are_written_as_they_are_read(concentration: int, per_time: int, text: str) -> None:
    assert power_unit(concentration, per_time) == text
    if text:
        assert read_quantity(f"3 {text}").to_power(concentration, per_time) == pytest.approx(3.0)


@given(st.text(alphabet="munpkMLsJKdegC°CÅ()*/^·-+0123456789 ²³⁻¹.eV_[]{}%µ\n\t'\"\\", max_size=25))
def test_no_unit_text_does_anything_but_read_or_refuse(text: str) -> None:
    for kind in ("concentration", "temperature", "energy", "time"):
        with suppress(QuantityError):
            assert math.isfinite(read_quantity("4 " + text).to(kind))


def test_constants_of_nature_are_codata() -> None:
    assert constants.Avogadro == quantities.AVOGADRO
    assert pytest.approx(constants.R / 1000, rel=1e-15) == quantities.GAS_CONSTANT
    assert pytest.approx(constants.N_A * constants.e / 1000, rel=1e-9) == quantities.FARADAY
    assert quantities.thermal_energy(298.15) == pytest.approx(2.4790, abs=1e-4)  # RT at 25 degC, any handbook table
    assert quantities.copies_per_molar(1e-15) == pytest.approx(6.02214076e8)  # one femtolitre


def test_the_registry_knows_only_our_units() -> None:
    """A full registry would read C as coulomb, G as gauss, a year as y: none of that is here."""
    for name in ["C", "F", "V", "A", "Pa", "bar", "eV", "ft", "in", "lb", "y", "T", "W", "rad", "bit", "N"]:
        with pytest.raises(QuantityError):
            read_unit(name)


@pytest.mark.parametrize("text", [t for t in COMMON_UNITS if t])
def test_common_units_are_those_of_pint(text: str) -> None:
    """Number for number, to the last bit."""
    common = COMMON_UNITS[text]
    rng = np.random.default_rng(5)
    unit = read_unit(text)
    for value in (rng.uniform(-1, 1, 50) * 10.0 ** rng.integers(-9, 9, 50)).tolist():
        if common.kind:
            target = quantities._KINDS[common.kind][1]
            dimension = dict(unit.dimensionality)
            assert dimension == quantities._KINDS[common.kind][0]
            assert Quantity(value, text, "").to(common.kind) == quantities._converted(value, unit, target)
        if common.power:
            concentration, per_time = common.power
            base = Quantity(1.0, "", "").unit * unit / (read_unit("M") ** concentration / read_unit("s") ** per_time)
            assert base.dimensionless
            expected = float((value * base).to("").magnitude)
            assert Quantity(value, text, "").to_power(concentration, per_time) == pytest.approx(expected, rel=1e-14)


def test_common_units_are_read_without_pint() -> None:
    code = (
        "import sys\nfrom driblet.quantities import read_quantity\n"
        "print(read_quantity('4 mM').to('concentration'), 'pint' in sys.modules)\n"
        "print(read_quantity('4 dM').to('concentration'), 'pint' in sys.modules)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines() == ["0.004 False", "0.4 True"]
