"""Requirements judged event by event against a plain evaluation of every state a trajectory passes through."""

from __future__ import annotations

import bisect
import itertools
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

import driblet
from driblet.condition_forms import NotInFormError, form_of
from driblet.engines.contract import RUNNING, new_samples, new_state
from driblet.engines.exact import ExactEngine
from driblet.engines.recorders import recorders_for
from driblet.engines.requirement_arrays import Requirements
from driblet.network import Network
from driblet.outcomes import Outcomes
from driblet.readouts import extended
from driblet.requirements import CompiledRequirements, conclude_all, judge_on_grid, look_at_all
from driblet.system import System
from driblet.system.expressions import (
    Comparison,
    ExpressionError,
    Named,
    Names,
    Negation,
    Operation,
    Truth,
    read_condition,
    read_value,
)
from tests.reference import Step, simulate
from tests.texts import SMALL, changed

# the constants are odd, so that no energy is zero but for rounding, where logarithms and products may differ
RELAY = """\
[conditions]
temperature = "30 degC"

[compartments.drop]
volume = "0.02 fL"

[species]
ATP = "9 copies"
ADP = "3 copies"
AMP = "2 copies"
S = "6 copies"
SP = "0 copies"
E = "2 copies"
Pi = { amount = "5 mM", held = true }

[reactions.relay]
equation = "ATP + S <=> ADP + SP"
K = 10.3
forward = "4e7 /M/s"

[reactions.leak]
equation = "ATP + H2O <=> ADP + Pi"
K = "1.03e3 M"
forward = "0.4 /s"

[reactions.kinase]
equation = "2 ADP <=> ATP + AMP"
K = 0.97
forward = "1e7 /M/s"

[reactions.turn]
equation = "S + E <=> SP + E"
K = 0.53
forward = "4e6 /M/s"

[reactions.odd]
equation = "2 E <=> E + AMP"
K = 1.7
forward = "4e6 /M/s"

[readouts]
charged = "SP / (S + SP)"

[run]
duration = "6 s"
sample_every = "0.5 s"
"""


@dataclass
class Path:
    """Every state of one compartment: moments at which each begins, counts, and the random stream that led there."""

    moments: list[float]
    counts: NDArray[np.int64]
    omega: float
    seed: tuple[int, int, int, int] = (0, 0, 0, 0)


def path_of(system: System, seed: int) -> Path:
    network = Network.of(system)
    omega = system.compartment.omega
    rates = network.rates(np.array([omega]))[0]
    names = network.species
    steps = [
        Step({names[i]: n for i, n in c.reactants}, {names[i]: n for i, n in c.change}, float(rates[j]))
        for j, c in enumerate(network.channels)
    ]
    start = {s.name: round(s.mean_copies(omega)) for s in system.free_species}
    events = simulate(steps, start, [system.settings.duration_s], [seed, 1, 2, 3]).events
    states = [[start[n] for n in names]]
    for _, channel in events:
        row = list(states[-1])
        for i, amount in network.channels[channel].change:
            row[i] += amount
        states.append(row)
    return Path([0.0, *(t for t, _ in events)], np.array(states), omega, (seed, 1, 2, 3))


def recorded(
    system: System, omega: float, replicates: int, stop: bool = False
) -> tuple[CompiledRequirements, Requirements]:
    compiled = CompiledRequirements.of(system, Network.of(system), system.settings.duration_s)
    assert not compiled.by_grid, compiled.by_grid
    return compiled, compiled.recorder(np.full(replicates, omega), stop)


def judged(system: System, path: Path, **how: Any) -> Outcomes:
    """What an engine says of one compartment that takes this path."""
    return judged_together(system, [path], **how)


