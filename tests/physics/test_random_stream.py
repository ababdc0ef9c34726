"""The random stream against its published reference, the logarithm against decimal arithmetic of forty digits."""

import math
import shutil
import subprocess
from collections.abc import Callable
from decimal import Context, Decimal
from pathlib import Path

import numpy as np
import pytest
from numba import njit
from scipy import stats

from driblet.engines.random_stream import minus_log, next_word, selection_uniform, waiting_uniform

# xoshiro256++ 1.0 as published by Blackman & Vigna (public domain); text from memory
REFERENCE = r"""
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
static inline uint64_t rotl(const uint64_t x, int k) { return (x << k) | (x >> (64 - k)); }
static uint64_t s[4];
uint64_t next(void) {
    const uint64_t result = rotl(s[0] + s[3], 23) + s[0];
    const uint64_t t = s[1] << 17;
    s[2] ^= s[0];
    s[3] ^= s[1];
    s[1] ^= s[2];
    s[0] ^= s[3];
    s[2] ^= t;
    s[3] = rotl(s[3], 45);
    return result;
}
int main(int argc, char **argv) {
    for (int i = 0; i < 4; i++) s[i] = strtoull(argv[1 + i], NULL, 10);
    for (long i = atol(argv[5]); i > 0; i--) printf("%llu\n", (unsigned long long)next());
    return 0;
}
"""
# the first words from the state 1, 2, 3, 4, as implementations of it test themselves; from memory
FIRST_WORDS = [41943041, 58720359, 3588806011781223, 3591011842654386, 9228616714210784205]


@njit
def _words(state: np.ndarray, count: int) -> np.ndarray:
    out = np.empty(count, dtype=np.uint64)
    for k in range(count):
        out[k] = next_word(state, 0)
    return out


@njit
def _minus_log(u: np.ndarray) -> np.ndarray:
    out = np.empty(u.size)
    for k in range(u.size):
        out[k] = minus_log(u[k])
    return out


@njit
def _uniforms(words: np.ndarray) -> np.ndarray:
    out = np.empty((words.size, 2))
    for k in range(words.size):
        out[k, 0], out[k, 1] = selection_uniform(words[k]), waiting_uniform(words[k])
    return out


def words(state: list[int], count: int) -> list[int]:
    return [int(w) for w in _words(np.array([state], dtype=np.uint64), count)]


def test_first_words() -> None:
    assert words([1, 2, 3, 4], len(FIRST_WORDS)) == FIRST_WORDS


@pytest.mark.skipif(shutil.which("cc") is None, reason="no C compiler")
def test_words_of_the_reference_implementation(tmp_path: Path) -> None:
    source, program = tmp_path / "reference.c", tmp_path / "reference"
    source.write_text(REFERENCE)
    subprocess.run(["cc", "-O1", "-o", program, source], check=True)
    for state in ([1, 2, 3, 4], [int(w) for w in np.random.SeedSequence(9).generate_state(4, np.uint64)]):
        text = subprocess.run([program, *map(str, state), "5000"], check=True, capture_output=True, text=True).stdout
        assert words(state, 5000) == [int(line) for line in text.split()]


def relative_error(u: np.ndarray, logarithm: Callable[[np.ndarray], np.ndarray] = _minus_log) -> float:
    """Largest relative error of -ln u against decimal arithmetic."""
    context = Context(prec=40)
    worst = 0.0
    for argument, value in zip(u, logarithm(u), strict=True):
        truth = -Decimal(float(argument)).ln(context)
        worst = max(worst, abs(float(Decimal(float(value)) / truth - 1)))
    return worst


ARGUMENTS = {
    "as drawn": (np.random.default_rng(1).integers(0, 2**52, 3000) + 0.5) * 2.0**-52,
    "the smallest": (np.arange(500) + 0.5) * 2.0**-52,
    "the largest": 1 - (np.arange(500) + 0.5) * 2.0**-52,
    "close to 1": 1 - 10.0 ** -np.linspace(1, 15, 1500),
    "around 1/sqrt 2": math.sqrt(0.5) * (1 + np.linspace(-1e-12, 1e-12, 501)),
    "around 1/2": 0.5 * (1 + np.linspace(-1e-3, 1e-3, 501)),
    "down to 2^-1000": 2.0 ** -np.linspace(1, 1000, 1000),
}


@pytest.mark.parametrize("u", ARGUMENTS.values(), ids=ARGUMENTS.keys())
def test_logarithm(u: np.ndarray) -> None:
    assert relative_error(u) < 4e-15
    np.testing.assert_allclose(_minus_log(u), [-math.log(x) for x in u], rtol=4e-15)


def test_twin_a_logarithm_with_one_term_less() -> None:
    def short(u: np.ndarray) -> np.ndarray:
        m, e = np.frexp(u)
        m, e = np.where(m < math.sqrt(0.5), 2 * m, m), np.where(m < math.sqrt(0.5), e - 1, e)
        z = (m - 1) / (m + 1)
        return -(e * math.log(2) + 2 * sum(z ** (2 * k + 1) / (2 * k + 1) for k in range(8)))

    assert relative_error(ARGUMENTS["as drawn"], short) > 4e-15


def test_uniforms_stay_inside_their_intervals() -> None:
    selection, waiting = _uniforms(np.array([0, 1, 2**63, 2**64 - 1], dtype=np.uint64)).T
    assert selection.min() == 0
    assert selection.max() == 1 - 2.0**-52
    assert waiting.min() == 2.0**-53
    assert waiting.max() == 1 - 2.0**-53
    assert (_minus_log(waiting) > 0).all()


def test_waits_are_exponential_and_selections_uniform() -> None:
    """200,000 draws, Kolmogorov-Smirnov; false-alarm rate 1e-3 each, and a rate 2 % off is rejected."""
    u = _uniforms(_words(np.random.SeedSequence(4).generate_state(4, np.uint64)[None], 200_000))
    waits = _minus_log(u[:, 1])
    assert stats.kstest(u[:, 0], "uniform").pvalue > 1e-3
    assert stats.kstest(waits, "expon").pvalue > 1e-3
    assert stats.kstest(waits * 1.02, "expon").pvalue < 1e-3
