"""Enzymes in the system file: what users measure, what enzymes share, what the run file tells, and what audit prints."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import driblet
from driblet.commands.main import main
from driblet.loading import additions_of, prepare, volumes
from driblet.system.mechanisms import measured_constants, turnover_rates
from driblet_analysis.audit import audit_facts
from tests.faults.test_bad_enzymes import TEXT
from tests.texts import changed

KCAT, AMOUNT, KM = 'kcat = "120 /s"', 'amount = "80 nM"', 'KM = { ATP = "0.2 mM", sugar = "0.1 mM" }'


def kinase(*pairs: tuple[str, str]) -> driblet.System:
    return driblet.loads(changed(TEXT, *pairs))


def copies(system: driblet.System, name: str = "kinase") -> float:
    return next(s for s in system.species if s.name == name).mean_copies(system.compartment.omega)


def test_a_mass_concentration_in_a_vesicle() -> None:
    """20 ug/mL of 82 kDa in a vesicle of 200 nm inner diameter is 0.6 copies: 20e-3 g/L / 82e3 g/mol * N_A * 4.19e-18 L."""
    system = kinase(
        (AMOUNT, 'amount = "20 ug/mL"\nmolar_mass = "82 kDa"'), ('volume = "0.1 fL"', 'diameter = "200 nm"')
    )
    by_hand = 20e-3 / 82e3 * 6.02214076e23 * (np.pi / 6 * (200e-9) ** 3 * 1e3)
    assert copies(system) == pytest.approx(by_hand, rel=1e-12)
    assert round(copies(system), 1) == 0.6


def test_units_of_activity() -> None:
    """1 U = 1 umol/min (IUPAC; Enzyme Commission 1964): 150 U/mg of 82 kDa is 205 turnovers a second."""
    activity = 'activity = "150 U/mg"\ndirection = "forward"\nmolar_mass = "82 kDa"'
    system = kinase((KCAT, activity))
    by_hand = 150e-6 / 60 / 1e-3 * 82e3
    assert system.enzymes[0].activities[0].kcat_per_s == pytest.approx(by_hand, rel=1e-12)
    assert by_hand == pytest.approx(205.0)
    in_katal = kinase((KCAT, activity.replace("150 U/mg", "2.5 ukat/mg")))
    assert in_katal.enzymes[0].activities[0].kcat_per_s == pytest.approx(by_hand, rel=1e-12)


def test_an_active_fraction_carries_the_whole_activity() -> None:
    """Half of the protein is dead: half as many copies, each twice as fast, the same flux as the activity per mg says."""
    activity = 'activity = "150 U/mg"\ndirection = "forward"\nmolar_mass = "82 kDa"'
    whole, half = (kinase((KCAT, f"{activity}\nactive_fraction = {f}")) for f in (1.0, 0.5))
    assert copies(half) == pytest.approx(0.5 * copies(whole), rel=1e-12)
    flux = [copies(s) * (s.enzymes[0].activities[0].kcat_per_s or 0.0) for s in (whole, half)]
    assert flux[0] == pytest.approx(flux[1], rel=1e-12)
    stated = kinase((KCAT, f"{KCAT}\nactive_fraction = 0.5"))
    assert stated.enzymes[0].activities[0].kcat_per_s == 120.0


def test_constants_measured_backward() -> None:
    """The same enzyme from its reverse direction: the steps give back what is stated, and the energy is the reaction's."""
    backward = changed(
        TEXT,
        (KCAT, f'{KCAT}\ndirection = "backward"'),
        (KM, 'KM = { sugarP = "1 mM", ADP = "0.3 mM" }'),
        ('binds = ["ATP", "sugar"]', 'binds = ["ADP", "sugarP"]'),
        ('releases = ["sugarP", "ADP"]', 'releases = ["sugar", "ATP"]'),
        ('kcat = "0.01 /s"', 'kcat = "0.01 /s"\nKd = { Pi = "10 mM" }'),
    )
    system = driblet.loads(backward)
    enzyme = system.enzymes[0]
    found = measured_constants(enzyme, enzyme.activity("relay"))
    assert found.kcat_per_s == pytest.approx(120.0, rel=1e-9)
    assert pytest.approx((0.3e-3, 1e-3), rel=1e-9) == found.KM_M
    # at the equilibrium of the reaction nothing turns over, and beyond it the enzyme runs the other way
    K = system.reaction("relay").K
    at = {"ATP": 1e-3, "sugar": 1e-3, "ADP": 1e-3, "sugarP": K * 1e-3, "Pi": 5e-3, "drug": 0.0}
    here = kinase_alone(enzyme, at)
    assert abs(here) < 1e-9
    assert kinase_alone(enzyme, {**at, "sugarP": 0.0}) > 0 > kinase_alone(enzyme, {**at, "sugar": 0.0})