def judged_together(
    system: System, paths: list[Path], method: str = "scalar", budget: int = 1 << 20, stop: bool = False
) -> Outcomes:
    """What an engine says of compartments with the streams of these paths."""
    network, R = Network.of(system), len(paths)
    compiled, requirements = recorded(system, paths[0].omega, R, stop)
    state = new_state(
        np.array([p.counts[0] for p in paths], dtype=float), np.array([p.seed for p in paths]), len(network.channels)
    )
    times = np.linspace(0.0, system.settings.duration_s, 5)
    samples = new_samples(times, R, len(network.species), len(network.channels))
    recorders = recorders_for(state, requirements=requirements)
    engine = ExactEngine(network.arrays, len(network.species), None if method == "either" else method, lanes=8)
    look_at_all(requirements, np.arange(R), state.counts.T, 0.0, True)
    while (state.reason == RUNNING).any():
        engine.advance(network.rates(np.full(R, paths[0].omega)), state, samples, budget, recorders)
    conclude_all(requirements, state.clock)
    return compiled.outcomes(requirements, samples.counts, times, np.full(R, paths[0].omega))


def of_states(system: System, states: list[list[int]], moments: list[float], end: float) -> Outcomes:
    """What is said of one compartment that is in these states from these moments on."""
    compiled, requirements = recorded(system, system.compartment.omega, 1)
    for state, moment in zip(states, moments, strict=True):
        look_at_all(requirements, np.arange(1), np.array([[float(n)] for n in state]), moment, moment == 0.0)
    conclude_all(requirements, np.array([end]))
    return compiled.outcomes(
        requirements, np.zeros((1, 1, len(states[0])), dtype=np.int64), np.array([0.0]), np.ones(1)
    )


def difference(system: System, comparison: Comparison, path: Path) -> NDArray[np.float64]:
    node = Operation("-", comparison.left, comparison.right, comparison.left.dimension)
    return extended(system, node, path.counts, np.array(path.omega))


def holds(value: float, operator: str) -> bool | None:
    """None where undefined."""
    if math.isnan(value):
        return None
    return bool({"<": value < 0, "<=": value <= 0, ">": value > 0, ">=": value >= 0}[operator])


def truth(root: Truth, values: dict[int, float]) -> bool | None:
    """Three-valued logic; values : id of comparison -> left - right."""
    if isinstance(root, Comparison):
        return holds(values[id(root)], root.operator)
    if isinstance(root, Negation):
        inner = truth(root.inner, values)
        return None if inner is None else not inner
    left, right = truth(root.left, values), truth(root.right, values)
    if root.operator == "and":
        return False if left is False or right is False else None if left is None or right is None else True
    return True if left or right else None if left is None or right is None else False


def leaves(root: Truth) -> list[Comparison]:
    if isinstance(root, Comparison):
        return [root]
    return leaves(root.inner) if isinstance(root, Negation) else leaves(root.left) + leaves(root.right)


def plain(system: System, path: Path) -> list[tuple[bool, float, float, float]]:
    """(met, first failure, first met, time met) of each requirement, by brute force over every state."""
    out = []
    duration = system.settings.duration_s
    for requirement in system.requirements:
        start, end = requirement.span_s(duration)
        root = requirement.must.root
        series = {id(c): difference(system, c, path) for c in leaves(root)}
        stretches: list[tuple[float, float, bool]] = []
        bounds = [*path.moments, duration]
        if requirement.averaged:
            window = requirement.averaged_over_s or end - start
            edges = [start + k * window for k in range(int((end - start) / window * (1 + 1e-12)))] + [end]
            for a, b in itertools.pairwise(edges):
                means = {}
                for key, values in series.items():
                    parts = [
                        (v, min(t1, b) - max(t0, a))
                        for v, t0, t1 in zip(values, bounds, bounds[1:], strict=False)
                        if min(t1, b) > max(t0, a)
                    ]
                    means[key] = sum(v * dt for v, dt in parts) / (b - a)
                stretches.append((a, b, truth(root, means) is True))
            firsts = [(b, v) for _, b, v in stretches]
        else:
            for k, (a, b) in enumerate(itertools.pairwise(bounds)):
                low, high = max(a, start), min(b, end)
                if low < high:
                    stretches.append((low, high, truth(root, {key: v[k] for key, v in series.items()}) is True))
            firsts = [(a, v) for a, _, v in stretches]
        flags = [v for *_, v in stretches]
        if requirement.when == "at end" and not requirement.averaged:
            last = bisect.bisect_right(path.moments, end) - 1
            flags.append(truth(root, {key: v[last] for key, v in series.items()}) is True)
        met = {"throughout": all(flags), "once": any(flags)}.get(requirement.when, flags[-1])
        out.append(
            (
                met,
                next((t for t, v in firsts if not v), math.nan),
                next((t for t, v in firsts if v), math.nan),
                sum(b - a for a, b, v in stretches if v),
            )
        )
    return out


