"""Axes: spans against numpy, Sobol points against scipy, equal values under one key, and what is refused."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import qmc

from driblet.quantities import read_quantity
from driblet_analysis.sweep.axes import (
    AxisError,
    Column,
    canonical,
    column_of,
    in_column,
    read_axis,
    sobol_fractions,
    stream_key,
)


@pytest.mark.parametrize("spacing", ["linear", "log"])
def test_spans_are_numpys(spacing: str) -> None:
    grid = read_axis("c.d", {"from": "80 nm", "to": "0.4 um", "points": 9, "spacing": spacing}).grid()
    values = [read_quantity(v).to("length") for v in grid]
    numpy = np.linspace if spacing == "linear" else np.geomspace
    np.testing.assert_allclose(values, numpy(80e-9, 400e-9, 9), rtol=1e-9)
    assert grid[0] == "80 nm"
    assert grid[-1] == "400 nm"


def test_plain_numbers_stay_plain_and_whole_ones_whole() -> None:
    assert read_axis("a.b", {"from": 1, "to": 5, "points": 5}).grid() == (1, 2, 3, 4, 5)
    assert all(isinstance(v, int) for v in read_axis("a.b", {"from": 1, "to": 5, "points": 5}).grid())
    assert read_axis("a.b", {"from": 7.0, "to": 8.0, "points": 3}).grid() == (7.0, 7.5, 8.0)
    assert read_axis("a.b", {"from": 5, "to": 1, "points": 3}).grid() == (5, 3, 1)


def test_sobol_points_are_scipys_and_more_keep_the_first() -> None:
    np.testing.assert_array_equal(sobol_fractions(3, 64, 7), qmc.Sobol(3, scramble=True, seed=7).random_base2(6))
    np.testing.assert_array_equal(sobol_fractions(3, 100, 7)[:37], sobol_fractions(3, 37, 7))
    assert qmc.discrepancy(sobol_fractions(2, 128, 1)) < qmc.discrepancy(np.random.default_rng(1).random((128, 2)))


def test_a_drawn_value_lies_in_the_span_or_is_one_of_the_list() -> None:
    span = read_axis("a.b", {"from": "1 mM", "to": "100 mM", "spacing": "log"})
    assert span.drawn(0.5) == "10 mM"
    listed = read_axis("a.b", ["1 mM", "2 mM", "5 mM"])
    assert [listed.drawn(u) for u in (0.0, 0.34, 0.9999999)] == ["1 mM", "2 mM", "5 mM"]


@pytest.mark.parametrize(
    ("one", "other"),
    [("1 mM", "1000 uM"), ("30 degC", "303.15 K"), ("2", 2), (2, 2.0), ("−3 kT", "-3 kT"), ("0.1 /s", "6 /min")],
)
def test_equal_values_share_a_key(one: object, other: object) -> None:
    assert canonical(one) == canonical(other)
    assert stream_key(["a.b"], [one]) == stream_key(["a.b"], [other])


def test_keys_tell_values_and_paths_apart_and_ignore_the_order_of_axes() -> None:
    assert stream_key(["a.b"], ["1 mM"]) != stream_key(["a.b"], ["2 mM"])
    assert stream_key(["a.b"], ["1 mM"]) != stream_key(["a.c"], ["1 mM"])
    assert stream_key(["a.b"], ["1 mM"]) != stream_key(["a.b"], ["1 nm"])
    assert stream_key(["a.b"], [True]) != stream_key(["a.b"], [1])
    assert stream_key(["a.b", "c.d"], [1, 2]) == stream_key(["c.d", "a.b"], [2, 1])


def test_the_key_of_a_point_is_what_it_was() -> None:
    """A change here changes every sweep's numbers: plans made before would be answered with other bits."""
    assert stream_key(["species.ATP", "run.duration"], ["0.5 mM", "20 min"]) == 5701484949516543641


@given(st.lists(st.floats(1e-12, 1e12), min_size=1, max_size=3))
def test_keys_are_two_words_of_32_bits_that_are_never_zero(values: list[float]) -> None:
    key = stream_key([f"a.x{i}" for i in range(len(values))], values)
    assert 2**32 < key < 2**63
    assert key & 0xFFFFFFFF


def test_columns_have_one_kind_and_the_unit_of_the_first() -> None:
    column = column_of(["1 mM", "200 uM"])
    assert column == Column("number", "mM")
    assert in_column("200 uM", column) == 0.2
    assert column_of([1, 2.5]) == Column("number", "")
    assert column_of(["poisson", "nearest"]) == Column("text", "")
    assert column_of([True, False]) == Column("text", "")
    assert in_column(True, Column("text", "")) == "true"
    for mixed in (["1 mM", "2 copies"], ["1 mM", 2], ["poisson", 2]):
        with pytest.raises(AxisError, match="mixes"):
            column_of(mixed)


@pytest.mark.parametrize(
    ("value", "complaint"),
    [
        ([], "is empty"),
        ("1 mM", "a list of values is needed"),
        ([["1 mM"]], "will not do"),
        ([float("nan")], "will not do"),
        ({"from": "1 mM"}, "to is missing"),
        ({"to": "1 mM"}, "from is missing"),
        ({"from": "1 mM", "to": "2 mM", "steps": 3}, '"steps" is not a key here'),
        ({"from": "1 mM", "to": "2 nm", "points": 3}, "different kinds"),
        ({"from": "1 mM", "to": "1000 uM", "points": 3}, "the same value"),
        ({"from": "0 mM", "to": "2 mM", "points": 3, "spacing": "log"}, "above zero"),
        ({"from": "1 mM", "to": "2 mM", "points": 3, "spacing": "cubic"}, '"linear" or "log"'),
        ({"from": "1 mM", "to": "2 mM", "points": 1}, "a whole number from 2"),
        ({"from": "1 mM", "to": "2 mM", "points": True}, "a whole number from 2"),
        ({"from": "1,5 mM", "to": "2 mM", "points": 3}, "decimals take a point"),
        ({"from": "1 mM", "to": "2 mM"}, None),
    ],
)
def test_what_is_no_axis(value: object, complaint: str | None) -> None:
    if complaint is None:
        with pytest.raises(AxisError, match="needs points"):
            read_axis("a.b", value).grid()
        return
    with pytest.raises(AxisError, match=complaint):
        read_axis("a.b", value)
