"""The reference table as the system file uses it: names, balance, conditions, carrying over, doubts, free magnesium."""

from __future__ import annotations

import math
import tomllib
from dataclasses import replace
from importlib import resources

import pytest

import driblet
from driblet.energetics.conditions import Conditions, ion_energy
from driblet.energetics.magnesium import CannotBeMetError, solved_pMg
from driblet.energetics.reactant_tables import COMPOSITION_SD, completed, normal_form, read_reactants
from driblet.energetics.reference import NotInTableError, reference_table
from driblet.energetics.transform import IonicSpecies, Potentials, bound, species_shares, transformed_energy
from driblet.errors import InputError, Problem

HERE = Conditions(298.15, 7.0, 3.0, 0.25)
HYDROLYSIS = {"ATP": -1, "H2O": -1, "ADP": 1, "Pi": 1}

FILE = """
[conditions]
temperature = "30 degC"
pH = 7.4
pMg = 2.6
ionic_strength = "0.12 M"
[compartments.lumen]
volume = "1 fL"
[species]
ATP = "4 mM"
ADP = "0.1 mM"
Pi = "5 mM"
glucose = "2 mM"
G6P = "0 mM"
[reactions.leak]
equation = "ATP + H2O <=> ADP + Pi"
energy = "reference"
forward = "1e-5 /s"
[reactions.charging]
equation = "ATP + glucose <=> ADP + G6P"
energy = "reference"
forward = "100 /M/s"
"""


def changed(*pairs: tuple[str, str]) -> str:
    text = FILE
    for old, new in pairs:
        assert old in text, old
        text = text.replace(old, new)
    return text


def reaction(text: str, name: str = "leak") -> driblet.system.Reaction:
    return next(r for r in driblet.loads(text).reactions if r.name == name)


def problems(text: str) -> list[str]:
    with pytest.raises(InputError) as caught:
        driblet.loads(text, "f.toml")
    return caught.value.lines()


# --- the table itself


def test_every_entry_is_whole() -> None:
    raw = tomllib.loads((resources.files("driblet.energetics") / "reference.toml").read_text(encoding="utf-8"))
    assert {"ATP", "ADP", "AMP", "adenosine", "Pi", "PPi", "H2O", "Mg", "glucose", "G6P", "G1P", "F6P", "FBP", "glycerol",
            "glycerol3P", "PEP", "pyruvate", "lactate", "PG3", "PG2", "BPG13", "GAP", "DHAP", "creatine", "PCr", "acetate",
            "acetylP", "NAD", "NADH", "GTP", "GDP", "UTP", "UDP"} <= set(raw["reactants"])  # fmt: skip
    names: dict[str, str] = {}
    for key, entry in raw["reactants"].items():
        assert entry["source"].strip()
        for name in (key, *entry.get("aliases", ())):
            plain = normal_form(name)
            assert names.setdefault(plain, key) == key, f"{name} stands for {names[plain]} and for {key}"
    for key, entry in raw["measured"].items():
        assert entry["source"].strip(), key
        reference_table().terms(entry["change"])  # balances


@pytest.mark.parametrize(
    ("name", "key"),
    [("PCr", "PCr"), ("Cr", "creatine"), ("G6P", "G6P"), ("PEP", "PEP"), ("Pi", "Pi"), ("glucose_6_phosphate", "G6P"),
     ("Glucose6P", "G6P"), ("phosphocreatine", "PCr"), ("ATP(lumen)", "ATP"), ("acetyl_phosphate", "acetylP"),
     ("phosphoglycerate_3", "PG3"), ("fructose_1_6_bisphosphate", "FBP"), ("dihydroxyacetone_phosphate", "DHAP")],
)  # fmt: skip
def test_common_names_are_aliases(name: str, key: str) -> None:
    found = reference_table().find(name)
    assert found is not None
    assert found.key == key


