"""From a system file to a System: every key of the file, and every way to state an energy and a rate."""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path

import pytest

import driblet
from driblet.quantities import AVOGADRO, GAS_CONSTANT
from tests.texts import MIXED, SMALL, changed, ready_systems

RT = GAS_CONSTANT * 298.15
BINDING = changed(
    SMALL,
    ('B = "0 copies"', 'B = "0 copies"\nC = "5 copies"'),
    ('equation = "A <=> B"\nK = 2\nforward = "1 /s"', 'equation = "A + B <=> C"\n{keys}'),
)


def reaction(keys: str, text: str = SMALL, old: str = 'K = 2\nforward = "1 /s"') -> driblet.system.Reaction:
    return driblet.loads(changed(text, (old, keys))).reactions[0]


def binding(keys: str) -> driblet.system.Reaction:
    return reaction(keys, BINDING, "{keys}")


def test_every_part_of_a_file_arrives() -> None:
    system = driblet.loads(MIXED)
    assert system.title == "every kind of channel"
    assert system.conditions.temperature_K == pytest.approx(303.15)
    assert system.compartment.name == "vesicle"
    assert system.compartment.diameter_m == pytest.approx(120e-9)
    assert system.compartment.wall_m == pytest.approx(4e-9)
    assert system.compartment.cv == 0.1
    assert system.compartment.volume_L == pytest.approx(math.pi / 6 * 112e-9**3 * 1000)
    assert system.compartment.omega == pytest.approx(AVOGADRO * system.compartment.volume_L)
    by_name = {s.name: s for s in system.species}
    assert list(by_name) == list("ABCDEF")
    assert (by_name["A"].concentration_M, by_name["A"].copies, by_name["A"].loading) == (
        pytest.approx(6e-5),
        None,
        "poisson",
    )
    assert (by_name["B"].concentration_M, by_name["B"].copies, by_name["B"].loading) == (None, 20.0, "nearest")
    assert by_name["F"].held
    assert [s.name for s in system.free_species] == list("ABCDE")
    assert system.held_concentrations() == {"F": pytest.approx(1e-3)}
    assert [r.name for r in system.reactions] == ["supply", "turn", "pair", "triple", "meet", "leak"]
    leak = system.reactions[-1]
    assert (leak.dG0_kJ_per_mol, leak.K, leak.backward, leak.one_way) == (None, None, None, "leaves through a pore")
    assert [r.name for r in system.readouts] == ["pairs", "level", "pull"]
    assert dataclasses.astuple(system.settings)[:5] == ("exact", 12, 4.0, 0.5, 11)
    assert system.text == MIXED


def test_a_system_cannot_be_changed() -> None:
    system = driblet.loads(SMALL)
    with pytest.raises(dataclasses.FrozenInstanceError):
        system.title = "other"  # type: ignore[misc]
    with pytest.raises(dataclasses.FrozenInstanceError):
        system.reactions[0].forward = 2.0  # type: ignore[misc]


def test_defaults() -> None:
    text = SMALL[: SMALL.index("[readouts]")].replace('title = "small"\n', "")
    system = driblet.loads(text, "my_system.toml")
    assert system.title == "my_system"
    assert system.settings == driblet.system.RunSettings()
    assert system.readouts == ()
    assert all(s.loading == "nearest" for s in system.species)
    assert system.conditions.pH is None
    with pytest.raises(driblet.InputError, match="duration: is missing"):
        driblet.run(system)


def test_conditions_are_recorded() -> None:
    text = changed(
        SMALL, ('temperature = "25 degC"', 'temperature = "310.15 K"\npH = 7\npMg = 3.0\nionic_strength = "0.25 M"')
    )
    conditions = driblet.loads(text).conditions
    assert conditions.temperature_K == 310.15
    assert (conditions.pH, conditions.pMg, conditions.ionic_strength_M) == (7.0, 3.0, 0.25)
    assert conditions.RT_kJ_per_mol == pytest.approx(2.5787, abs=1e-4)


