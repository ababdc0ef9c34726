"""Requirements judged event by event against a plain evaluation of every state a trajectory passes through."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

import driblet
from driblet.condition_forms import NotInFormError, form_of
from driblet.engines.judging import close_judgement, judge_firing, open_judgement
from driblet.network import Network
from driblet.readouts import extended
from driblet.requirements import CompiledRequirements, Outcomes, judge_on_grid
from driblet.system import System
from driblet.system.expressions import Comparison, Junction, Negation, Operation, Truth
from tests.reference import Step, simulate
from tests.texts import MIXED, SMALL

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
    """Every state of one compartment: moments at which each begins, counts, channels that led there."""

    moments: list[float]
    counts: NDArray[np.int64]
    channels: list[int]
    omega: float


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
    return Path([0.0, *(t for t, _ in events)], np.array(states), [c for _, c in events], omega)


def judged(system: System, path: Path) -> Outcomes:
    network = Network.of(system)
    compiled = CompiledRequirements.of(system, network, system.settings.duration_s)
    assert not compiled.by_grid, compiled.by_grid
    omega = np.array([path.omega])
    recorder = compiled.recorder(omega)
    padded = np.append(path.counts.astype(float), np.ones((len(path.counts), 1)), axis=1)
    open_judgement(recorder, 0, padded[0])
    for k, channel in enumerate(path.channels, start=1):
        judge_firing(recorder, 0, np.uint64(channel), padded[k], path.moments[k])
    close_judgement(recorder, 0, system.settings.duration_s)
    return compiled.outcomes(recorder, path.counts[None], np.array([0.0]), omega)


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
    compare(judged(system, path), plain(system, path))


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
    compare(judged(system, path), plain(system, path))


def compare(got: Outcomes, expected: list[tuple[bool, float, float, float]]) -> None:
    for q, (met, failure, first, time_met) in enumerate(expected):
        assert got.met[0, q] == met, q
        np.testing.assert_allclose(got.first_failure_s[0, q], failure, rtol=1e-12, err_msg=str(q))
        np.testing.assert_allclose(got.first_met_s[0, q], first, rtol=1e-12, err_msg=str(q))
        np.testing.assert_allclose(got.time_met_s[0, q], time_met, rtol=1e-9, atol=1e-12, err_msg=str(q))