def test_an_ambiguous_name_is_refused_with_the_choices() -> None:
    assert reference_table().find("G3P") is None
    with pytest.raises(NotInTableError, match=r"GAP \(D-glyceraldehyde 3-phosphate\) or glycerol3P"):
        reference_table().terms({"G3P": -1, "DHAP": 1})


def test_entropies_from_composition_miss_by_what_is_stated() -> None:
    """Every reactant with a known enthalpy that is no convention, left out in turn."""
    known = [r for r in reference_table().stated.values() if r.species[0].enthalpy is not None and not r.entropy_sd
             and not {"creatine", "nicotinamide_coenzyme"} & set(r.atoms) and r.key != "Mg"]  # fmt: skip
    errors = []
    for left_out in known:
        first = left_out.species[0]
        blank = replace(left_out, species=(first._replace(enthalpy=None),))
        guessed = completed([*(r for r in known if r is not left_out), blank], 0.0)[-1]
        assert guessed.entropy_sd == COMPOSITION_SD
        errors.append((guessed.species[0].enthalpy - first.enthalpy) / 298.15)  # type: ignore[operator]
    assert math.sqrt(sum(e * e for e in errors) / len(errors)) == pytest.approx(COMPOSITION_SD, rel=0.15)


# --- transforms


def test_shares_sum_to_one_and_means_are_theirs() -> None:
    known = reference_table()
    at = Potentials.of(HERE, known.magnesium_ion)
    reactant = known.reactants["ATP"]
    shares = species_shares(reactant, at)
    assert sum(shares) == pytest.approx(1, abs=1e-15)
    assert bound(reactant, at).charge == pytest.approx(
        sum(x * s.charge for x, s in zip(shares, reactant.species, strict=True))
    )


def test_a_reactant_of_one_species_has_its_energy() -> None:
    known = reference_table()
    at = Potentials.of(replace(HERE, pH=0.0, ionic_strength_M=0.0), known.magnesium_ion)
    assert transformed_energy(known.reactants["glucose"], at) == pytest.approx(-915.90, abs=1e-9)


def test_pMg_is_needed_only_where_magnesium_binds() -> None:
    known = reference_table()
    dry = replace(HERE, pMg=None)
    known.energy({"glucose": -1, "fructose": 1}, dry)
    with pytest.raises(NotInTableError, match=r"^conditions\.pMg must be stated: the energy depends on it$"):
        known.energy(HYDROLYSIS, dry)
    with pytest.raises(ValueError, match="pMg is needed"):
        transformed_energy(known.reactants["ATP"], Potentials.of(dry, known.magnesium_ion))


def test_no_energy_away_from_25_degC_without_an_enthalpy() -> None:
    species = IonicSpecies(-10.0, None, 0, 1)
    assert species.at_temperature(298.15) == -10.0
    with pytest.raises(ValueError, match="enthalpy"):
        species.at_temperature(310.15)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"ATP": -1, "ADP": 1, "Pi": 1}, "does not balance: 1 H2O is missing on the left"),
        ({"ADP": -1, "Pi": -1, "ATP": 1}, "does not balance: 1 H2O is missing on the right"),
        ({"pyruvate": -1, "lactate": 1}, "+2 electrons; a partner that is reduced or oxidised is missing"),
        ({"ATP": -1, "ADP": 1}, "does not balance (right less left): -3 O, -1 P"),
        ({"creatine": -1, "glucose": 1}, "does not balance (right less left): -1 creatine, +6 C, +6 O"),
        ({"ATP": -1, "H2O": -1, "ADP": 1, "Pi": 1, "H": 1}, "H is set by the pH of [conditions]"),
        ({"Mg": -1, "ATP": 1}, "Mg is set by the pMg of [conditions]"),
        ({"X": -1, "Y": 1}, '"X" is not in the reference table'),
    ],
)
def test_what_cannot_be_looked_up_says_why(change: dict[str, int], message: str) -> None:
    with pytest.raises(NotInTableError) as caught:
        reference_table().energy(change, HERE)
    assert message in str(caught.value)


# --- through the system file