def kinase_alone(enzyme: driblet.system.mechanisms.Enzyme, at: dict[str, float]) -> float:
    from dataclasses import replace

    main = enzyme.activity("relay")
    only = replace(enzyme, steps=tuple(s if k in main.steps else replace(s, forward=0.0, backward=0.0) for k, s in
                                       enumerate(enzyme.steps)))  # fmt: skip
    return turnover_rates(only, at)["relay"]


def test_a_side_activity_shares_the_binding_of_its_substrate() -> None:
    enzyme = kinase().enzymes[0]
    main, side = enzyme.activities
    assert main.substrate_steps[0] == side.substrate_steps[0]
    assert main.product_steps[1] == side.product_steps[1]  # ADP leaves last in both
    assert len({step.name for step in enzyme.steps}) == len(enzyme.steps) == 8
    found = measured_constants(enzyme, side)
    assert found.kcat_per_s == pytest.approx(0.01, rel=1e-9)
    assert found.KM_M[0] == pytest.approx(0.2e-3, rel=0.01)  # binding far faster than the side turnover: its K_M is Kd


def test_two_reactions_share_the_first_half_of_a_ping_pong() -> None:
    """Nucleoside diphosphate kinase: one phosphoenzyme serves two acceptors, and each reaction keeps its K'."""
    text = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "0.1 fL"
