"""Key paths: what is replaced, what is left alone, what is refused; and TOML written by us against Python's own reader."""

from __future__ import annotations

import copy
import tomllib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from driblet.system.build import build
from driblet_analysis.sweep.keypaths import KeyPathError, lookup, replaced, toml_text, valid_paths
from tests.texts import MIXED, SMALL

RAW = tomllib.loads(MIXED)


def test_a_value_is_replaced_and_the_original_is_not_touched() -> None:
    before = copy.deepcopy(RAW)
    changed = replaced(RAW, {"species.A": "1 mM", "species.B": "7 copies", "run.duration": "9 s"})
    assert changed["species"]["A"] == "1 mM"
    assert changed["species"]["B"] == {"amount": "7 copies", "loading": "nearest"}
    assert changed["run"]["duration"] == "9 s"
    assert before == RAW
    assert changed["reactions"] is RAW["reactions"]


def test_a_table_stands_for_its_main_value() -> None:
    changed = replaced(RAW, {"compartments.vesicle.diameter": "80 nm"})
    assert changed["compartments"]["vesicle"]["diameter"] == {"median": "80 nm", "cv": 0.1}
    assert lookup(RAW, "compartments.vesicle.diameter") == "120 nm"
    assert lookup(RAW, "compartments.vesicle.diameter.cv") == 0.1


def test_a_key_inside_a_short_form_makes_it_a_table() -> None:
    assert replaced(RAW, {"species.A.loading": "nearest"})["species"]["A"] == {"amount": "60 uM", "loading": "nearest"}
    small = tomllib.loads(SMALL.replace('volume = "0.1 fL"', 'diameter = "90 nm"'))
    both = replaced(small, {"compartments.drop.diameter.cv": 0.2, "compartments.drop.diameter": "70 nm"})
    assert both["compartments"]["drop"]["diameter"] == {"median": "70 nm", "cv": 0.2}


def test_a_key_with_a_default_may_be_new() -> None:
    raw = tomllib.loads(SMALL.replace("seed = 1\n", ""))
    assert build(replaced(raw, {"run.seed": 5}), "").settings.seed == 5
    assert build(replaced(raw, {"conditions.pH": 7.1}), "").conditions.pH == 7.1


@pytest.mark.parametrize(
    ("path", "near"),
    [
        ("species.AA", "species.A"),
        ("specie.A", "species.A"),
        ("compartments.drop.volume.median.x", "compartments.vesicle"),
        ("reactions.turns.K", "reactions.turn.K"),
        ("title", "such as conditions.temperature"),
        ("A", "species.A"),
        ("", "such as"),
        ("species.A.amount.more", "species.A"),
    ],
)
def test_unknown_paths_are_refused_with_the_nearest(path: str, near: str) -> None:
    with pytest.raises(KeyPathError, match="is no key path") as error:
        replaced(RAW, {path: "1 mM"})
    assert near in str(error.value)


def test_a_table_without_a_main_value_names_a_key_in_it() -> None:
    with pytest.raises(KeyPathError, match=r'such as "reactions.turn.equation"'):
        replaced(RAW, {"reactions.turn": "1"})
    with pytest.raises(KeyPathError, match="without a main value"):
        lookup(RAW, "reactions.turn")


def test_every_valid_path_can_be_read_and_replaced() -> None:
    paths = valid_paths(RAW)
    assert {"species.A", "species.B", "compartments.vesicle.diameter", "run.seed", "readouts.level"} <= set(paths)
    for path in paths:
        assert lookup(replaced(RAW, {path: "17 s"}), path) == "17 s"


def test_every_ready_system_survives_being_written() -> None:
    from driblet.commands.new import ready_systems

    for path in ready_systems().values():
        raw = tomllib.loads(path.read_text("utf-8"))
        assert tomllib.loads(toml_text(raw)) == raw


scalars = (
    st.text() | st.integers(-(2**63), 2**63 - 1) | st.floats(allow_nan=False, allow_infinity=False) | st.booleans()
)
tables = st.recursive(
    st.dictionaries(st.text(min_size=1), scalars, max_size=4),
    lambda inner: st.dictionaries(st.text(min_size=1), scalars | st.lists(scalars, max_size=3) | inner, max_size=4),
    max_leaves=12,
)


@given(tables)
def test_what_is_written_reads_back_the_same(raw: dict) -> None:
    assert tomllib.loads(toml_text(raw)) == raw
