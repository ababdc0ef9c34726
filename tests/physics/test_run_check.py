"""The check can fail, and does not fail on correct runs.

Each ready system without drive is held against its own energies (consistent) and against energies half a kilojoule off in
one reaction (inconsistent): the broken twin. False-alarm rate of one check: 5 %, measured over seeds below; seeds here are
fixed. Other twins: an engine that skips firings, a wrong stoichiometric number, a sampler with a wrong factorial.
"""

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import binom

import driblet
from driblet.network import Network
from driblet_analysis import occupancy_check
from driblet_analysis.firing_check import closed_estimates
from driblet_analysis.run_check import FALSE_ALARM_RATE, check_run

CONFIGS = Path(__file__).parents[2] / "configs"
CLOSED = """
[conditions]
temperature = "25 degC"
[compartments.vesicle]
volume = "0.5 aL"
[species]
ATP = "40 copies"
sugar = "30 copies"
ADP = "0 copies"
sugarP = "0 copies"
[reactions.transfer]
equation = "ATP + sugar <=> ADP + sugarP"
energy = "-5 kJ/mol"
forward = "20000 /M/s"
[run]
replicates = 60
duration = "12 s"
sample_every = "1 s"
"""
HELD = """
[conditions]
temperature = "25 degC"
[compartments.vesicle]
volume = "1 aL"
[species]
source = { amount = "40 uM", held = true }
A = "0 copies"
B = "0 copies"
[reactions.entry]
equation = "source <=> A"
K = 0.5
forward = "1 /s"
[reactions.turn]
equation = "A <=> B"
energy = "-1 kJ/mol"
forward = "2 /s"
[run]
replicates = 60
duration = "40 s"
sample_every = "2 s"
"""
LOADED = """
[conditions]
temperature = "25 degC"
[compartments.vesicle]
diameter = { median = "110 nm", cv = 0.15 }
[species]
A = "60 uM"
B = "40 uM"
C = "0 copies"
[reactions.binding]
equation = "A + B <=> C"
Kd = "30 uM"
forward = "20000 /M/s"
[run]
replicates = 60
duration = "16 s"
sample_every = "2 s"
loading = "poisson"
"""
# system, one energy of it, the same off by 0.5 kJ/mol
TWINS = [
    ("loaded_vesicles", 'energy   = "-4 kJ/mol"', 'energy   = "-4.5 kJ/mol"'),
    ("six_and_six", 'K        = 10\nforward  = "1 /s"', 'energy = "-6.208 kJ/mol"\nforward  = "1 /s"'),
    ("dimer", 'Kd       = "2 uM"', 'Kd       = "2.4468 uM"'),  # exp(0.5/RT) at 25 degC = 1.2234
    ("supply_and_decay", "K        = 1", "K        = 1.2234"),
    ("uphill_transfer", '"-43.0 kJ/mol"', '"-43.5 kJ/mol"'),
    ("driven_cycle", '"-24 kJ/mol"', None),
]


@pytest.mark.parametrize(("name", "right", "wrong"), [t for t in TWINS if t[2]])
def test_half_a_kilojoule_is_exposed_and_the_right_energy_is_not(name: str, right: str, wrong: str) -> None:
    text = (CONFIGS / f"{name}.toml").read_text("utf-8")
    assert right in text
    with driblet.run(driblet.loads(text)) as run:
        assert check_run(run).verdict == "consistent"
        twin = check_run(run, driblet.loads(text.replace(right, wrong)))
    assert twin.verdict == "inconsistent", twin.reason


def test_a_driven_system_is_held_against_its_firings() -> None:
    """Energies of two reactions off by 0.5 kJ/mol in opposite senses, so that the cycle still closes."""
    text = (CONFIGS / "driven_cycle.toml").read_text("utf-8")
    wrong = text.replace('energy   = "-6 kJ/mol"', 'energy   = "-6.5 kJ/mol"').replace(
        'energy   = "-18 kJ/mol"', 'energy   = "-17.5 kJ/mol"'
    )
    with driblet.run(driblet.loads(text)) as run:
        result = check_run(run)
        twin = check_run(run, driblet.loads(wrong))
    assert result.verdict == "consistent"
    assert result.reason.startswith("driven: no equilibrium to hold it against")
    assert twin.verdict == "inconsistent"
    assert twin.reason.startswith("driven")
    assert "turning: energy" in twin.reason


def test_a_reaction_without_reverse_firings_is_blind() -> None:
    with driblet.run(driblet.load(CONFIGS / "driven_cycle.toml"), duration=2.0) as run:
        rows = {row.name: row for row in check_run(run).energies}
    assert rows["release"].detectable_kJ_per_mol is None
    assert rows["turning"].detectable_kJ_per_mol is not None


