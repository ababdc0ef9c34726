"""Every fault that [enzymes], [additions], [values] and measured sizes can have: where, what is wrong, what would be right."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

import driblet
from driblet.errors import EXIT_BAD_INPUT
from tests.texts import changed

TEXT = """
[values]
loaded = "2 mM"
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "0.1 fL"
[species]
ATP = "loaded"
ADP = "0 copies"
sugar = "1 mM"
sugarP = "0 copies"
Pi = { amount = "5 mM", held = true }
drug = "1 uM"
[reactions.relay]
equation = "ATP + sugar <=> ADP + sugarP"
energy = "-16.7 kJ/mol"
[reactions.leak]
equation = "ATP + H2O <=> ADP + Pi"
energy = "-30.5 kJ/mol"
forward = "1e-5 /s"
[reactions.loss]
equation = "sugarP -> nothing"
forward = "1e-4 /s"
one_way = "leaks out"
[enzymes.kinase]
amount = "80 nM"
catalyses = "relay"
mechanism = "ordered bi bi"
binds = ["ATP", "sugar"]
releases = ["sugarP", "ADP"]
kcat = "120 /s"
KM = { ATP = "0.2 mM", sugar = "0.1 mM" }
inhibitors = { drug = "5 uM" }
[enzymes.kinase.also.leak]
mechanism = "ordered uni bi"
releases = ["Pi", "ADP"]
kcat = "0.01 /s"
[additions.pulse]
at = "1 s"
species = "ATP"
amount = "1 mM"
[run]
duration = "2 s"
"""
AMOUNT, CATALYSES, MECHANISM = 'amount = "80 nM"', 'catalyses = "relay"', 'mechanism = "ordered bi bi"'
BINDS, RELEASES, KCAT = 'binds = ["ATP", "sugar"]', 'releases = ["sugarP", "ADP"]', 'kcat = "120 /s"'
KM, INHIBITORS, ALSO = 'KM = { ATP = "0.2 mM", sugar = "0.1 mM" }', 'inhibitors = { drug = "5 uM" }', "also.leak]"
SIDE, AT, SPECIES, ADDED = 'kcat = "0.01 /s"', 'at = "1 s"', 'species = "ATP"', 'amount = "1 mM"\n[run]'
VOLUME, LOADED = 'volume = "0.1 fL"', 'loaded = "2 mM"'
KINASE = "enzymes.kinase"

ONE_FAULT: list[tuple[str, str, str, str]] = [
    # what the issue names
    (
        MECHANISM,
        'mechanism = "ordered bi"',
        f"{KINASE}.mechanism",
        'for relay: "ordered bi bi", "random bi bi", "ping pong',
    ),
    (MECHANISM, 'mechanism = "uni uni"', f"{KINASE}.mechanism", "takes 2 and gives 2 molecules"),
    (BINDS, 'binds = ["ATP", "suger"]', f"{KINASE}.binds", 'did you mean "sugar"?'),
    (BINDS, 'binds = ["ATP", "drug"]', f"{KINASE}.binds", "is not taken up by relay"),
    (BINDS, 'binds = ["ATP"]', f"{KINASE}.binds", "each molecule taken up by relay once: ATP, sugar"),
    (BINDS, 'binds = ["ATP", "ATP"]', f"{KINASE}.binds", "once: ATP, sugar"),
    (BINDS, 'binds = "ATP"', f"{KINASE}.binds", "a list of species is needed"),
    (RELEASES, 'releases = ["ATP", "ADP"]', f"{KINASE}.releases", "is not given off by relay"),
    (KM, 'KM = { ATP = "0 mM", sugar = "0.1 mM" }', f"{KINASE}.KM.ATP", "must be above zero"),
    (KM, 'KM = { ATP = "0.2 mM" }', f"{KINASE}.KM", "the K_M of sugar is missing"),
    (
        KM,
        'KM = { ATP = "0.2 mM", suger = "0.1 mM" }',
        f"{KINASE}.KM.suger",
        'is no ligand of relay; did you mean "sugar"',
    ),
    (KM, 'KM = { ATP = "0.2 mM", sugar = "0.1 mM", ADP = "1 mM" }', f"{KINASE}.KM.ADP", "as Kd.ADP"),
    (KM, 'KM = { ATP = "0.2 s", sugar = "0.1 mM" }', f"{KINASE}.KM.ATP", "a concentration is needed here"),
    (KM, "KM = { ATP = 0.2, sugar = 0.1 }", f"{KINASE}.KM.ATP", "has no unit"),
    (KM, 'KM = "0.2 mM"', f"{KINASE}.KM", "a table of keys is needed"),
    (KM, KM + '\nKd = { drug = "1 mM" }', f"{KINASE}.Kd.drug", "is no ligand of relay"),
    (KM, 'KM = { ATP = "10 nM", sugar = "0.1 mM" }', f"{KINASE}.KM.ATP", "faster than molecules meet"),
    (KM, KM + '\nKd = { sugar = "300 mM" }', f"{KINASE}.Kd.sugar", "must be below 0.0001 M"),
    (KCAT, 'kcat = "-120 /s"', f"{KINASE}.kcat", "must be above zero"),
    (KCAT, 'kcat = "120 /M/s"', f"{KINASE}.kcat", "wrong unit: /s is needed"),
    (KCAT, "", f"{KINASE}.kcat", "one of kcat, activity and steps is needed"),
    (KCAT, KCAT + '\nactivity = "5 U/mg"', f"{KINASE}.activity", "not kcat and activity"),
    (KCAT, 'kcat = "2e5 /s"', f"{KINASE}.KM.ATP", "faster than molecules meet"),
    ('energy = "-16.7 kJ/mol"', 'energy = "32 kJ/mol"', f"{KINASE}.kcat", "more than this energy allows with on-rates"),
    (AMOUNT, 'amount = "0.3 copies"', f"{KINASE}.amount", 'fractional: only loading = "poisson"'),
    (
        AMOUNT,
        'amount = "3 copies"\nactive_fraction = 0.5',
        f"{KINASE}.amount",
        "of which this fraction is active is fractional",
    ),
    (AMOUNT, 'amount = "-1 copies"', f"{KINASE}.amount", "an amount cannot be"),
    (AMOUNT, 'amount = "5 U/mg"', f"{KINASE}.amount", "is no amount of enzyme"),
    (AMOUNT, 'amount = "20 ug/mL"', f"{KINASE}.molar_mass", "is a mass, and molecules are counted"),
    (AMOUNT, 'amount = "1e16 copies"', f"{KINASE}.amount", "more than 2^53 copies"),
    (AMOUNT, AMOUNT + '\nmolar_mass = "82 kJ/mol"', f"{KINASE}.molar_mass", "a molar mass is needed here"),
    (AMOUNT, AMOUNT + "\nactive_fraction = 1.5", f"{KINASE}.active_fraction", "lies between"),
    (AMOUNT, AMOUNT + '\nhalf_life = "0 s"', f"{KINASE}.half_life", "is zero"),
    (AMOUNT, AMOUNT + "\ncopies = 3", f"{KINASE}.copies", '"copies" is not a key here'),
    (AMOUNT, AMOUNT + "\ninteraction = 2", f"{KINASE}.interaction", "its substrates bind in one order"),
    (CATALYSES, "", f"{KINASE}.catalyses", "an enzyme that catalyses nothing does nothing"),
    (CATALYSES, 'catalyses = "rely"', f"{KINASE}.catalyses", 'did you mean "relay"?'),
    (CATALYSES, 'catalyses = "loss"', f"{KINASE}.catalyses", "needs the energy of its reaction"),
    (CATALYSES, 'catalyses = "leak"', f"{KINASE}.also.leak", "is catalysed by this enzyme already"),
    (INHIBITORS, 'inhibitors = { drag = "5 uM" }', f"{KINASE}.inhibitors.drag", 'did you mean "drug"?'),
    (INHIBITORS, 'inhibitors = { drug = "0 uM" }', f"{KINASE}.inhibitors.drug.Ki", "must be above zero"),
    (INHIBITORS, 'inhibitors = { ATP = "5 uM" }', f"{KINASE}.inhibitors.ATP", "binds the free enzyme already"),
    (
        INHIBITORS,
        'inhibitors = { drug = { Ki = "5 uM", rate = "1 /s" } }',
        f"{KINASE}.inhibitors.drug.rate",
        "is not a key",
    ),
    (ALSO, "also.laek]", f"{KINASE}.also.laek", 'did you mean "leak"?'),
    (SIDE, SIDE + '\nKM = { ATP = "1 mM" }', f"{KINASE}.also.leak.KM.ATP", "fixed by an earlier reaction"),
    (SIDE, 'kcat = "0 /s"', f"{KINASE}.also.leak.kcat", "must be above zero"),
    (SIDE, SIDE + '\nhalf_life = "1 s"', f"{KINASE}.also.leak.half_life", "is not a key here"),
    ("[enzymes.kinase]", "[enzymes.ATP]", "enzymes.ATP", "is also the name of a species"),
    # additions
    (SPECIES, 'species = "GTP"', "additions.pulse.species", "is not in [species]"),
    (SPECIES, 'species = "Pi"', "additions.pulse.species", "is held"),
    (SPECIES, 'species = "kinase.ATP"', "additions.pulse.species", "is not in [species]"),
    (AT, 'at = "3 s"', "additions.pulse.at", "after the end of the run"),
    (AT, 'at = "2 s"', "additions.pulse.at", "after the end of the run"),
    (AT, 'at = "0 s"', "additions.pulse.at", "is zero"),
    (ADDED, 'amount = "0 mM"\n[run]', "additions.pulse.amount", "nothing would be added"),
    (ADDED, 'amount = "0.5 copies"\n[run]', "additions.pulse.amount", "fractional"),
    (ADDED, 'amount = "1 s"\n[run]', "additions.pulse.amount", "is no amount"),
    # sizes
    (VOLUME, VOLUME + "\ncv = 0.1", "compartments.drop.cv", "stands with the size it spreads"),
    (VOLUME, 'volume = { median = "1 fL", csv = "sizes.csv" }', "compartments.drop.volume", "leave median and cv out"),
    (
        VOLUME,
        'volume = { csv = "none.csv", unit = "fL" }',
        "compartments.drop.volume.csv",
        "cannot be read: no such file",
    ),
    (VOLUME, 'volume = { median = "1 fL", unit = "fL" }', "compartments.drop.volume", "go with csv"),
    # values
    (LOADED, "", "species.ATP", '"loaded" is not a number'),
    (LOADED, 'loaded = "2 MM"', "values.loaded", "is not a unit"),
    (LOADED, LOADED + '\n"a b" = "1 mM"', "values.a b", "is no name for a value"),
]


@pytest.mark.parametrize(("old", "new", "key", "text"), ONE_FAULT, ids=lambda part: part[:40])
def test_one_fault(old: str, new: str, key: str, text: str) -> None:
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(changed(TEXT, (old, new)), "mine.toml")
    assert caught.value.exit_status == EXIT_BAD_INPUT
    lines = [line for line in caught.value.lines() if line.startswith(f"mine.toml: {key}: ") and text in line]
    assert len(lines) == 1, caught.value.lines()


def test_the_text_itself_is_sound() -> None:
    assert driblet.loads(TEXT).enzymes[0].name == "kinase"


def test_all_faults_are_told_at_once() -> None:
    text = changed(
        TEXT, (KCAT, 'kcat = "-1 /s"'), (AT, 'at = "9 s"'), (INHIBITORS, 'inhibitors = { drag = "5 uM" }'), (SIDE, "")
    )
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(text)
    keys = {problem.key for problem in caught.value.problems}
    assert keys == {
        f"{KINASE}.kcat", "additions.pulse.at", f"{KINASE}.inhibitors.drag", f"{KINASE}.also.leak.kcat"
    }  # fmt: skip


ACTIVITY = changed(TEXT, (KCAT, 'activity = "150 U/mg"\ndirection = "forward"\nmolar_mass = "82 kDa"'))


@pytest.mark.parametrize(
    ("line", "key", "text"),
    [
        ('molar_mass = "82 kDa"', "molar_mass", "is missing: an activity"),
        ('direction = "forward"\n', "direction", '"forward" or "backward"'),
    ],
)
def test_an_activity_needs_its_mass_and_direction(line: str, key: str, text: str) -> None:
    driblet.loads(ACTIVITY)
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(changed(ACTIVITY, (line, "")), "mine.toml")
    (line,) = caught.value.lines()
    assert line.startswith(f"mine.toml: {KINASE}.{key}: ")
    assert text in line


STEPS = """
[enzymes.kinase.steps]
binds_ATP = { forward = "1e6 /M/s", backward = "200 /s" }
binds_sugar_with_ATP = { forward = "2e6 /M/s", backward = "200 /s" }
relay = { forward = "300 /s", backward = "100 /s" }
releases_sugarP_with_ADP = { forward = "2000 /s", backward = "1e6 /M/s" }
releases_ADP = { forward = "500 /s" }
"""


def with_steps(*pairs: tuple[str, str]) -> str:
    text = changed(TEXT, (KCAT, ""), (KM, ""), ("[enzymes.kinase.also.leak]", STEPS + "[enzymes.kinase.also.leak]"))
    return changed(text, *pairs)


def test_a_product_binding_constant_off_by_half_a_kilojoule_is_refused() -> None:
    """With all constants given the cycle must close; the message tells the discrepancy."""
    system = driblet.loads(with_steps())
    step = next(s for s in system.enzymes[0].steps if s.name == "kinase.releases_ADP")
    RT = system.conditions.RT_kJ_per_mol
    right = f'releases_ADP = {{ forward = "500 /s", backward = "{step.backward!r} /M/s" }}'
    driblet.loads(with_steps(('releases_ADP = { forward = "500 /s" }', right)))
    off = right.replace(repr(step.backward), repr(step.backward * math.exp(0.5 / RT)))
    with pytest.raises(driblet.InputError, match=r"steps: .* for relay .*its energy says -16.7: \+0.5 kJ/mol too much"):
        driblet.loads(with_steps(('releases_ADP = { forward = "500 /s" }', off)))


@pytest.mark.parametrize(
    ("old", "new", "key", "text"),
    [
        (
            "binds_ATP = {",
            "binds_GTP = {",
            "steps",
            '"binds_GTP" is no step of ordered bi bi here; its steps: binds_ATP, ',
        ),
        ('releases_ADP = { forward = "500 /s" }', "", "steps", "the step releases_ADP is missing"),
        ('{ forward = "500 /s" }', "{ }", "steps.releases_ADP", "needs its forward or its backward constant"),
        (
            '{ forward = "500 /s" }',
            '{ forward = "500 /M/s" }',
            "steps.releases_ADP.forward",
            "wrong unit: /s is needed",
        ),
        (
            '"-16.7 kJ/mol"',
            '"31.5 kJ/mol"',
            "steps.releases_ADP",
            "would follow from the energy as 4.95e+13 /M/s; at most 1e9",
        ),
        ('forward = "300 /s", ', "", "steps", "relay, releases_ADP: the energy fixes one constant a cycle"),
        ("[enzymes.kinase.steps]", 'KM = { ATP = "1 mM" }\n[enzymes.kinase.steps]', "KM", "follows from steps"),
    ],
)
def test_faulty_steps(old: str, new: str, key: str, text: str) -> None:
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(with_steps((old, new)), "mine.toml")
    lines = [x for x in caught.value.lines() if x.startswith(f"mine.toml: {KINASE}.{key}: ") and text in x]
    assert len(lines) == 1, caught.value.lines()


def test_a_square_that_does_not_close_is_refused() -> None:
    """Random binding has two paths to the same complex; the message names the square, not the energy of the reaction."""
    steps = """