[species]
ATP = "1 mM"
ADP = "0 copies"
GDP = "1 mM"
GTP = "0 copies"
UDP = "1 mM"
UTP = "0 copies"
[reactions.toG]
equation = "ATP + GDP <=> ADP + GTP"
K = 1.1
[reactions.toU]
equation = "ATP + UDP <=> ADP + UTP"
K = 0.8
[enzymes.ndk]
amount = "3 copies"
catalyses = "toG"
mechanism = "ping pong bi bi"
kcat = "500 /s"
KM = { ATP = "0.3 mM", GDP = "0.05 mM" }
[enzymes.ndk.also.toU]
mechanism = "ping pong bi bi"
kcat = "300 /s"
KM = { UDP = "0.2 mM" }
[run]
duration = "0.1 s"
replicates = 10
"""
    system = driblet.loads(text)
    enzyme = system.enzymes[0]
    assert "ndk.ATP-ADP" in {state.name for state in enzyme.states}
    for activity, kcat, KM, K in zip(enzyme.activities, (500, 300), (0.05e-3, 0.2e-3), (1.1, 0.8), strict=True):
        found = measured_constants(enzyme, activity)
        assert found.kcat_per_s == pytest.approx(kcat, rel=1e-9)
        assert found.KM_M[1] == pytest.approx(KM, rel=1e-9)
        ratio = np.prod([enzyme.steps[k].forward / enzyme.steps[k].backward for k in activity.steps])
        assert ratio == pytest.approx(K, rel=1e-12)
    run = driblet.run(system)
    made = run.counts[:, -1, run.species.index("GTP")] + run.counts[:, -1, run.species.index("ndk.GTP")]
    assert made.sum() > 0
    with pytest.raises(driblet.InputError, match="more than the half it shares allows"):
        driblet.loads(changed(text, ('"300 /s"', '"1200 /s"')))


def test_batches_on_one_reaction_add_up() -> None:
    second = (
        '[enzymes.old]\namount = "40 nM"\ncatalyses = "relay"\nmechanism = "random bi bi"\nkcat = "30 /s"\n'
        'KM = { ATP = "0.5 mM", sugar = "0.2 mM" }\nhalf_life = "2 h"\n[additions.pulse]'
    )
    system = kinase(("[additions.pulse]", second))
    facts = audit_facts(system)
    rates = next(r for r in facts["reactions"] if r["name"] == "relay")["by_enzymes_per_s"]
    assert rates.keys() == {"kinase", "old"}
    assert all(rate > 0 for rate in rates.values())
    run = driblet.run(system, replicates=5, seed=4)
    both = run.turnovers("relay")
    assert (both == run.turnovers("relay", "kinase") + run.turnovers("relay", "old")).all()
    assert both[:, -1].min() > 0
    with pytest.raises(KeyError):
        run.turnovers("relay", "nobody")
    with pytest.raises(KeyError):
        run.turnovers("nothing")


def test_turnovers_account_for_every_molecule() -> None:
    """sugarP free and bound is what the enzyme turned over less what was lost; an uncatalysed path counts as well."""
    system = kinase(("[additions.pulse]", '[readouts]\nmade = "total(sugarP)"\nADPs = "total(ADP)"\n[additions.pulse]'))
    run = driblet.run(system, replicates=20, seed=2)
    # the central complex with sugarP is behind the step that counts, so totals and turnovers agree at every sample
    lost = run.firings_forward[:, :, run.reactions.index("loss")]
    np.testing.assert_array_equal(run.readout("made"), run.turnovers("relay") - lost)
    np.testing.assert_array_equal(run.readout("ADPs"), run.turnovers("relay") + run.turnovers("leak"))
    assert run.turnovers("leak", "kinase").shape == (20, len(run.time_s))


def test_an_inhibitor_slows_the_enzyme() -> None:
    enzyme = kinase().enzymes[0]
    here = {"ATP": 2e-4, "sugar": 1e-3, "ADP": 0.0, "sugarP": 0.0, "Pi": 5e-3}
    free, blocked = (turnover_rates(enzyme, {**here, "drug": c})["relay"] for c in (0.0, 5e-6))
    assert 0.6 < blocked / free < 0.75  # K_M of ATP doubles: v falls from 1/2 to 1/3 of kcat


def test_one_value_for_many_keys(tmp_path: Path) -> None:
    text = changed(
        TEXT,
        ('loaded = "2 mM"', 'loaded = "2 mM"\nspeed = "120 /s"\nshare = 0.5\nunused = "1 mM"'),
        (KCAT, 'kcat = "speed"\nactive_fraction = "share"'),
        ('amount = "1 mM"\n[run]', 'amount = "loaded"\n[run]'),
    )
    system = driblet.loads(text)
    assert system.enzymes[0].activities[0].kcat_per_s == 120.0
    assert system.enzymes[0].active_fraction == 0.5
    assert system.additions[0].concentration_M == pytest.approx(2e-3)
    assert any("unused is used by no key" in warning for warning in system.warnings)
    # a name is replaced only where a quantity belongs: a species may share it
    driblet.loads(changed(TEXT, ('loaded = "2 mM"', 'ATP = "2 mM"'), ('ATP = "loaded"', 'ATP = "ATP"')))


def test_sizes_from_a_column(tmp_path: Path) -> None:
    """A run file holds the sizes it was made with, and each compartment has one of them."""
    (tmp_path / "sizes.csv").write_text("id,diameter\n1,100\n2,120\n3,140\n")
    path = tmp_path / "mine.toml"
    size = 'diameter = { csv = "sizes.csv", column = "diameter", unit = "nm" }\nwall = "4 nm"'
    path.write_text(changed(TEXT, ('volume = "0.1 fL"', size)))
    system = driblet.load(path)
    inner = np.pi / 6 * (np.array([92, 112, 132]) * 1e-9) ** 3 * 1e3
    assert system.compartment.sizes_L == pytest.approx(tuple(inner), rel=1e-12)
    assert system.compartment.volume_L == pytest.approx(inner[1], rel=1e-12)
    uniform = (np.arange(300) + 0.5) / 300
    drawn = volumes(system.compartment, uniform)
    assert (np.diff(drawn) >= 0).all()
    assert [int((drawn == v).sum()) for v in system.compartment.sizes_L] == [100, 100, 100]
    run = driblet.run(system, tmp_path / "run.h5", replicates=40)
    (tmp_path / "sizes.csv").unlink()
    with driblet.Run(tmp_path / "run.h5") as again:
        assert again.system.compartment.sizes_L == system.compartment.sizes_L
        assert np.isin(np.round(again.volume_L * 1e24), np.round(inner * 1e24)).all()
    run.close()
    with pytest.raises(driblet.InputError, match="cannot be read"):
        driblet.load(path)


def test_a_different_file_of_sizes_is_a_different_run(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text(changed(TEXT, ('volume = "0.1 fL"', 'volume = { csv = "v.csv", unit = "aL" }')))
    texts = []
    for content in ("v\n90\n110\n", "v\n90\n111\n", 'v\n90\n"111"\n\\ \\\\ """\n'.replace('\\ \\\\ """\n', "")):
        (tmp_path / "v.csv").write_text(content)
        texts.append(driblet.load(path).text)
    assert texts[0] != texts[1]
    for text in texts:
        assert len(driblet.loads(text).compartment.sizes_L) == 2


def test_additions_rise_with_their_mean_and_do_not_touch_the_load() -> None:
    text = changed(TEXT, ('amount = "1 mM"\n[run]', 'amount = "1 uM"\nloading = "poisson"\n[run]'))
    more = changed(text, ('amount = "1 uM"\nloading', 'amount = "2 uM"\nloading'))
    omega = np.full(200, driblet.loads(text).compartment.omega)
    few, many = (additions_of(driblet.loads(t), 3, range(200), omega)[:, 0] for t in (text, more))
    assert (many >= few).all()
    assert few.mean() == pytest.approx(1e-6 * omega[0], abs=4 * np.sqrt(1e-6 * omega[0] / 200))
    none = changed(text, ('[additions.pulse]\nat = "1 s"\nspecies = "ATP"\namount = "1 uM"\nloading = "poisson"\n', ""))
    with_it, without = (prepare(driblet.loads(t), 3, range(50)) for t in (text, none))
    np.testing.assert_array_equal(with_it.counts, without.counts)


def test_an_addition_comes_at_its_time_and_bits_do_not_depend_on_packing() -> None:
    system = driblet.loads(changed(TEXT, ("[run]", '[readouts]\nall = "total(ATP) + total(ADP)"\n[run]')))
    run = driblet.run(system, replicates=9, sample_every=0.25, seed=8)
    added = round(1e-3 * system.compartment.omega)
    total = run.readout("all")
    before = run.time_s < 1.0
    np.testing.assert_array_equal(total[:, before], total[:, :1].repeat(before.sum(), axis=1))
    np.testing.assert_array_equal(total[:, ~before], total[:, :1].repeat((~before).sum(), axis=1) + added)
    for other in (
        driblet.run(system, replicates=4, sample_every=0.25, seed=8, threads=1),
        driblet.run(system, replicates=2, sample_every=0.5, seed=8),
    ):
        n = len(other.replicate)
        same = np.isin(run.time_s, other.time_s)
        np.testing.assert_array_equal(other.counts, run.counts[:n, same])
        np.testing.assert_array_equal(other.firings_forward, run.firings_forward[:n, same])


def test_a_run_asked_to_be_shorter_ends_before_its_additions() -> None:
    run = driblet.run(driblet.loads(TEXT), duration=0.5, sample_every=0.1, replicates=3)
    assert run.last_addition_s == 0
    np.testing.assert_array_equal(run.class_counts(), run.initial_counts())
    ATP = run.counts[:, :, run.species.index("ATP")]
    assert (np.diff(ATP, axis=1) <= 8).all()


def test_an_addition_between_samples_and_into_an_empty_compartment() -> None:
    """Nothing can fire before the pulse; afterwards the reaction runs to its end."""
    text = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "0.1 fL"
[species]
A = "0 copies"
B = "0 copies"
[reactions.turn]
equation = "A <=> B"
K = 1e6
forward = "50 /s"
[additions.pulse]
at = "0.37 s"
species = "A"
amount = "12 copies"
[additions.more]
at = "0.37 s"
species = "A"
amount = "3 copies"
[run]
duration = "1 s"
sample_every = "0.25 s"
replicates = 4
"""
    run = driblet.run(driblet.loads(text))
    total = run.counts.sum(axis=2)
    np.testing.assert_array_equal(total[0], [0, 0, 15, 15, 15])
    assert (run.counts[:, -1, 1] == 15).all()
    np.testing.assert_array_equal(run.class_counts(), run.counts[:, 2])


