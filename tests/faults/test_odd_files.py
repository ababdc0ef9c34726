"""Nothing but InputError comes out of a bad system file: good files spoilt at random, in their text and in their values.

What is still accepted must be fit to run: finite rates, loads in range, readouts that evaluate.
"""

from __future__ import annotations

import datetime
import math
import random
import tomllib
from typing import Any

import numpy as np
import pytest

import driblet
from driblet.loading import prepare
from driblet.readouts import evaluate
from driblet.system.build import build
from tests.texts import MIXED, SMALL, ready_systems

GOOD = {"small": SMALL, "mixed": MIXED, **{p.stem: p.read_text(encoding="utf-8") for p in ready_systems()}}

DATE = datetime.date(2026, 12, 1)
ODD: list[Any] = [
    None, True, False, 0, -1, 1, 3, 2**63, -(10**400), 10**400, 0.0, -0.0, 0.5, 1e308, 5e-324, math.nan, math.inf, -math.inf,
    "", " ", "x", "0", "4", "-4", "4 mM", "-4 mM", "−4 mM", "1,5 mM", "10 000 uM", "4mM", "0 mM", "0 s", "-1 s", "1e400 s",
    "1e-400 s", "1e308 km", "1e-322 zM", "1e308 M", "1e300 copies", "0.5 copies", "1e-300 K", "1e308 K", "-300 degC", "0 K",
    "1e300 /s", "1e-300 /s", "1e300 /M/s", "1e300 /M", "1e-300 /M", "1e300 kJ/mol", "-1e300 kJ/mol", "1711 kJ/mol",
    "1e300 kT", "1e-30 L", "1e30 L", "1e-20 nm", "1e20 m", "nan mM", "4 M^9^9^9^9", "4 ((((M", "4 kkM", "\x00", "\n", "é", "☃",
    "A", "B", "A <=> B", "A <=> A", "A -> B", "9999999999999 A <=> B", "100 A <=> 100 B", "4 A <=> B", "A + A + A + A <=> B",
    "nothing", "nothing <=> nothing", "H2O <=> H2O", "total(A)", "gibbs(turn)", "conc(A)", "((((", "A / 0", "-" * 200 + "A",
    "formation", "hydrolysis", "reference", "poisson", "nearest", "exact", "leap", "auto", "throughout", "x" * 5000,
    [], [1, 2], ["4 mM"], [[]], [{}], {}, {"amount": "4 mM"}, {"median": "1 fL"}, {"value": "4 kJ/mol"}, {"value": {}},
    {"amount": {"amount": {}}}, {"": ""}, {"\n": 1}, {"é": "4 mM"}, {"held": True}, DATE, datetime.time(12, 30),
    datetime.datetime(2026, 12, 1, 12, 30, tzinfo=datetime.UTC), datetime.datetime(1, 1, 1),
]  # fmt: skip
KEYS = [
    "A", "B", "H2O", "nothing", "total", "amount", "held", "label", "loading", "energy", "K", "Kd", "forward", "backward",
    "one_way", "equation", "value", "sd", "median", "cv", "wall", "volume", "diameter", "temperature", "pH", "pMg",
    "ionic_strength", "formation", "hydrolysis", "engine", "replicates", "duration", "sample_every", "seed", "title", "run",
    "reactions", "readouts", "energies", "species", "compartments", "conditions", "", " ", "a b", "a.b", "é", "x\ny", "1A",
    "reactants", "requirements", "enzymes", "catalyses", "mechanism", "binds", "releases", "kcat", "KM", "Ki", "inhibitors",
    "also", "steps", "activity", "molar_mass", "half_life", "active_fraction", "additions", "at", "species", "values",
    "total_magnesium", "pH_scale", "buffer", "must", "when", "during", "share",
]  # fmt: skip


def check(attempt: Any) -> None:
    """Run `attempt`; only InputError may come out, in single lines that name the file; a System must be fit to run."""
    try:
        system = attempt()
    except driblet.InputError as error:
        lines = error.lines()
        assert lines
        assert len(set(lines)) == len(lines), "a problem is told once"
        for line in lines:
            assert line.startswith("odd.toml: ")
            assert line.isprintable()
            assert len(line) < 1000
        return
    network = driblet.Network.of(system)
    start = prepare(system, 0, range(3))
    rates = network.rates(start.omega)
    assert np.isfinite(rates).all()
    assert (rates >= 0).all()
    assert np.isfinite(start.counts).all()
    assert (start.counts >= 0).all()
    assert (start.counts == np.rint(start.counts)).all()
    assert np.isfinite(network.propensities(start.counts, rates)).all()
    for one in system.readouts:
        if hasattr(one, "expression"):
            evaluate(system, one.expression, start.counts.astype(np.int64), start.omega)
    assert repr(system)
    assert system._repr_html_()
    for reaction in system.reactions:
        for value in (reaction.dG0_kJ_per_mol, reaction.K, reaction.forward, reaction.backward):
            assert value is None or math.isfinite(value)