def with_requirements(text: str, conditions: list[str], **keys: str) -> System:
    extra = "".join(f"{key} = {value}\n" for key, value in keys.items())
    tables = "".join(f"\n[requirements.r{k}]\nmust = {json_text(c)}\n{extra}" for k, c in enumerate(conditions))
    return driblet.loads(text + tables)


def json_text(text: str) -> str:
    return '"' + text.replace('"', '\\"') + '"'


CONDITIONS = [
    "ATP > 4",
    "not ATP > 4",
    "ATP + 2 * ADP >= 11 or SP < 2",
    "ATP > 3 and S > 1",
    "not (ATP > 3 and S > 1)",
    "charged >= 0.3",
    "charged < 0.5 or ATP <= 2",
    "SP / S > 1",
    "SP / S <= 1",
    "not SP / S > 1",
    "S / SP >= SP / S",
    "ATP_per_ADP > 2",
    "ATP / (ADP - AMP) > 1",
    "not ATP / (ADP - AMP) > 1",
    "energy_charge > 0.7",
    "conc(ATP) > 0.4 mM",
    "conc(ATP) >= conc(ADP)",
    "phosphorylation_potential > 300 /M",
    "gibbs(relay) < 0 kJ/mol",
    "gibbs(relay) >= 0 kJ/mol",
    "not gibbs(relay) >= 0 kJ/mol",
    "gibbs(leak) < -10 kJ/mol",
    "gibbs(leak) < -4 kT",
    "gibbs(leak) + gibbs(relay) < -12 kJ/mol",
    "gibbs(leak) < gibbs(relay)",
    "0.5 * gibbs(leak) - gibbs(relay) / 2 < -3 kJ/mol",
    "gibbs(kinase) / 1 kJ/mol < -1",
    "gibbs(turn) < gibbs(odd)",
    "gibbs(turn) < 2 kJ/mol",
    "gibbs(turn) > 2 kJ/mol",
    "-gibbs(turn) < -2 kJ/mol",
    "gibbs(odd) < 0 kJ/mol",
    "gibbs(odd) > 0 kJ/mol",
    "not gibbs(odd) <= 0 kJ/mol",
    "(ATP * S) / (ADP * SP) < 3",
    "Pi * ATP > 1e5",
]
SPANS = [{}, {"during": '["0.7 s", "4 s"]'}]


@pytest.mark.parametrize("keys", SPANS)
@pytest.mark.parametrize("when", ["throughout", "once", "at end"])
@pytest.mark.parametrize("seed", [1, 2])
def test_judging_every_event_equals_evaluating_every_state(when: str, keys: dict[str, str], seed: int) -> None:
    system = with_requirements(RELAY, CONDITIONS, when=f'"{when}"', **keys)
    path = path_of(system, seed)
    assert len(path.moments) > 100
    for method in ("scalar", "lanes"):
        compare(judged(system, path, method=method), plain(system, path))


AVERAGED = [c for c in CONDITIONS if "not" not in c and "SP / S" not in c] + ["SP / (S + 1) > 0.6"]


@pytest.mark.parametrize(
    "keys",
    [
        {"when": '"on average"'},
        {"when": '"on average"', "during": '["0.7 s", "4 s"]'},
        {"when": '"throughout"', "averaged_over": '"0.4 s"'},
        {"when": '"once"', "averaged_over": '"0.7 s"', "during": '["0.5 s", "5.3 s"]'},
        {"when": '"at end"', "averaged_over": '"1 s"'},
        {"when": '"throughout"', "averaged_over": '"6 s"'},
    ],
)
def test_averages_over_windows_equal_those_over_every_state(keys: dict[str, str]) -> None:
    system = with_requirements(RELAY, AVERAGED, **keys)
    path = path_of(system, 3)
    for method in ("scalar", "lanes"):
        compare(judged(system, path, method=method), plain(system, path))