@pytest.mark.parametrize(
    ("keys", "dG0"),
    [
        ('K = 2\nforward = "3 /s"', -RT * math.log(2)),
        ('K = "2"\nforward = "3 /s"', -RT * math.log(2)),
        ('K = 2.0\nbackward = "1.5 /s"', -RT * math.log(2)),
        ('energy = "-4 kJ/mol"\nforward = "3 /s"', -4.0),
        ('energy = "-4 kJ/mol"\nbackward = "3 /s"', -4.0),
        ('energy = "−1 kcal/mol"\nforward = "3 /s"', -4.184),
        ('energy = "-2 kT"\nforward = "3 /s"', -2 * RT),
        ('energy = { value = "-4 kJ/mol", sd = "0.5 kJ/mol" }\nforward = "3 /s"', -4.0),
        ('forward = "3 /s"\nbackward = "1.5 /s"', -RT * math.log(2)),
        ('forward = "180 /min"\nbackward = "1500 1/ks"', -RT * math.log(2)),
        ('K = 2\nforward = "3 /s"\nbackward = "1.5 /s"', -RT * math.log(2)),
        ('energy = "-1.718 kJ/mol"\nforward = "3 /s"\nbackward = "1.5 /s"', -1.718),
    ],
)
def test_any_two_of_energy_forward_and_backward_set_the_third(keys: str, dG0: float) -> None:
    one = reaction(keys)
    assert one.dG0_kJ_per_mol == pytest.approx(dG0, rel=1e-12)
    assert pytest.approx(math.exp(-dG0 / RT), rel=1e-12) == one.K
    assert one.backward is not None
    assert one.forward / one.backward == pytest.approx(one.K, rel=1e-12)
    if "forward" in keys:
        assert one.forward == pytest.approx(3.0)


def test_an_energy_keeps_its_uncertainty() -> None:
    assert reaction(
        'energy = { value = "-4 kJ/mol", sd = "1 kT" }\nforward = "1 /s"'
    ).energy_sd_kJ_per_mol == pytest.approx(RT)
    assert reaction('energy = "-4 kJ/mol"\nforward = "1 /s"').energy_sd_kJ_per_mol is None


@pytest.mark.parametrize(
    ("keys", "K"),
    [
        ('K = "2e8 /M"\nforward = "1e6 /M/s"', 2e8),
        ('K = "0.2 /nM"\nforward = "1e6 /M/s"', 2e8),
        ('Kd = "5 nM"\nforward = "1e6 /M/s"', 2e8),
        ('Kd = "5 nM"\nbackward = "0.005 /s"', 2e8),
        ('energy = "0 kJ/mol"\nforward = "1 /uM/s"', 1.0),
        ('forward = "1e6 /M/s"\nbackward = "0.005 /s"', 2e8),
    ],
)
def test_binding_constants_carry_the_unit_of_the_change_of_molecularity(keys: str, K: float) -> None:
    one = binding(keys)
    assert pytest.approx(K, rel=1e-12) == one.K
    assert one.forward == pytest.approx(1e6)
    assert one.backward == pytest.approx(1e6 / K)


def test_a_dissociation_constant_is_of_the_side_with_more_molecules() -> None:
    falling_apart = changed(
        BINDING, ('"A + B <=> C"', '"C <=> A + B"'), ("{keys}", 'Kd = "5 nM"\nbackward = "1e6 /M/s"')
    )
    one = driblet.loads(falling_apart).reactions[0]
    assert pytest.approx(5e-9) == one.K
    assert one.forward == pytest.approx(5e-3)


def test_water_does_not_count_in_units() -> None:
    text = changed(BINDING, ('"A + B <=> C"', '"A + H2O <=> B + C"'), ("{keys}", 'K = "2e5 M"\nforward = "1e-5 /s"'))
    one = driblet.loads(text).reactions[0]
    assert pytest.approx(2e5) == one.K
    assert one.backward == pytest.approx(5e-11)


def test_energies_of_formation() -> None:
    """Round invented numbers; the sum by hand, water included."""
    text = changed(
        BINDING, ('"A + B <=> C"', '"A + H2O <=> B + 2 C"'), ("{keys}", 'energy = "formation"\nforward = "1 /s"')
    )
    text += '[energies.formation]\nA = "-100 kJ/mol"\nB = "-70 kJ/mol"\nC = "-98 kJ/mol"\nH2O = "-155 kJ/mol"\n'
    one = driblet.loads(text).reactions[0]
    assert one.dG0_kJ_per_mol == pytest.approx(-70 - 2 * 98 + 100 + 155)
    assert one.energy_from == "formation"