[enzymes.kinase.steps]
binds_ATP = { forward = "1e6 /M/s", backward = "200 /s" }
binds_sugar = { forward = "1e6 /M/s", backward = "200 /s" }
binds_ATP_with_sugar = { forward = "1e6 /M/s", backward = "200 /s" }
binds_sugar_with_ATP = { forward = "1e6 /M/s", backward = "400 /s" }
relay = { forward = "300 /s" }
releases_sugarP_with_ADP = { forward = "2000 /s", backward = "1e6 /M/s" }
releases_ADP_with_sugarP = { forward = "2000 /s", backward = "1e6 /M/s" }
releases_ADP = { forward = "500 /s", backward = "1e6 /M/s" }
releases_sugarP = { forward = "500 /s", backward = "1e6 /M/s" }
"""
    text = changed(TEXT, (KCAT, ""), (KM, ""), (MECHANISM, 'mechanism = "random bi bi"'))
    text = text.replace("[enzymes.kinase.also.leak]", steps + "[enzymes.kinase.also.leak]")
    with pytest.raises(driblet.InputError, match=r"sum to [+-]1\.718 kJ/mol where they must cancel"):  # RT ln 2
        driblet.loads(text)
    assert driblet.loads(text.replace('"400 /s"', '"200 /s"')).enzymes


@pytest.mark.parametrize(
    ("content", "keys", "text"),
    [
        ("a,b\n1,2\n", 'unit = "nm"', "the file has 2 columns; name one as column: a, b"),
        ("a,b\n1,2\n", 'unit = "nm", column = "c"', '"c" is no column of the file; there are: a, b'),
        ("a\n1,5\n", 'unit = "nm"', None),
        ('a\n"1,5"\n', 'unit = "nm"', 'row 2: "1,5" is not a number: decimals take a point'),
        ("a\n100\n-3\n", 'unit = "nm"', 'row 3: "-3" leaves no room'),
        ("a\n", 'unit = "nm"', "holds no numbers"),
        ("", 'unit = "nm"', "is empty"),
        ("a\n100\n", "column = 'a'", "needs unit"),
        ("a\n100\n", 'unit = "fL"', "a length is needed here"),
        ("a\n100\n5\n", 'unit = "nm"', "two walls leave no room"),
    ],
)
def test_faulty_sizes(tmp_path: Path, content: str, keys: str, text: str | None) -> None:
    (tmp_path / "sizes.csv").write_text(content)
    path = tmp_path / "mine.toml"
    path.write_text(changed(TEXT, (VOLUME, f'diameter = {{ csv = "sizes.csv", {keys} }}\nwall = "4 nm"')))
    if text is None:  # a second column without a name is no concern of ours
        with pytest.raises(driblet.InputError):
            driblet.load(path)
        return
    with pytest.raises(driblet.InputError) as caught:
        driblet.load(path)
    (line,) = caught.value.lines()
    assert "compartments.drop." in line
    assert text in line