def compare(got: Outcomes, expected: list[tuple[bool, float, float, float]]) -> None:
    for q, (met, failure, first, time_met) in enumerate(expected):
        assert got.met[0, q] == met, q
        np.testing.assert_allclose(got.first_failure_s[0, q], failure, rtol=1e-12, err_msg=str(q))
        np.testing.assert_allclose(got.first_met_s[0, q], first, rtol=1e-12, err_msg=str(q))
        np.testing.assert_allclose(got.time_met_s[0, q], time_met, rtol=1e-9, atol=1e-12, err_msg=str(q))


quantities = st.sampled_from(
    ["ATP", "ADP", "S", "SP", "charged", "ATP_per_ADP", "energy_charge", "total(S) - 1", "2 * E"]
)
numbers = st.sampled_from(["0", "0.3", "0.5", "1", "2", "3.5", "7"])
conditions = st.recursive(
    st.tuples(quantities, st.sampled_from(["<", "<=", ">", ">="]), quantities | numbers).map(" ".join),
    lambda inner: (
        inner.map(lambda c: f"not ({c})")
        | st.tuples(inner, st.sampled_from(["and", "or"]), inner).map(lambda t: f"({t[0]}) {t[1]} ({t[2]})")
    ),
    max_leaves=5,
)


@settings(max_examples=40, deadline=None)
@given(conditions, st.sampled_from(["throughout", "once", "at end"]), st.integers(1, 5))
def test_any_condition_is_judged_as_every_state_says(condition: str, when: str, seed: int) -> None:
    system = with_requirements(RELAY, [condition], when=f'"{when}"', during='["0.5 s", "5 s"]')
    path = path_of(system, seed)
    compare(judged(system, path), plain(system, path))


@settings(max_examples=20, deadline=None)
@given(conditions, st.integers(1, 5))
def test_every_n_and_either_or_hold_together(condition: str, seed: int) -> None:
    """A condition and its negation never hold at once, and both fail only where one of its sides is undefined."""
    system = with_requirements(RELAY, [condition, f"not ({condition})"], when='"throughout"')
    path = path_of(system, seed)
    got = judged(system, path)
    defined = all(np.isfinite(difference(system, c, path)).all() for c in leaves(system.requirements[0].must.root))
    total = got.time_met_s[0].sum()
    assert total <= 6.0 + 1e-9
    if defined:
        assert total == pytest.approx(6.0)


def test_a_decimal_threshold_is_met_by_the_count_that_equals_it() -> None:
    """3 of 10 is 0.3, although 0.3 times 10 is no whole number in binary; and an energy of zero is not below zero."""
    system = driblet.loads(
        changed(SMALL, ('B = "0 copies"', 'B = "3 copies"'), ('A = "10 copies"', 'A = "7 copies"'))
        + '[requirements.a]\nmust = "part >= 0.3"\nwhen = "at end"\n'
        + '[requirements.b]\nmust = "part > 0.3"\nwhen = "at end"\n'
        + '[requirements.c]\nmust = "gibbs(turn) < 0 kJ/mol"\nwhen = "at end"\n'
        + '[requirements.d]\nmust = "gibbs(turn) <= 0 kJ/mol"\nwhen = "at end"\n'
    )
    assert of_states(system, [[7, 3]], [0.0], 2.0).met.tolist()[0][:2] == [1, 0]
    assert of_states(system, [[3, 5]], [0.0], 2.0).met.tolist()[0][2:] == [0, 1]  # K n_A = n_B + 1