def test_the_exact_ratio_among_six_and_six() -> None:
    """13.3 where K' = 10: enumeration of the seven states by hand, weights 10^k / (k!)^2 ((6 - k)!)^2."""
    from math import factorial

    weights = [10**k / (factorial(k) * factorial(6 - k)) ** 2 for k in range(7)]
    mean = sum(k * w for k, w in enumerate(weights)) / sum(weights)
    by_hand = (mean / (6 - mean)) ** 2
    assert by_hand == pytest.approx(13.3, abs=0.05)
    with driblet.run(driblet.load(CONFIGS / "six_and_six.toml")) as run:
        ratios = {row.reaction: row for row in check_run(run).ratios}
    assert ratios["transfer"].expected == pytest.approx(by_hand, rel=1e-12)
    assert abs(ratios["transfer"].measured - by_hand) < 4 * ratios["transfer"].standard_error
    assert ratios["opening"].expected == pytest.approx(10.0, rel=1e-12)


def test_a_run_that_has_not_relaxed_cannot_answer() -> None:
    with driblet.run(driblet.loads(CLOSED), duration=0.3, sample_every=0.01) as run:
        result = check_run(run)
    assert result.verdict == "cannot answer"
    assert re.search(r"too short.*run about [\d.]+ times longer", result.reason)
    assert all(row.p > FALSE_ALARM_RATE for row in result.tests)  # its firings were tested all the same


def test_too_few_compartments_cannot_answer() -> None:
    with driblet.run(driblet.loads(CLOSED), replicates=1) as run:
        assert check_run(run).verdict == "cannot answer"


def test_a_frozen_system_cannot_answer() -> None:
    frozen = CLOSED.replace('"40 copies"', '"0 copies"')
    with driblet.run(driblet.loads(frozen)) as run:
        result = check_run(run)
    assert result.verdict == "cannot answer"
    assert "no reaction can run" in result.reason


def test_firings_that_are_skipped_are_exposed() -> None:
    """Broken twin: an engine that loses 1 % of the firings of one channel (they are taken out of the sums)."""
    with driblet.run(driblet.loads(CLOSED.replace("20000 /M/s", "400000 /M/s")), replicates=200) as run:
        assert check_run(run).verdict == "consistent"
        sums = run.sums
        assert sums is not None
        lossy = sums.window_firings.copy()
        lossy[:, :, 0] = np.round(lossy[:, :, 0] * 0.99)
        run.__dict__["sums"] = replace(sums, window_firings=lossy)
        assert check_run(run).verdict == "inconsistent"


def test_a_wrong_stoichiometric_number_is_exposed() -> None:
    """Broken twin: what was simulated is A <=> B, what it is held against is 2 A <=> 2 B at the same rates and energies."""
    one = CLOSED.replace("ATP + sugar <=> ADP + sugarP", "ATP <=> ADP").replace("20000 /M/s", "2 /s")
    with driblet.run(driblet.loads(one)) as run:
        assert check_run(run).verdict == "consistent"
        two = driblet.loads(one.replace("ATP <=> ADP", "2 ATP <=> 2 ADP").replace('"2 /s"', '"2 /M/s"'))
        with pytest.raises(driblet.InputError, match="differ from those of the run"):
            check_run(run, two)
        system = run.system
        run.__dict__["system"] = replace(two, species=system.species)
        assert check_run(run).verdict == "inconsistent"