def test_a_reference_energy_is_that_of_the_table_at_the_conditions_of_the_file() -> None:
    found = reaction(FILE)
    expected = reference_table().energy(HYDROLYSIS, Conditions(303.15, 7.4, 2.6, 0.12)).dG0
    assert found.dG0_kJ_per_mol == expected
    assert found.energy_from == "reference"
    assert found.energy_note == "reference table at 30 °C, pH 7.4, pMg 2.6, ionic strength 0.12 M"
    assert found.forward / found.backward == pytest.approx(math.exp(-expected / (8.31446261815324e-3 * 303.15)))
    assert driblet.loads(FILE).warnings == ()


@pytest.mark.parametrize("key", ["pH = 7.4\n", "pMg = 2.6\n", 'ionic_strength = "0.12 M"\n'])
def test_a_condition_that_is_not_stated_is_asked_for(key: str) -> None:
    name = key.split(" =")[0]
    assert problems(changed((key, ""))) == [
        f"f.toml: reactions.{r}.energy: conditions.{name} must be stated: the energy depends on it"
        for r in ("leak", "charging")
    ]


def test_a_reactant_that_is_not_there_is_named() -> None:
    text = changed(("glucose", "tagatose"), ("G6P", "T6P"))
    (line,) = problems(text)
    assert line.startswith('f.toml: reactions.charging.energy: "tagatose" is not in the reference table')
    assert '"T6P" is not in the reference table' in line


OWN = """
[reactants.tagatose]
atoms = { C = 6, O = 6 }
species = [{ energy = "-915.90 kJ/mol", enthalpy = "-1262.19 kJ/mol", charge = 0, hydrogens = 12 }]
[reactants.T6P]
atoms = { C = 6, O = 9, P = 1 }
sd = "0.7 kJ/mol"
species = [
  { energy = "-1763.94 kJ/mol", enthalpy = "-2276.44 kJ/mol", charge = -2, hydrogens = 11 },
  { energy = "-1800.59 kJ/mol", enthalpy = "-2274.64 kJ/mol", charge = -1, hydrogens = 12 },
  { energy = "-2232.94 kJ/mol", charge = 0, hydrogens = 11, magnesiums = 1 },
]
"""


def test_own_reactants_in_the_same_form() -> None:
    found = reaction(changed(("glucose", "tagatose"), ("G6P", "T6P")) + OWN, "charging")
    assert found.dG0_kJ_per_mol == pytest.approx(reaction(FILE, "charging").dG0_kJ_per_mol, abs=0.01)
    assert found.energy_sd_kJ_per_mol == pytest.approx(0.7)


def test_an_own_reactant_takes_the_place_of_the_tables_under_all_its_names() -> None:
    own = OWN.split("[reactants.T6P]")[0].replace("tagatose", "D_glucose").replace("-915.90", "-905.90")
    assert reaction(FILE + own, "charging").dG0_kJ_per_mol == pytest.approx(
        reaction(FILE, "charging").dG0_kJ_per_mol - 10 * 303.15 / 298.15,
        abs=1e-9,  # type: ignore[operator]
    )