@pytest.mark.parametrize("when", ["throughout", "on average", "at end"])
@pytest.mark.parametrize("copies", [0, 3])
def test_a_compartment_without_the_catalyst_keeps_its_drive(when: str, copies: int) -> None:
    """Nothing fires without it, and A is as far from equilibrium as ever."""
    text = changed(
        SMALL,
        ('equation = "A <=> B"', 'equation = "A + C <=> B + C"'),
        ('forward = "1 /s"', 'forward = "1e-9 /M/s"'),
        ('B = "0 copies"', f'B = "0 copies"\nC = "{copies} copies"'),
    )
    requirement = f'[requirements.driven]\nmust = "gibbs(turn) < -4 kJ/mol"\nwhen = "{when}"\n'
    run = driblet.run(driblet.loads(text + requirement))
    assert run.outcomes.met.tolist() == [[1]] * 3
    assert run.requirement_resolution == {"driven": "event"}


def test_a_record_that_ends_early_leaves_undecided_what_it_did_not_see() -> None:
    tables = [
        ("throughout", "A > 0"),
        ("throughout", "A > 9"),
        ("once", "B > 1"),
        ("once", "B > 8"),
        ("at end", "A > 0"),
    ]
    text = SMALL + "".join(
        f'[requirements.r{k}]\nmust = "{must}"\nwhen = "{when}"\nduring = ["0.5 s", "2 s"]\n'
        for k, (when, must) in enumerate(tables)
    )
    system = driblet.loads(text)
    got = of_states(system, [[10, 0], [9, 1], [8, 2], [7, 3]], [0.0, 0.2, 0.6, 0.8], 1.0)
    assert got.met[0].tolist() == [-1, 0, 1, -1, -1]
    assert got.first_failure_s[0, 1] == 0.5  # false since 0.2 s, judged from 0.5 s on
    assert got.judged_until_s[0].tolist() == [1.0] * 5


@pytest.mark.parametrize(
    ("condition", "averaged", "why"),
    [
        ("gibbs(leak) / gibbs(relay) > 0.5", False, "divided by an energy"),
        ("ATP * gibbs(leak) < -10 kJ/mol", False, "multiplied by something that changes"),
        ("ATP * ATP * ATP * ATP * ATP * ATP * ATP > 1000", False, "more than 6 counts"),
        ("gibbs(leak) / 100 - gibbs(relay) * 3 < 0 kJ/mol", False, "too large to multiply out"),
    ],
)
def test_what_is_no_polynomial_says_why_and_is_judged_on_the_grid(condition: str, averaged: bool, why: str) -> None:
    when = '"on average"' if averaged else '"throughout"'
    system = with_requirements(RELAY, [condition], when=when)
    with pytest.raises(NotInFormError, match=why):
        form_of(system, system.requirements[0].must.root, averaged)
    compiled = CompiledRequirements.of(system, Network.of(system), 6.0)
    assert compiled.resolutions() == ("grid",)
    assert why in compiled.by_grid[0]


@pytest.mark.parametrize("keys", [*SPANS, {"averaged_over": '"0.8 s"'}])
@pytest.mark.parametrize("when", ["throughout", "once", "at end"])
def test_on_a_grid_the_sampled_states_count_alone(when: str, keys: dict[str, str]) -> None:
    """The grid sees what a trajectory would be that changed at the sampling times only."""
    conditions = AVERAGED if "averaged_over" in keys else CONDITIONS
    system = with_requirements(RELAY, conditions, when=f'"{when}"', **keys)
    path = path_of(system, 4)
    grid = np.arange(0.0, 6.01, 0.25)
    index = np.searchsorted(path.moments, grid, side="right") - 1
    sampled = Path(list(grid), path.counts[index], path.omega)
    expected = plain(system, sampled)
    for q, requirement in enumerate(system.requirements):
        got = judge_on_grid(system, requirement, sampled.counts[None], grid, np.array([path.omega]))
        compare(got, expected[q : q + 1])


def test_many_conditions_compile() -> None:
    """How long it takes is told by tests/benchmarks/requirements.py."""
    system = with_requirements(RELAY, CONDITIONS * 4, when='"throughout"')
    assert len(CompiledRequirements.of(system, Network.of(system), 6.0).forms) == 4 * len(CONDITIONS)