def test_sampled_laws_serve_where_enumeration_ends(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(occupancy_check, "count_law", lambda *_: None)
    with driblet.run(driblet.loads(LOADED)) as run:
        assert check_run(run).verdict == "consistent"
        twin = check_run(run, driblet.loads(LOADED.replace('"30 uM"', '"33 uM"')))
    assert twin.verdict == "inconsistent"


def test_a_sampler_with_a_wrong_factorial_is_exposed(monkeypatch: pytest.MonkeyPatch) -> None:
    """Broken twin: weights c^n without 1/n!, which is what log weights of one-too-small factorials amount to."""
    from driblet_analysis.references import metropolis

    network = Network.of(driblet.loads(CLOSED))
    start, active = np.array([40, 30, 0, 0]), np.array([True])
    ln_mean = np.array([0.0, 0.0, 1.0085, 1.0085])
    right = metropolis.metropolis(network, start, ln_mean, active, 400, 1).mean()
    monkeypatch.setattr(metropolis, "_sample", _sample_without_factorials)
    wrong = metropolis.metropolis(network, start, ln_mean, active, 400, 1).mean()
    assert abs(wrong[2] - right[2]) > 3.0


def _sample_without_factorials(state, need, change, ln_mean, reach, out, between, burn, seed, table):  # type: ignore[no-untyped-def]
    generator = np.random.default_rng(seed)
    for sample in range(len(out)):
        for _ in range(40):
            m = generator.integers(len(need))
            if (state >= need[m]).all() and np.log(generator.random()) < change[m] @ ln_mean:
                state += change[m]
        out[sample] = state


@pytest.mark.parametrize("against", ["species", "volume"])
def test_against_another_system_is_refused(against: str) -> None:
    other = CLOSED.replace("sugar ", "honey ") if against == "species" else CLOSED.replace("0.5 aL", "0.6 aL")
    with driblet.run(driblet.loads(CLOSED), replicates=24) as run, pytest.raises(driblet.InputError, match="--against"):
        check_run(run, driblet.loads(other, "other.toml"))


def test_closed_estimates_are_generalised_least_squares() -> None:
    """Two parallel reactions (errors 1 and 2) and one alone: the shared energy is the weighted mean (by hand)."""
    shift, error = np.array([1.0, 3.0, 0.5]), np.array([1.0, 2.0, 0.1])
    estimate, spread = closed_estimates(np.array([[1.0, -1.0, 0.0]]), shift, error)
    assert estimate == pytest.approx([1.4, 1.4, 0.5])
    assert spread == pytest.approx([np.sqrt(0.8), np.sqrt(0.8), 0.1])
    blind = closed_estimates(np.zeros((0, 3)), shift, np.array([1.0, np.inf, 0.1]))
    assert np.isinf(blind[1][1])
    lent = closed_estimates(np.array([[1.0, -1.0, 0.0]]), shift, np.array([1.0, np.inf, 0.1]))
    assert lent[1][1] == pytest.approx(1.0)  # the parallel reaction shows it


SYSTEMS = {"closed": CLOSED, "held": HELD, "loaded": LOADED}


def _false_alarms(text: str, seeds: range) -> tuple[int, int]:
    system = driblet.loads(text)
    verdicts = [check_run(driblet.run(system, seed=seed)).verdict for seed in seeds]
    return verdicts.count("inconsistent"), verdicts.count("cannot answer")


@pytest.mark.parametrize("name", list(SYSTEMS))
def test_false_alarm_rate(name: str) -> None:
    """Of 40 correct runs no more are called inconsistent than 5 % allows; this test itself fails wrongly in 0.1 %."""
    alarms, unanswered = _false_alarms(SYSTEMS[name], range(100, 140))
    assert alarms <= binom.isf(0.001, 40, FALSE_ALARM_RATE)
    assert unanswered <= 4  # the drift test calls 1 % not stationary


@pytest.mark.long
@pytest.mark.parametrize("name", list(SYSTEMS))
def test_false_alarm_rate_over_300_runs(name: str) -> None:
    """At most 5 % and two binomial standard errors."""
    alarms, unanswered = _false_alarms(SYSTEMS[name], range(1000, 1300))
    print(f"{name}: {alarms} of 300 called inconsistent, {unanswered} not answered")
    assert alarms <= 300 * 0.05 + 2 * np.sqrt(300 * 0.05 * 0.95)


POWER_TWINS = {
    "closed": ('"-5 kJ/mol"', '"{} kJ/mol"', -5.0),
    "held": ('"-1 kJ/mol"', '"{} kJ/mol"', -1.0),
    "loaded": ('Kd = "30 uM"', 'energy = "{} kJ/mol"', -25.8176),
}


@pytest.mark.long
@pytest.mark.parametrize("name", list(SYSTEMS))
def test_power_and_the_stated_detectable_error(name: str) -> None:
    """0.5 kJ/mol is exposed in 90 % of runs that state at most 0.5; the error exposed in 90 % is the stated one to 20 %."""
    text = SYSTEMS[name]
    right, form, energy = POWER_TWINS[name]
    stated, exposed = [], {0.8: 0, 1.0: 0, 1.2: 0, "half": 0}
    runs = 100
    for seed in range(runs):
        with driblet.run(driblet.loads(text), seed=3000 + seed) as run:
            detectable = check_run(run).energies[-1].detectable_kJ_per_mol
            assert detectable is not None
            stated.append(detectable)
            for factor in exposed:
                shift = 0.5 if factor == "half" else float(factor) * detectable
                twin = driblet.loads(text.replace(right, form.format(energy + shift)))
                exposed[factor] += check_run(run, twin).verdict == "inconsistent"
    print(f"{name}: stated {np.mean(stated):.3f} kJ/mol, exposed {exposed} of {runs}")
    assert np.mean(stated) <= 0.5
    assert exposed["half"] >= 90
    assert exposed[1.2] >= 90 - 2 * 3  # two binomial standard errors below 90 of 100
    assert exposed[0.8] <= 90