def test_free_and_total_in_readouts_and_names_of_enzymes() -> None:
    system = kinase(
        (
            "[additions.pulse]",
            '[readouts]\nidle = "kinase / total(kinase)"\nbound = "total(drug) - drug"\n[additions.pulse]',
        )
    )
    run = driblet.run(system, replicates=6, seed=1)
    idle = run.readout("idle")
    column = run.species.index("kinase")
    states = [i for i, s in enumerate(system.free_species) if s.enzyme == "kinase"]
    np.testing.assert_allclose(idle, run.counts[:, :, column] / run.counts[:, :, states].sum(axis=2))
    np.testing.assert_array_equal(run.readout("bound"), run.counts[:, :, run.species.index("kinase.drug")])


def test_audit_shows_stated_and_recomputed_constants(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "mine.toml"
    path.write_text(changed(TEXT, (AMOUNT, 'amount = "0.3 copies"\nloading = "poisson"')))
    assert main(["audit", str(path), "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    (enzyme,) = facts["enzymes"]
    assert enzyme["share_without"] == pytest.approx(np.exp(-0.3), rel=1e-12)
    relay = enzyme["reactions"][0]
    assert relay["kcat_per_s"]["stated"] == 120.0
    assert relay["kcat_per_s"]["from_steps"] == pytest.approx(120.0, rel=1e-9)
    assert [k["from_steps"] for k in relay["KM_M"]] == pytest.approx([2e-4, 1e-4], rel=1e-9)
    assert {r["name"] for r in facts["reactions"]} == {"relay", "leak", "loss"}
    assert {s["name"] for s in facts["species"]} == {"ATP", "ADP", "sugar", "sugarP", "Pi", "drug"}
    laws = [law["weights"] for law in facts["conservation_laws"]]
    assert {"kinase": 1} in laws
    assert {"drug": 1} in laws
    assert main(["audit", str(path)]) == 0
    screen = capsys.readouterr().out
    assert "74.1 %" in screen
    assert "K_M ATP (mM)" in screen
    assert "uncatalysed, in parallel" in screen  # leak has a rate of its own beside the enzyme's
    assert "added at 1 s: 60,221 copies of ATP" in screen
    assert max(len(line) for line in screen.splitlines()) <= 100


def test_an_emergent_cycle_is_told_in_reactions_of_the_file() -> None:
    """ATP, ADP and Pi held: the enzyme's cycle shows as leak and not as its steps."""
    system = kinase(
        ('ATP = "loaded"', 'ATP = { amount = "loaded", held = true }'),
        ('ADP = "0 copies"', 'ADP = { amount = "0.1 mM", held = true }'),
        ('[additions.pulse]\nat = "1 s"\nspecies = "ATP"\namount = "1 mM"', ""),
    )
    cycles = audit_facts(system)["emergent_cycles"]
    assert cycles
    for cycle in cycles:
        assert cycle["reactions"].keys() <= {"relay", "leak", "loss"}
