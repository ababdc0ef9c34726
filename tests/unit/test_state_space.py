"""The search for states in plain Python, which small classes take, against the compiled one."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from driblet_analysis.references.state_search import explore
from driblet_analysis.references.state_space import channel_matrices, walk
from tests.unit.engine_cases import random_network


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 10**6), st.integers(1, 12), st.integers(2, 4), st.integers(2, 6))
def test_both_searches_find_the_same_states_in_the_same_order(seed: int, channels: int, species: int, cap: int) -> None:
    network, _ = random_network(seed, channels, species)
    need, change = channel_matrices(network)
    start = np.random.default_rng(seed).integers(0, cap + 1, species)
    top = np.full(species, cap)
    states, count = explore(start, need, change, top, np.zeros(species), np.inf, 0, 10_000)
    found = walk(tuple(start.tolist()), need, change, top, 10_000)
    np.testing.assert_array_equal(found, states[:count])
    if count > 1:
        assert walk(tuple(start.tolist()), need, change, top, count - 1) is None
        assert explore(start, need, change, top, np.zeros(species), np.inf, 0, count - 1)[1] == 0


def test_a_small_class_is_found_without_compiled_code_and_a_large_one_with_it() -> None:
    code = (
        "import sys\n"
        "from driblet.network import Channel, Network\n"
        "from driblet_analysis.references.state_space import enumerate_class\n"
        "there = Channel(0, 1, ((0, 1),), ((0, -1), (1, 1)), 1.0, 1)\n"
        "back = Channel(0, -1, ((1, 1),), ((0, 1), (1, -1)), 1.0, 1)\n"
        "network = Network(('A', 'B'), ('r',), (there, back))\n"
        "for copies in (500, 20_000):\n"
        "    states = enumerate_class(network, [copies, 0])\n"
        "    print(len(states), tuple(states[-1].tolist()), 'numba' in sys.modules)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines() == ["501 (0, 500) False", "20001 (0, 20000) True"]