def test_without_an_enthalpy_the_entropy_is_estimated_cycles_close_and_it_is_said() -> None:
    own = OWN.replace('enthalpy = "-1262.19 kJ/mol", ', "").replace('enthalpy = "-2276.44 kJ/mol", ', "")
    text = changed(("glucose", "tagatose"), ("G6P", "T6P")) + own
    text += '[reactions.loss]\nequation = "T6P + H2O <=> tagatose + Pi"\nenergy = "reference"\nforward = "1e-6 /s"\n'
    system = driblet.loads(text)
    assert [w for w in system.warnings if w.startswith("reactions.charging.energy: no enthalpy for tagatose, T6P")]
    leak, charging, loss = (r.dG0_kJ_per_mol for r in system.reactions)
    assert charging + loss - leak == pytest.approx(0, abs=1e-9)  # type: ignore[operator]


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("charge = -1, hydrogens = 12", "charge = -1, hydrogens = 11", "reactants.T6P.species[2]: its charge does not go with"),
        ('"-915.90 kJ/mol"', "-915.90", "reactants.tagatose.species[1].energy: a bare number -915.9 has no unit"),
        ('"-915.90 kJ/mol"', '"-915.90 kJ"', "reactants.tagatose.species[1].energy: "),
        ("charge = 0, hydrogens = 12", "charge = 0", "reactants.tagatose.species[1].hydrogens: is missing and has no default"),
        ("atoms = { C = 6, O = 6 }\n", "", "reactants.tagatose.atoms: is missing"),
        ("{ C = 6, O = 6 }", "{ C = 6, H = 12 }", "reactants.tagatose.atoms: H is left out"),
        ("{ C = 6, O = 6 }", "{ C = 6.5 }", "reactants.tagatose.atoms: 6.5 will not do: a whole number"),
        ('sd = "0.7', 'sd = "-0.7', 'reactants.T6P.sd: "-0.7 kJ/mol" is negative'),
        ('sd = "0.7', 'std = "0.7', 'reactants.T6P.std: "std" is not a key here; did you mean "sd"?'),
        ("species = [{", "specie = [{", "reactants.tagatose.species: a list of at least one species is needed"),
    ],
)  # fmt: skip
def test_faults_of_own_reactants(old: str, new: str, message: str) -> None:
    assert old in OWN
    lines = problems(changed(("glucose", "tagatose"), ("G6P", "T6P")) + OWN.replace(old, new))
    assert [line for line in lines if line.startswith(f"f.toml: {message}")], lines


def test_reactants_that_are_no_table() -> None:
    faults: list[Problem] = []
    assert read_reactants([1], "reactants", faults) == []
    assert read_reactants({"X": 3}, "reactants", faults) == []
    assert [p.key for p in faults] == ["reactants", "reactants.X"]


# --- energies stated at other conditions

ELSEWHERE = (
    'energy = { value = "-30.5 kJ/mol", sd = "0.5 kJ/mol", temperature = "25 degC", pH = 7, pMg = 2, '
    'ionic_strength = "0.1 M" }'
)


def test_an_energy_is_carried_to_the_conditions_of_the_file() -> None:
    found = reaction(FILE.replace('energy = "reference"', ELSEWHERE, 1))
    there, here = Conditions(298.15, 7.0, 2.0, 0.1), Conditions(303.15, 7.4, 2.6, 0.12)
    shift = reference_table().energy(HYDROLYSIS, here).dG0 - reference_table().energy(HYDROLYSIS, there).dG0
    assert found.dG0_kJ_per_mol == pytest.approx(-30.5 + shift, abs=1e-12)
    assert found.energy_sd_kJ_per_mol == 0.5
    assert found.energy_note.startswith("-30.50 kJ/mol at 25 °C, pH 7, pMg 2, ionic strength 0.1 M, carried by -")


def test_a_constant_is_carried_from_its_own_temperature() -> None:
    K = math.exp(30.5 / (8.31446261815324e-3 * 298.15))
    as_K = ELSEWHERE.replace("energy = ", "K = ").replace('"-30.5 kJ/mol", sd = "0.5 kJ/mol"', f'"{K!r} M"')
    found = reaction(FILE.replace('energy = "reference"', as_K, 1))
    assert found.energy_from == "K"
    assert found.dG0_kJ_per_mol == pytest.approx(
        reaction(FILE.replace('energy = "reference"', ELSEWHERE, 1)).dG0_kJ_per_mol, abs=1e-9
    )


def test_the_conditions_of_the_file_themselves_change_nothing() -> None:
    same = 'energy = { value = "-33.0 kJ/mol", temperature = "30 degC", pH = 7.4, pMg = 2.6 }'
    found = reaction(FILE.replace('energy = "reference"', same, 1))
    assert (found.dG0_kJ_per_mol, found.energy_note) == (-33.0, "")