def test_standard_readouts_follow_their_definitions() -> None:
    """Atkinson (1968): 1 when all is ATP, 0.5 when all is ADP or half ATP and half AMP, 0 when all is AMP."""
    system = driblet.loads(RELAY)
    names = Names([s.name for s in system.species])
    omega = np.array(1e7)

    def value(text: str, **counts: int) -> float:
        state = np.array([counts.get(s.name, 0) for s in system.free_species])
        return float(extended(system, read_value(text, names).root, state, omega))

    assert value("energy_charge", ATP=5) == 1.0
    assert value("energy_charge", ADP=5) == 0.5
    assert value("energy_charge", ATP=4, AMP=4) == 0.5
    assert value("energy_charge", AMP=3) == 0.0
    assert value("energy_charge", ATP=6, ADP=2, AMP=2) == 0.7
    assert value("ATP_per_ADP", ATP=6, ADP=4) == 1.5
    assert value("phosphorylation_potential", ATP=6, ADP=3) == pytest.approx(2 / 5e-3)
    assert read_value("phosphorylation_potential", names).unit == "M^-1"
    with pytest.raises(ExpressionError, match="needs the species AMP"):
        read_value("energy_charge", Names(["ATP", "ADP"]))
    mine = Names(["ATP", "ADP", "AMP"], readouts={"energy_charge": read_value("ATP / 2", Names(["ATP"]))})
    assert value_of(mine, "energy_charge > 3") == "ATP / 2"


def value_of(names: Names, text: str) -> str:
    """The text that the left side's readout stands for."""
    comparison = read_condition(text, names).root
    assert isinstance(comparison, Comparison)
    assert isinstance(comparison.left, Named)
    return next(e.text for e in names.readouts.values() if e.root == comparison.left.node)


MANY = [("throughout", c, "") for c in CONDITIONS[::3]]
MANY += [("throughout", c, 'averaged_over = "0.3 s"') for c in AVERAGED[::4]]
MANY += [("once", c, "") for c in CONDITIONS[1::7]] + [("at end", c, 'averaged_over = "1 s"') for c in AVERAGED[::9]]


def many(during: str = "") -> System:
    tables = "".join(
        f'\n[requirements.r{k}]\nmust = {json_text(c)}\nwhen = "{when}"\n{extra}\n{during}\n'
        for k, (when, c, extra) in enumerate(MANY)
    )
    return driblet.loads(RELAY + tables)


@pytest.fixture(scope="module")
def together() -> tuple[System, list[Path], Outcomes]:
    system = many()
    paths = [path_of(system, seed) for seed in range(11, 31)]
    return system, paths, judged_together(system, paths)


@pytest.mark.parametrize(
    ("method", "budget"),
    [("scalar", 1), ("scalar", 13), ("lanes", 1), ("lanes", 40), ("lanes", 1 << 20), ("either", 300)],
)
def test_chunks_and_lanes_never_change_an_outcome(
    together: tuple[System, list[Path], Outcomes], method: str, budget: int
) -> None:
    system, paths, expected = together
    got = judged_together(system, paths, method=method, budget=budget)
    for name in Outcomes.__dataclass_fields__:
        np.testing.assert_array_equal(getattr(got, name), getattr(expected, name), err_msg=name)


def test_neighbours_never_change_an_outcome(together: tuple[System, list[Path], Outcomes]) -> None:
    system, paths, expected = together
    for r in (0, 7, 19):
        got = judged_together(system, paths[r : r + 1], method="lanes")
        np.testing.assert_array_equal(got.first_failure_s[0], expected.first_failure_s[r])
        np.testing.assert_array_equal(got.time_met_s[0], expected.time_met_s[r])


STOPS = """
[requirements.full]
must = "ATP > 4"
when = "throughout"
during = ["1 s", "5 s"]

[requirements.seen]
must = "SP >= 5"
when = "once"

[requirements.even]
must = "charged < 0.75"
when = "throughout"
averaged_over = "0.5 s"
"""


