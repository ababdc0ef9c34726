"""The stream: xoshiro256++ against its published output, our logarithm against libm, uniforms at both ends."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from driblet.engines.random_stream import minus_log, next_word, selection_uniform, waiting_uniform
from tests import reference

# the first ten outputs of xoshiro256++ from the state 1, 2, 3, 4 (from memory, as many implementations list them)
FIRST_TEN = [
    41943041, 58720359, 3588806011781223, 3591011842654386, 9228616714210784205, 9973669472204895162,
    14011001112246962877, 12406186145184390807, 15849039046786891736, 10450023813501588000,
]  # fmt: skip
LARGEST = np.uint64(2**64 - 1)


def engine_words(seed: list[int], n: int) -> list[int]:
    state = np.array([[9, 9, 9, 9], seed], dtype=np.uint64)
    got = [int(next_word(state, 1)) for _ in range(n)]
    assert (state[0] == 9).all(), "the other lane's stream is untouched"
    return got


def test_published_output() -> None:
    assert engine_words([1, 2, 3, 4], 10) == FIRST_TEN
    assert list(itertools.islice(reference.words([1, 2, 3, 4]), 10)) == FIRST_TEN


@given(st.lists(st.integers(0, 2**64 - 1), min_size=4, max_size=4))
def test_engine_and_oracle_draw_the_same_words(seed: list[int]) -> None:
    assert engine_words(seed, 50) == list(itertools.islice(reference.words(seed), 50))


def test_uniforms_never_reach_the_ends_that_would_hurt() -> None:
    """A waiting time needs -ln u finite and above zero; a selection needs u < 1, strictly, after multiplication too."""
    assert float(waiting_uniform(np.uint64(0))) == 2.0**-53
    assert float(waiting_uniform(LARGEST)) == 1 - 2.0**-53
    assert float(selection_uniform(np.uint64(0))) == 0.0
    assert float(selection_uniform(LARGEST)) == 1 - 2.0**-52
    for u in (2.0**-53, 1 - 2.0**-53):
        assert 0 < float(minus_log(u)) < 40


@given(st.floats(2.3e-308, 1e308))
def test_largest_selection_stays_below_any_normal_total(total: float) -> None:
    assert float(selection_uniform(LARGEST)) * total < total


@given(st.floats(2.0**-53, 1 - 2.0**-53))
def test_logarithm_of_any_uniform(u: float) -> None:
    assert float(minus_log(u)) == pytest.approx(-math.log(u), rel=4e-15)
    assert float(minus_log(u)) == reference.minus_log(u), "the oracle repeats the engine to the last bit"


@pytest.mark.parametrize(
    "u", [2.0**-53, 1e-300, 0.5, np.nextafter(0.5, 1), math.sqrt(0.5), math.sqrt(2), 1.0, 2.0, 1e300]
)
def test_logarithm_where_its_pieces_meet(u: float) -> None:
    for value in (np.nextafter(u, 0), u, np.nextafter(u, np.inf)):
        assert float(minus_log(value)) == pytest.approx(-math.log(value), rel=4e-15, abs=1e-300)


def test_logarithm_falls_with_u() -> None:
    """Neighbouring uniforms a few hundred steps apart never come out in the wrong order."""
    u = np.linspace(0.4, 0.8, 4001)
    got = np.array([float(minus_log(v)) for v in u])
    assert (np.diff(got) < 0).all()