def test_what_the_table_cannot_carry_is_used_as_given_with_a_warning() -> None:
    text = changed(("glucose", "tagatose"), ("G6P", "T6P"))
    stated = 'energy = { value = "-16.7 kJ/mol", pH = 7 }'
    text = text.replace('energy = "reference"', stated).replace(stated, 'energy = "reference"', 1)
    system = driblet.loads(text)
    assert system.reactions[1].dG0_kJ_per_mol == -16.7
    assert len(system.warnings) == 1
    assert system.warnings[0].startswith("reactions.charging.energy: used as given, not carried from 30 °C, pH 7, ")
    assert '"tagatose" is not in the reference table' in system.warnings[0]


# --- doubts


@pytest.mark.parametrize(
    ("value", "says"),
    [
        ("-30.5 kJ/mol", None),
        ("-36 kJ/mol", None),
        ("-7.3 kJ/mol", "it looks like kcal/mol written as kJ/mol"),
        ("-30.5 kcal/mol", "it looks like kJ/mol written as kcal/mol"),
        ("30.5 kJ/mol", "it looks like the reaction read the other way round"),
        ("-60 kJ/mol", "check value, sign and unit"),
        ("-7.3 kcal/mol", None),
    ],
)
def test_an_implausible_energy_is_doubted(value: str, says: str | None) -> None:
    warnings = driblet.loads(FILE.replace('"reference"', f'"{value}"', 1)).warnings
    if says is None:
        assert warnings == ()
    else:
        assert len(warnings) == 1
        assert warnings[0].startswith("reactions.leak.energy: ")
        assert warnings[0].endswith(says)


def test_without_stated_conditions_only_what_no_conditions_explain_is_doubted() -> None:
    bare = changed(('pH = 7.4\npMg = 2.6\nionic_strength = "0.12 M"\n', "")).split("[reactions.charging]")[0]
    for value, doubted in (("-30.5", False), ("-45", False), ("-7.3", True)):
        warnings = driblet.loads(bare.replace('"reference"', f'"{value} kJ/mol"')).warnings
        assert bool(warnings) == doubted, value


def test_both_the_measured_and_the_computed_energy_of_pyruvate_kinase_are_plausible_and_a_hydrolysis_is_doubted_too() -> (
    None
):
    text = FILE.replace("glucose", "PEP").replace("G6P", "pyruvate").split("[reactions.charging]")[0]
    for value in ("-31.4", "-23.8"):
        text_pk = (
            text
            + f'[reactions.pk]\nequation = "PEP + ADP <=> ATP + pyruvate"\nenergy = "{value} kJ/mol"\nforward = "1 /M/s"'
        )
        assert driblet.loads(text_pk).warnings == ()
    wrong = text + '[energies.hydrolysis]\n"PEP + H2O <=> pyruvate + Pi" = "-14.8 kJ/mol"\n'
    (warning,) = driblet.loads(wrong).warnings
    assert warning.startswith('energies.hydrolysis."PEP + H2O <=> pyruvate + Pi": -14.8 kJ/mol is implausible')


@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ('"0.12 M"', '"0.5 M"', "conditions.ionic_strength: 0.5 M is above 0.35 M"),
        ('"30 degC"', '"65 degC"', "conditions.temperature: 65 degC is outside 0 to 50 degC"),
    ],
)
def test_conditions_beyond_the_models_range_are_doubted_once(old: str, new: str, says: str) -> None:
    warnings = driblet.loads(changed((old, new))).warnings
    assert len(warnings) == 1
    assert warnings[0].startswith(says)


# --- total magnesium

TOTAL = ("pMg = 2.6\n", 'total_magnesium = "6 mM"\n')