@pytest.mark.parametrize("method", ["scalar", "lanes"])
def test_stopping_when_all_is_decided_changes_no_outcome(method: str) -> None:
    system = driblet.loads(RELAY + STOPS)
    paths = [path_of(system, seed) for seed in range(40, 80)]
    whole = judged_together(system, paths, method=method)
    early = judged_together(system, paths, method=method, stop=True)
    np.testing.assert_array_equal(early.met, whole.met)
    np.testing.assert_array_equal(early.first_failure_s, whole.first_failure_s)
    stopped = early.judged_until_s.max(axis=1) < 6.0
    assert stopped.sum() > 5
    decided = np.where(whole.met == 0, whole.first_failure_s, np.inf)
    for r in np.flatnonzero(stopped):
        last = np.nanmax(
            np.where(whole.met[r] == [0, 1, 0], [decided[r, 0], whole.first_met_s[r, 1], decided[r, 2]], 5.0)
        )
        assert early.judged_until_s[r].max() >= min(last, 5.0)
    again = judged_together(system, paths, method=method, stop=True, budget=3)
    np.testing.assert_array_equal(again.judged_until_s, early.judged_until_s)
    other = judged_together(system, paths, method="lanes" if method == "scalar" else "scalar", stop=True)
    np.testing.assert_array_equal(other.judged_until_s, early.judged_until_s)


ADDED = """
[additions.more]
at = "1 s"
species = "A"
amount = "8 copies"

[additions.again]
at = "1.5 s"
species = "A"
amount = "3 copies"

[requirements.few]
must = "A <= 10"
when = "throughout"

[requirements.many]
must = "A > 17"
when = "once"

[requirements.mean]
must = "A < 13"
when = "on average"

[requirements.steps]
must = "A + B < 18.5"
when = "throughout"
averaged_over = "0.4 s"
"""


@pytest.mark.parametrize("method", ["lanes", "scalar"])
def test_what_is_added_in_mid_run_is_judged_when_it_comes(method: str) -> None:
    """Ten copies that hardly react, 8 more at 1 s, 3 more at 1.5 s: the mean over 2 s is 10 + 8/2 + 3/4 = 14.75, and the
    stretch from 1.2 to 1.6 s, which the second addition falls into, averages 18 + 3/4."""
    system = driblet.loads(changed(SMALL, ('forward = "1 /s"', 'forward = "1e-9 /s"')) + ADDED)
    got = driblet.run(system, replicates=20, method=method).outcomes
    np.testing.assert_array_equal(got.met, np.tile([0, 1, 0, 0], (20, 1)))
    np.testing.assert_allclose(got.first_failure_s[:, 0], 1.0)
    np.testing.assert_allclose(got.time_met_s[:, 0], 1.0)
    np.testing.assert_allclose(got.first_met_s[:, 1], 1.0)
    np.testing.assert_allclose(got.first_failure_s[:, 3], 1.6)
    np.testing.assert_allclose(got.time_met_s[:, 3], 1.2)
    looser = driblet.loads(
        changed(SMALL, ('forward = "1 /s"', 'forward = "1e-9 /s"')) + changed(ADDED, ("A < 13", "A < 14.8"))
    )
    assert driblet.run(looser, replicates=3, method=method).outcomes.met[0, 2] == 1
    early = driblet.run(system, replicates=3, method=method, stop_when_decided=True)
    assert early.outcomes.met[0].tolist() == [0, 1, 0, 0]


def test_a_run_file_holds_the_outcomes_of_a_run_in_memory(tmp_path: Any) -> None:
    """Blocks go to shards and are merged; every compartment keeps its own outcomes."""
    system = driblet.loads(RELAY + STOPS)
    whole = driblet.run(system, replicates=130, seed=5)
    with driblet.run(system, tmp_path / "run.h5", replicates=130, seed=5, threads=1) as kept:
        for name in Outcomes.__dataclass_fields__:
            np.testing.assert_array_equal(getattr(kept.outcomes, name), getattr(whole.outcomes, name))
        assert kept.requirement_resolution == dict.fromkeys(("full", "seen", "even"), "event")