def places(value: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    found = [path] if path else []
    if isinstance(value, dict):
        for key in value:
            found += places(value[key], (*path, key))
    return found


def spoil(raw: dict[str, Any], rng: random.Random) -> dict[str, Any]:
    """A deep copy of `raw` with one to three values replaced, removed, renamed, added or moved."""
    import copy

    raw = copy.deepcopy(raw)
    for _ in range(rng.choice([1, 1, 1, 2, 3])):
        everywhere = places(raw)
        if not everywhere:
            break
        path = rng.choice(everywhere)
        parent = raw
        for key in path[:-1]:
            parent = parent[key]
        act = rng.randrange(5)
        if act <= 1:
            parent[path[-1]] = copy.deepcopy(rng.choice(ODD))
        elif act == 2:
            parent[rng.choice(KEYS)] = copy.deepcopy(rng.choice(ODD))
        elif act == 3:
            parent[rng.choice(KEYS)] = parent.pop(path[-1])
        else:
            del parent[path[-1]]
    return raw


def spoil_text(text: str, rng: random.Random) -> str:
    for _ in range(rng.choice([1, 1, 2, 4])):
        at = rng.randrange(len(text) + 1)
        act = rng.randrange(6)
        if act == 0:
            text = text[:at] + text[at + rng.choice([1, 1, 2, 10]) :]
        elif act == 1:
            text = text[:at] + rng.choice("\"'[]{}=.,#\\\n\r\t\0 0123456789eE+-−*/<>()_^µé☃AB\ufeff\x7f") + text[at:]
        elif act == 2:
            lines = text.split("\n")
            i, j = rng.randrange(len(lines)), rng.randrange(len(lines))
            lines[i], lines[j] = lines[j], lines[i]
            text = "\n".join(lines)
        elif act == 3:
            lines = text.split("\n")
            lines.insert(rng.randrange(len(lines)), rng.choice(lines))
            text = "\n".join(lines)
        elif act == 4:
            text = text[:at]
        else:
            odd = rng.choice([o for o in ODD if isinstance(o, str)])
            text = text[:at] + odd + text[at:]
        if not text:
            break
    return text


@pytest.mark.parametrize("name", GOOD)
def test_spoilt_values(name: str) -> None:
    rng = random.Random(f"values of {name}")
    raw = tomllib.loads(GOOD[name])
    check(lambda: build(raw, GOOD[name], "odd.toml"))
    for _ in range(400):
        spoilt = spoil(raw, rng)
        check(lambda spoilt=spoilt: build(spoilt, GOOD[name], "odd.toml"))


@pytest.mark.parametrize("name", GOOD)
def test_spoilt_texts(name: str) -> None:
    rng = random.Random(f"text of {name}")
    for _ in range(300):
        text = spoil_text(GOOD[name], rng)
        check(lambda text=text: driblet.loads(text, "odd.toml"))


@pytest.mark.parametrize("place", places(tomllib.loads(MIXED)), ids=lambda p: ".".join(p))
def test_every_value_replaced_by_every_odd_one(place: tuple[str, ...]) -> None:
    for odd in ODD:
        raw = tomllib.loads(MIXED)
        parent = raw
        for key in place[:-1]:
            parent = parent[key]
        parent[place[-1]] = odd
        check(lambda raw=raw: build(raw, MIXED, "odd.toml"))


@pytest.mark.long
@pytest.mark.parametrize("name", GOOD)
def test_spoilt_at_length(name: str) -> None:
    rng = random.Random(f"length of {name}")
    raw = tomllib.loads(GOOD[name])
    for _ in range(5000):
        spoilt, text = spoil(raw, rng), spoil_text(GOOD[name], rng)
        check(lambda spoilt=spoilt: build(spoilt, GOOD[name], "odd.toml"))
        check(lambda text=text: driblet.loads(text, "odd.toml"))


def test_texts_that_break_parsers() -> None:
    for text in (
        "a = " + "1" * 5000,
        "a = " + "[" * 20_000,
        "a = " + "[" * 400 + "]" * 400,
        "[" + ".".join("a" * 1500) + "]",
        "a" * 100_000,
        "a = 2026-02-30",
        "a = 1e999999999999",
        "\ufeff" + SMALL,
        SMALL.replace("\n", "\r"),
        "\0",
        "[[species]]\nA = '4 mM'",
        "species.A = '4 mM'\n[species]\nB = '4 mM'",
        '"" = 1\n',
        "[species]\n" + "".join(f'S{i} = "1 copies"\n' for i in range(3000)),
    ):
        check(lambda text=text: driblet.loads(text, "odd.toml"))