def test_energies_of_hydrolysis() -> None:
    """A transfer is the difference of two hydrolyses: -30.5 - (-13.8) kJ/mol; water cancels."""
    text = changed(
        SMALL,
        ('A = "10 copies"\nB = "0 copies"', "".join(f'{n} = "5 copies"\n' for n in ("ATP", "ADP", "G", "GP", "Pi"))),
        (
            'equation = "A <=> B"\nK = 2\nforward = "1 /s"',
            'equation = "ATP + G <=> ADP + GP"\nenergy = "hydrolysis"\nforward = "1 /M/s"',
        ),
        ('part = "B / (A + B)"', 'part = "GP"'),
    )
    text += '[energies.hydrolysis]\n"ATP + H2O <=> ADP + Pi" = "-30.5 kJ/mol"\n"GP + H2O <=> G + Pi" = "-13.8 kJ/mol"\n'
    one = driblet.loads(text).reactions[0]
    assert one.dG0_kJ_per_mol == pytest.approx(-16.7)
    itself = changed(text, ("ATP + G <=> ADP + GP", "ATP + H2O <=> ADP + Pi"), ('"1 /M/s"', '"1e-5 /s"'))
    assert driblet.loads(itself).reactions[0].dG0_kJ_per_mol == pytest.approx(-30.5)
    dry = changed(itself, ('equation = "ATP + H2O <=> ADP + Pi"', 'equation = "ATP <=> ADP + Pi"'))
    with pytest.raises(driblet.InputError, match="the water in the equation does not match"):
        driblet.loads(dry)
    other = changed(text, ("ATP + G <=> ADP + GP", "ATP + G <=> ADP + Pi"))
    with pytest.raises(driblet.InputError, match="is not a sum of the hydrolyses"):
        driblet.loads(other)


@pytest.mark.parametrize(
    ("size", "volume_L", "cv"),
    [
        ('volume = "0.1 fL"', 1e-16, 0.0),
        ('volume = "0.1 um^3"', 1e-16, 0.0),
        ('volume = { median = "0.1 fL", cv = 0.2 }', 1e-16, 0.2),
        ('volume = { median = "0.1 fL" }', 1e-16, 0.0),
        ('diameter = "200 nm"', math.pi / 6 * 8e-21 * 1000, 0.0),
        ('diameter = "200 nm"\nwall = "4 nm"', math.pi / 6 * 192e-9**3 * 1000, 0.0),
        ('diameter = { median = "0.2 um", cv = 0.1 }', math.pi / 6 * 8e-21 * 1000, 0.1),
    ],
)
def test_sizes(size: str, volume_L: float, cv: float) -> None:
    compartment = driblet.loads(changed(SMALL, ('volume = "0.1 fL"', size))).compartment
    assert compartment.volume_L == pytest.approx(volume_L)
    assert compartment.cv == cv
    assert compartment.by_diameter == ("diameter" in size)


def test_loading_is_the_files_unless_the_species_says_otherwise() -> None:
    text = changed(
        SMALL,
        ("seed = 1", 'seed = 1\nloading = "poisson"'),
        ('B = "0 copies"', 'B = { amount = "3.5 copies" }\nC = { amount = "2 copies", loading = "nearest" }'),
    )
    species = {s.name: s for s in driblet.loads(text).species}
    assert (species["B"].loading, species["B"].copies) == ("poisson", 3.5)
    assert species["C"].loading == "nearest"


def test_labels() -> None:
    text = changed(
        SMALL,
        ('A = "10 copies"', 'A = { amount = "10 copies", label = "NAD+" }'),
        ("K = 2", 'K = 2\nlabel = "oxidation"'),
    )
    system = driblet.loads(text)
    assert system.species[0].label == "NAD+"
    assert system.species[1].label == "B"
    assert system.reactions[0].label == "oxidation"


