"""Every fault a system file can have, one at a time: where it is, what is wrong, what would be right. And all at once."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

import driblet
from driblet.errors import EXIT_BAD_INPUT
from tests.texts import MIXED, SMALL, changed

A, B = 'A = "10 copies"', 'B = "0 copies"'
EQUATION, K, FORWARD = 'equation = "A <=> B"', "K = 2", 'forward = "1 /s"'
VOLUME, TEMPERATURE, DURATION = 'volume = "0.1 fL"', 'temperature = "25 degC"', 'duration = "2 s"'
READOUT = 'part = "B / (A + B)"'

# what is replaced, by what, the key that is named, a piece of the complaint
ONE_FAULT: list[tuple[str, str, str, str]] = [
    # bare numbers, wrong spellings
    (A, "A = 10", "species.A", "a bare number 10 has no unit"),
    (A, "A = nan", "species.A", "bare number nan"),
    (A, "A = inf", "species.A", "bare number inf"),
    (A, 'A = "10"', "species.A", '"10" has no unit'),
    (A, 'A = ""', "species.A", "an empty text"),
    (A, 'A = "1,5 mM"', "species.A", "decimals take a point"),
    (A, 'A = "10 000 uM"', "species.A", "digits are grouped without a gap"),
    (A, 'A = "4mM"', "species.A", "a space belongs between number and unit"),
    (A, 'A = "4 MM"', "species.A", "is not a unit"),
    (A, 'A = "nan mM"', "species.A", '"nan" is not a number'),
    (A, 'A = "inf mM"', "species.A", '"inf" is not a number'),
    (A, 'A = "1e400 mM"', "species.A", "too large for a double"),
    (A, 'A = "1e-400 mM"', "species.A", "too small for a double"),
    (A, 'A = "20 molecules"', "species.A", 'write "copies"'),
    (TEMPERATURE, 'temperature = "30 C"', "conditions.temperature", 'write "degC"'),
    (TEMPERATURE, "temperature = 25", "conditions.temperature", 'such as "30 degC"'),
    # wrong dimensions
    (A, 'A = "4 s"', "species.A", "is no amount"),
    (A, 'A = "4 kJ/mol"', "species.A", "is no amount"),
    (VOLUME, 'volume = "4 mM"', "compartments.drop.volume", '"4 mM" is a concentration; a volume is needed here'),
    (VOLUME, 'diameter = "4 aL"', "compartments.drop.diameter", "a length is needed here"),
    (TEMPERATURE, 'temperature = "25 mM"', "conditions.temperature", "a temperature is needed here"),
    (DURATION, 'duration = "2 mM"', "run.duration", "a time is needed here"),
    (FORWARD, 'forward = "1 /M/s"', "reactions.turn.forward", "a rate from one molecule has the unit /s"),
    (FORWARD, 'forward = "1 s"', "reactions.turn.forward", "has the unit /s"),
    (K, 'K = "2 /M"', "reactions.turn.K", "a plain number is needed"),
    (K, 'K = "2 degC"', "reactions.turn.K", "wrong unit"),
    (K, 'energy = "2 kJ"', "reactions.turn.energy", "an energy is needed here"),
    (K, 'energy = "2 mM"', "reactions.turn.energy", "an energy is needed here"),
    (K, 'Kd = "2 nM"', "reactions.turn.Kd", "needs a side with more molecules"),
    (K, 'energy = { value = "2 kJ/mol", sd = "1 s" }', "reactions.turn.energy.sd", "an energy is needed here"),
    (K, 'energy = { value = "2 kJ/mol", sd = "-1 kJ/mol" }', "reactions.turn.energy.sd", "negative"),
    # values out of range
    (A, 'A = "-4 mM"', "species.A", "an amount cannot be"),
    (A, 'A = "−4 mM"', "species.A", "an amount cannot be"),
    (A, 'A = "0.5 copies"', "species.A", 'fractional: only loading = "poisson"'),
    (A, 'A = "1e16 copies"', "species.A", "more than 2^53 copies"),
    (A, 'A = "2000 M"', "species.A", "denser than any substance"),
    (A, 'A = { amount = "4 copies", held = true }', "species.A", "a held species has a fixed concentration"),
    (A, 'A = { amount = "0 mM", held = true }', "species.A", "held at zero"),
    (A, 'A = { amount = "1 mM", held = 1 }', "species.A.held", "true or false is needed"),
    (A, 'A = { amount = "1 mM", held = "yes" }', "species.A.held", "true or false is needed"),
    (A, 'A = { amount = "1 mM", loading = "random" }', "species.A.loading", '"nearest" or "poisson"'),
    (A, 'A = { amount = "1 mM", label = "" }', "species.A.label", "a text in quotes is needed"),
    (A, "A = { held = true }", "species.A.amount", "is missing"),
    (VOLUME, 'volume = "0 fL"', "compartments.drop.volume", "must be above zero"),
    (VOLUME, 'volume = "-1 fL"', "compartments.drop.volume", "must be above zero"),
    (VOLUME, 'volume = "1e-15 aL"', "compartments.drop", "smaller than any molecule"),
    (VOLUME, 'volume = "1e9 L"', "compartments.drop", "no compartment where molecules are counted"),
    (VOLUME, 'diameter = "2 km"', "compartments.drop.diameter", "no compartment where molecules are counted"),
    (VOLUME, 'diameter = "6 nm"\nwall = "4 nm"', "compartments.drop.wall", "two walls leave no room"),
    (VOLUME, 'diameter = { median = "20 nm", cv = 0.5 }\nwall = "4 nm"', "compartments.drop.diameter.cv", "would be all wall"),
    (VOLUME, 'volume = { median = "1 fL", cv = -0.1 }', "compartments.drop.volume.cv", "between 0 and 3"),
    (VOLUME, 'volume = { median = "1 fL", cv = nan }', "compartments.drop.volume.cv", "between 0 and 3"),
    (VOLUME, 'volume = { median = "1 fL", cv = "10 %" }', "compartments.drop.volume.cv", "a plain number"),
    (VOLUME, "volume = { cv = 0.1 }", "compartments.drop.volume.median", "is missing"),
    (VOLUME, 'volume = "1 fL"\nwall = "4 nm"', "compartments.drop.wall", "goes with a diameter"),
    (VOLUME, 'volume = "1 fL"\ndiameter = "100 nm"', "compartments.drop", "exactly one of diameter"),
    (VOLUME, "", "compartments.drop", "exactly one of diameter"),
    (TEMPERATURE, 'temperature = "30 K"', "conditions.temperature", "is it in degC?"),
    (TEMPERATURE, 'temperature = "-300 degC"', "conditions.temperature", "negative"),
    (TEMPERATURE, 'temperature = "-273.15 degC"', "conditions.temperature", "zero"),
    (TEMPERATURE, "pH = 7", "conditions.temperature", "is missing and has no default"),
    (TEMPERATURE, f"{TEMPERATURE}\npH = 15", "conditions.pH", "between 0 and 14"),
    (TEMPERATURE, f'{TEMPERATURE}\npH = "7"', "conditions.pH", "a plain number"),
    (TEMPERATURE, f"{TEMPERATURE}\npMg = nan", "conditions.pMg", "between -1 and 14"),
    (TEMPERATURE, f'{TEMPERATURE}\nionic_strength = "-1 M"', "conditions.ionic_strength", "negative"),
    (FORWARD, 'forward = "0 /s"', "reactions.turn.forward", "a rate constant is above zero"),
    (FORWARD, 'forward = "-1 /s"', "reactions.turn.forward", "a rate constant is above zero"),
    (FORWARD, 'forward = "1e300 /s"', "reactions.turn", "times a second; check the rate and the energy"),
    (K, "K = 0", "reactions.turn.K", "above zero"),
    (K, "K = -2", "reactions.turn.K", "above zero"),
    (K, "K = nan", "reactions.turn.K", "is not a finite number"),
    (K, "K = inf", "reactions.turn.K", "is not a finite number"),
    (K, 'energy = "-2000 kJ/mol"', "reactions.turn.energy", "K' is out of the range of a double"),
    (K, 'energy = "2000 kJ/mol"', "reactions.turn.energy", "K' is out of the range of a double"),
    (K, 'energy = "700 kT"', "reactions.turn.energy", "K' is out of the range of a double"),
    (K, "K = 1e305", "reactions.turn.K", "K' is out of the range of a double"),
    (DURATION, 'duration = "0 s"', "run.duration", "a time above zero is needed"),
    (DURATION, 'duration = "-2 s"', "run.duration", "negative"),
    (DURATION, 'duration = "1e20 s"', "run.duration", "out of range"),
    (DURATION, 'duration = "0.1 s"', "run.sample_every", "is longer than the run"),
    ("replicates = 3", "replicates = 0", "run.replicates", "a whole number from 1"),
    ("replicates = 3", "replicates = 2.5", "run.replicates", "a whole number from 1"),
    ("replicates = 3", "replicates = true", "run.replicates", "a whole number from 1"),
    ("seed = 1", "seed = -1", "run.seed", "a whole number from 0"),
    ("seed = 1", f"seed = {2**64}", "run.seed", "a whole number from 0"),
    ("seed = 1", 'seed = 1\nengine = "quick"', "run.engine", "is not an engine"),
    ("seed = 1", 'seed = 1\nloading = "some"', "run.loading", '"nearest" or "poisson"'),
    # names
    ('title = "small"', "titel = 1", "titel", 'did you mean "title"?'),
    ("replicates = 3", "replicate = 3", "run.replicate", 'did you mean "replicates"?'),
    (TEMPERATURE, f"{TEMPERATURE}\nph = 7", "conditions.ph", 'did you mean "pH"?'),
    (A, 'A = { amount = "10 copies", hold = true }', "species.A.hold", 'did you mean "held"?'),
    (K, 'K = 2\nkcat = "3 /s"', "reactions.turn.kcat", "is not a key here"),
    (K, 'energy = { value = "2 kJ/mol", error = "1 kJ/mol" }', "reactions.turn.energy.error", "is not a key here"),
    (A, f'{A}\n"NAD+" = "1 mM"', 'species."NAD+"', "is not a name"),
    (A, f'{A}\n"2X" = "1 mM"', 'species."2X"', "is not a name"),
    (A, f'{A}\n"Å" = "1 mM"', 'species."Å"', "is not a name"),
    (A, f'{A}\n"" = "1 mM"', 'species.""', "is not a name"),
    (A, f'{A}\nH2O = "55 M"', "species.H2O", "water is the solvent"),
    (A, f'{A}\nnothing = "1 mM"', "species.nothing", "is a reserved word"),
    (A, f'{A}\ntotal = "1 mM"', "species.total", "is a reserved word"),
    ("[reactions.turn]", '[reactions."turn-over"]', 'reactions."turn-over"', "is not a name"),
    # equations
    (EQUATION, 'equation = "A <=> C"', "reactions.turn.equation", '"C" is not in [species]'),
    (EQUATION, 'equation = "A <=> A"', "reactions.turn.equation", "both sides are equal"),
    (EQUATION, 'equation = "nothing <=> nothing"', "reactions.turn.equation", "both sides are empty"),
    (EQUATION, 'equation = "A + B <=> B + A"', "reactions.turn.equation", "both sides are equal"),
    (EQUATION, 'equation = "A = B"', "reactions.turn.equation", '"=" is not an arrow'),
    (EQUATION, 'equation = "A"', "reactions.turn.equation", "0 arrows"),
    (EQUATION, 'equation = ""', "reactions.turn.equation", "a text in quotes is needed"),
    (EQUATION, "equation = 3", "reactions.turn.equation", "a text in quotes is needed"),
    (EQUATION, "", "reactions.turn.equation", "is missing"),
    (EQUATION, 'equation = "<=> B"', "reactions.turn.equation", 'write "nothing" for an empty side'),
    (f"{EQUATION}\n{K}\n{FORWARD}", 'equation = "4 A <=> B"\nK = "2 /M^3"\nforward = "1 /M^3/s"',
      "reactions.turn.equation", "4 molecules"),
    # energies and rates that do not go together
    (K, "", "reactions.turn.energy", "give energy, K or Kd, or both forward and backward"),
    (FORWARD, "", "reactions.turn.forward", "is missing"),
    (K, 'K = 2\nenergy = "-2 kJ/mol"', "reactions.turn.K", "energy and K say the same thing"),
    (K, 'K = 2\nKd = "2 nM"', "reactions.turn.Kd", "K and Kd say the same thing"),
    (K, 'K = 2\nbackward = "1 /s"', "reactions.turn.backward", "leave one of the three out"),
    (K, 'energy = "formation"', "reactions.turn.energy", "no energy of formation for A, B"),
    (K, 'energy = "hydrolysis"', "reactions.turn.energy", "is not a sum of the hydrolyses"),
    (K, 'K = 2\none_way = "why"', "reactions.turn.one_way", 'goes with "->"'),
    (f"{EQUATION}\n{K}", 'equation = "A -> B"', "reactions.turn.one_way", "a one-way reaction needs its reason"),
    (f"{EQUATION}\n{K}", 'equation = "A -> B"\none_way = ""', "reactions.turn.one_way", "a text in quotes is needed"),
    (f"{EQUATION}\n{K}", 'equation = "A -> B"\none_way = "w"\nK = 2', "reactions.turn.K", "a one-way reaction has none"),
    (f"{EQUATION}\n{K}", 'equation = "A -> B"\none_way = "w"\nbackward = "1 /s"', "reactions.turn.backward", "has none"),
    (f"{EQUATION}\n{K}\n{FORWARD}", 'equation = "A -> B"\none_way = "w"', "reactions.turn.forward", "needs its rate constant"),
    # readouts
    (READOUT, 'part = "C"', "readouts.part", '"C" in "C" is not a species'),
    (READOUT, 'part = "A + conc(A)"', "readouts.part", "different units"),
    (READOUT, 'part = "__import__(1)"', "readouts.part", "outside the grammar"),
    (READOUT, "part = 3", "readouts.part", "an expression in quotes is needed"),
    (READOUT, 'part = ""', "readouts.part", "the expression is empty"),
    (READOUT, 'part = "gibbs(turns)"', "readouts.part", 'did you mean "turn"?'),
    # tables where values belong and values where tables belong
    (A, "A = []", "species.A", "a number with a unit in quotes is needed"),
    (A, "A = 2026-12-01", "species.A", "a number with a unit in quotes is needed"),
    (A, "A = { amount = {} }", "species.A.amount", "a number with a unit in quotes is needed"),
    ("[conditions]\n" + TEMPERATURE, "conditions = 3", "conditions", "a table of keys is needed"),
    (f"[species]\n{A}\n{B}", "[species]", "species", "is missing or empty"),
    (f"[compartments.drop]\n{VOLUME}", "", "compartments", "is missing or empty"),
    (f"[compartments.drop]\n{VOLUME}", "[compartments]\ndrop = 3", "compartments.drop", "a table of keys is needed"),
    ("[compartments.drop]", "[compartments.one]\nvolume = '1 fL'\n[compartments.drop]", "compartments", "exactly one"),
    ('title = "small"', "title = 3", "title", "a text in quotes is needed"),
    ('title = "small"', 'title = " "', "title", "a text in quotes is needed"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("old", "new", "key", "complaint"), ONE_FAULT, ids=[f"{n}-{f[2]}" for n, f in enumerate(ONE_FAULT)]
)
def test_one_fault_is_one_line(old: str, new: str, key: str, complaint: str) -> None:
    text = changed(SMALL, (old, new))
    if not text.startswith("title") and "conditions = 3" in new:
        text = "conditions = 3\n" + text.replace("conditions = 3", "")
    if new == "conditions = 3":
        text = "conditions = 3\n" + text.replace("conditions = 3\n", "")
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(text, "bad.toml")
    assert caught.value.exit_status == EXIT_BAD_INPUT == 2
    lines = caught.value.lines()
    hits = [line for line in lines if line.startswith(f"bad.toml: {key}: ") and complaint in line]
    assert hits, lines
    # a section that is gone makes its names unknown elsewhere; any other fault is one line
    if "[species]" not in old:
        assert len(lines) == 1, lines


def test_all_problems_come_at_once() -> None:
    text = changed(
        SMALL,
        (TEMPERATURE, 'temperature = "25"'),
        (VOLUME, 'volume = "0 fL"'),
        (A, 'A = "-4 mM"'),
        (B, 'B = "0.5 copies"'),
        (K, "K = -1"),
        (READOUT, 'part = "C"'),
        ("replicates = 3", "replicates = 0"),
        ("seed = 1", "sead = 1"),
    )
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(text, "bad.toml")
    keys = {line.split(": ")[1] for line in caught.value.lines()}
    assert keys == {
        "conditions.temperature", "compartments.drop.volume", "species.A", "species.B", "reactions.turn.K",
        "readouts.part", "run.replicates", "run.sead",
    }  # fmt: skip
    assert str(caught.value) == "\n".join(caught.value.lines())
    assert isinstance(caught.value, ValueError)
    assert caught.value.problems[0].key


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("", "is empty; `driblet new` writes a commented starter file"),
        ("   \n\n", "is empty"),
        ("not toml at all", "is not valid TOML"),
        ("[species\nA = 1", "is not valid TOML"),
        (SMALL + '\n[species]\nA = "1 mM"\n', "each name may be given once"),
        (changed(SMALL, (A, f"{A}\n{A}")), "each name may be given once"),
        (changed(SMALL, ("[readouts]", "[reactions.turn]\n[readouts]")), "each name may be given once"),
        ("a = " + "[" * 5000, "is not a system file"),
        ("a = " + "9" * 5000, "is not a system file"),
    ],
)
def test_texts_that_are_no_system_file(text: str, complaint: str) -> None:
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(text, "bad.toml")
    (line,) = caught.value.lines()
    assert line.startswith("bad.toml: ")
    assert complaint in line


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    (tmp_path / "binary.toml").write_bytes(bytes(range(128, 256)))
    (tmp_path / "folder.toml").mkdir()
    (tmp_path / "run.h5").write_bytes(b"\x89HDF\r\n\x1a\n" + b"\0" * 100)
    (tmp_path / "empty.toml").write_bytes(b"")
    (tmp_path / "loop.toml").symlink_to(tmp_path / "loop.toml")
    for name, complaint in (
        ("binary.toml", "is not text in UTF-8"),
        ("folder.toml", "cannot be read: is a directory"),
        ("missing.toml", "cannot be read: no such file or directory"),
        ("run.h5", "is an HDF5 file, not a system file: `driblet show"),
        ("empty.toml", "is empty"),
        ("loop.toml", "cannot be read: too many levels of symbolic links"),
        ("x" * 400, "cannot be read: file name too long"),
        ("a\0b", "cannot be read: embedded null byte"),
    ):
        with pytest.raises(driblet.InputError) as caught:
            driblet.load(tmp_path / name)
        (line,) = caught.value.lines()
        assert complaint in line


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="root may read everything")
def test_a_file_without_permission(tmp_path: Path) -> None:
    path = tmp_path / "secret.toml"
    path.write_text(SMALL)
    path.chmod(0)
    with pytest.raises(driblet.InputError, match="permission denied"):
        driblet.load(path)


@pytest.mark.parametrize(
    ("arguments", "keys"),
    [
        ({"replicates": 0}, ["replicates"]),
        ({"replicates": 2.5}, ["replicates"]),
        ({"replicates": True}, ["replicates"]),
        ({"duration": 0}, ["duration"]),
        ({"duration": -1.0}, ["duration"]),
        ({"duration": float("nan")}, ["duration"]),
        ({"duration": float("inf")}, ["duration"]),
        ({"duration": "2 s"}, ["duration"]),
        ({"duration": 1e300}, ["duration"]),
        ({"sample_every": 0.0}, ["sample_every"]),
        ({"sample_every": -1.0}, ["sample_every"]),
        ({"sample_every": 3.0}, ["sample_every"]),
        ({"sample_every": 1e-9}, ["sample_every"]),
        ({"seed": -1}, ["seed"]),
        ({"seed": 1.0}, ["seed"]),
        ({"seed": 2**63}, ["seed"]),
        ({"threads": 0}, ["threads"]),
        ({"threads": -2}, ["threads"]),
        ({"engine": "quick"}, ["engine"]),
        ({"engine": 3}, ["engine"]),
        ({"replicates": 0, "duration": -1.0, "seed": -1}, ["replicates", "seed", "duration"]),
        ({"engine": "quick", "threads": 0}, ["engine", "threads"]),
    ],
    ids=str,
)  # fmt: skip
def test_bad_arguments_of_a_run_leave_no_file(tmp_path: Path, arguments: dict[str, object], keys: list[str]) -> None:
    system = driblet.loads(SMALL)
    with pytest.raises(driblet.InputError) as caught:
        driblet.run(system, tmp_path / "run.h5", **arguments)  # type: ignore[arg-type]
    assert [line.split(": ")[1] for line in caught.value.lines()] == keys
    assert list(tmp_path.iterdir()) == []


def test_a_fault_leaves_no_file_behind(tmp_path: Path) -> None:
    """A count that overflows while running: what was finished may stay in the parts folder, never a run file."""
    text = changed(
        SMALL,
        (A, 'A = "9.0071992e15 copies"'),
        (f"{EQUATION}\n{K}\n{FORWARD}", 'equation = "nothing -> A"\none_way = "t"\nforward = "1e9 M/s"'),
    )
    with pytest.raises(driblet.InputError, match=r"system file: species\.A: a count passed 2\^53"):
        driblet.run(driblet.loads(text), tmp_path / "run.h5", replicates=1)
    assert list(tmp_path.glob("run.h5")) == []


def test_a_cycle_that_does_not_close_names_itself_and_its_excess() -> None:
    text = changed(
        MIXED,
        (
            "[reactions.leak]",
            '[reactions.short]\nequation = "2 A <=> C"\nK = "1e5 /M"\nforward = "1e3 /M/s"\n[reactions.leak]',
        ),
    )
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(text, "cycle.toml")
    (line,) = caught.value.lines()
    # 2 turn + pair - short: -RT ln(9e4 / 1e5) at 30 degC is +0.2656 kJ/mol
    assert line == (
        "cycle.toml: reactions: the energies along the cycle 2 turn + pair - short sum to +0.265564 kJ/mol where they must "
        "sum to zero; `driblet reconcile cycle.toml` shows the nearest energies that do"
    )