def test_free_magnesium_is_solved_at_the_initial_composition() -> None:
    system = driblet.loads(changed(TOTAL))
    known = reference_table()
    load = [(known.reactants[k], c) for k, c in (("ATP", 4e-3), ("ADP", 1e-4), ("Pi", 5e-3), ("glucose", 2e-3))]
    bare = Conditions(303.15, 7.4, None, 0.12)
    assert system.conditions.pMg == pytest.approx(solved_pMg(6e-3, load, bare, known.magnesium_ion), abs=1e-9)
    assert system.conditions.total_magnesium_M == pytest.approx(6e-3)
    expected = known.energy(HYDROLYSIS, replace(bare, pMg=system.conditions.pMg)).dG0
    assert system.reactions[0].dG0_kJ_per_mol == pytest.approx(expected, abs=1e-9)


def test_copies_and_held_species_bind_too() -> None:
    as_copies = changed(
        TOTAL, ('ATP = "4 mM"', 'ATP = "2408857 copies"'), ('Pi = "5 mM"', 'Pi = { amount = "5 mM", held = true }')
    )
    pMg = driblet.loads(as_copies).conditions.pMg
    assert pMg == pytest.approx(driblet.loads(changed(TOTAL)).conditions.pMg, abs=1e-6)


def test_no_magnesium_at_all() -> None:
    assert driblet.loads(changed((TOTAL[0], 'total_magnesium = "0 mM"\n'))).conditions.pMg == 14.0


@pytest.mark.parametrize(
    ("pairs", "message"),
    [
        ([(TOTAL[0], TOTAL[0] + TOTAL[1])], "conditions.total_magnesium: pMg is what it would be solved for; give one of them"),
        ([(TOTAL[0], 'total_magnesium = "80 mM"\n')], "conditions.total_magnesium: cannot be met: 80 mM would leave "),
        ([(TOTAL[0], 'total_magnesium = "-1 mM"\n')], 'conditions.total_magnesium: "-1 mM" is negative'),
        ([TOTAL, ("pH = 7.4\n", "")], "conditions.total_magnesium: needs conditions.pH: what binds magnesium depends on it"),
        ([("pH = 7.4", "pH = 25")], "conditions.pH: 25 is not a pH: it lies between 0 and 14"),
        ([('"0.12 M"', '"-0.1 M"')], 'conditions.ionic_strength: "-0.1 M" is negative'),
        ([("pMg = 2.6", 'pMg = "2.6"')], "conditions.pMg: '2.6' is not a pMg"),
        ([("pMg = 2.6", 'pMg = 2.6\npH_scale = "NBS"')], "conditions.pH_scale: \"NBS\" is not known here"),
        ([("pMg = 2.6", 'pMg = 2.6\nbuffer = { name = "HEPS", concentration = "1 mM" }')],
         'conditions.buffer.name: "HEPS" is not in the reference table (MES, '),
        ([("pMg = 2.6", 'pMg = 2.6\nbuffer = "HEPES"')], "conditions.buffer: a table of keys is needed"),
    ],
)  # fmt: skip
def test_bad_conditions(pairs: list[tuple[str, str]], message: str) -> None:
    lines = problems(changed(*pairs))
    assert len([line for line in lines if line.startswith(f"f.toml: {message}")]) == 1, lines
    assert len(lines) == 1 or "pH" in message  # one fault, one line; without a pH the energies lack it too


def test_more_magnesium_than_any_solution_holds() -> None:
    with pytest.raises(CannotBeMetError, match="more magnesium than any solution holds"):
        solved_pMg(100.0, [], HERE, reference_table().magnesium_ion)


def test_the_pH_scale_of_the_file_is_heeded() -> None:
    meter, concentration = (
        reaction(changed(("pMg = 2.6\n", f'pMg = 2.6\npH_scale = "{scale}"\n'))).dG0_kJ_per_mol
        for scale in ("activity", "concentration")
    )
    conditions = Conditions(303.15, 7.45, 2.6, 0.12)  # half way between the two in pH
    protons = reference_table().uptake(HYDROLYSIS, conditions).hydrogens
    per_proton = ion_energy(303.15, 0.12)
    assert per_proton == pytest.approx(0.66, abs=0.01)
    assert concentration - meter == pytest.approx(protons * per_proton, abs=0.01)  # type: ignore[operator]