def test_a_file_is_read_from_disk_with_any_line_end_and_a_byte_order_mark(tmp_path: Path) -> None:
    for name, data in (
        ("plain", SMALL.encode()),
        ("windows", SMALL.replace("\n", "\r\n").encode()),
        ("marked", b"\xef\xbb\xbf" + SMALL.encode()),
    ):
        path = tmp_path / f"{name}.toml"
        path.write_bytes(data)
        assert driblet.load(path).reactions == driblet.loads(SMALL).reactions
        assert driblet.load(str(path)).source == str(path)


def test_unicode_titles_and_labels_arrive() -> None:
    text = changed(SMALL, ('title = "small"', 'title = "Ångström ☃ 磷酸"'))
    assert driblet.loads(text).title == "Ångström ☃ 磷酸"
    run = driblet.run(driblet.loads(text), replicates=1)
    assert run.system.title == "Ångström ☃ 磷酸"


def test_dotted_keys_and_inline_tables_are_the_same_file() -> None:
    text = changed(
        SMALL,
        ('[compartments.drop]\nvolume = "0.1 fL"', '[compartments]\ndrop.volume.median = "0.1 fL"\ndrop.volume.cv = 0'),
        ('A = "10 copies"', 'A.amount = "10 copies"'),
        (
            '[reactions.turn]\nequation = "A <=> B"\nK = 2\nforward = "1 /s"',
            '[reactions]\nturn = { equation = "A <=> B", K = 2, forward = "1 /s" }',
        ),
    )
    one, other = driblet.loads(text), driblet.loads(SMALL)
    assert (one.species, one.reactions, one.compartment) == (other.species, other.reactions, other.compartment)


def test_cycles_that_close_to_rounding_are_taken() -> None:
    """Three energies given to six decimals that sum to zero; and the same with 0.01 kJ/mol too much."""
    text = changed(
        SMALL,
        ('B = "0 copies"', 'B = "0 copies"\nC = "0 copies"'),
        ('[reactions.turn]\nequation = "A <=> B"\nK = 2\nforward = "1 /s"', "{ring}"),
    )

    def ring(last: str) -> str:
        steps = (("one", "A <=> B", "-1.234567"), ("two", "B <=> C", "0.5"), ("three", "C <=> A", last))
        return "".join(
            f'[reactions.{n}]\nequation = "{e}"\nenergy = "{g} kJ/mol"\nforward = "1 /s"\n' for n, e, g in steps
        )

    assert len(driblet.loads(changed(text, ("{ring}", ring("0.734567")))).reactions) == 3
    with pytest.raises(driblet.InputError) as caught:
        driblet.loads(changed(text, ("{ring}", ring("0.744567"))), "ring.toml")
    (line,) = caught.value.lines()
    assert line.startswith("ring.toml: reactions: the energies along the cycle one + two + three sum to +0.01 kJ/mol")
    assert "driblet reconcile ring.toml" in line


def test_a_cycle_through_held_species_must_close_too() -> None:
    """Held rows count in closure: ATP + A <=> B, B <=> A + ADP, and the hydrolysis itself."""
    text = changed(
        SMALL,
        (
            'B = "0 copies"',
            'B = "0 copies"\nT = { amount = "1 mM", held = true }\nD = { amount = "1 mM", held = true }',
        ),
        (
            '[reactions.turn]\nequation = "A <=> B"\nK = 2\nforward = "1 /s"',
            '[reactions.up]\nequation = "T + A <=> B"\nK = "2 /M"\nforward = "1 /M/s"\n'
            '[reactions.down]\nequation = "B <=> A + D"\nK = "3 M"\nforward = "1 /s"\n'
            '[reactions.whole]\nequation = "T <=> D"\nK = {K}\nforward = "1 /s"',
        ),
    )
    assert driblet.loads(changed(text, ("{K}", "6")))
    with pytest.raises(driblet.InputError, match="up \\+ down - whole"):
        driblet.loads(changed(text, ("{K}", "7")))


@pytest.mark.parametrize("path", ready_systems(), ids=lambda p: p.stem)
def test_ready_systems_load_and_run(path: Path) -> None:
    # a fiftieth of the time is too short for what the file requires, and enough to see that it runs
    system = dataclasses.replace(driblet.load(path), requirements=())
    settings = system.settings
    run = driblet.run(system, replicates=2, duration=settings.duration_s / 50, sample_every=settings.duration_s / 100)
    assert run.complete
    assert (run.counts >= 0).all()
