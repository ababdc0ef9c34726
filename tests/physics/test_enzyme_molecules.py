"""Enzymes molecule by molecule: turnover times, the macroscopic limit, equilibrium by enumeration, random loading.

False-alarm rates are stated beside each test; seeds are fixed. Each statistical test has a twin, broken on purpose.
"""

from __future__ import annotations

import math
from itertools import product

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.special import gammaln
from scipy.stats import binom, norm

import driblet
from driblet.network import Network
from driblet_analysis.references.count_equilibrium import count_law
from driblet_analysis.run_check import check_run
from tests.physics.support import FALSE_ALARM, chi_square

K1, K_OFF, K2 = 2e6, 30.0, 60.0  # /M/s, /s, /s
ONE_ENZYME = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "1 fL"
[species]
S = {{ amount = "{S} uM", held = true }}
P = "0 copies"
[reactions.r]
equation = "S <=> P"
energy = "-80 kJ/mol"
[enzymes.E]
amount = "1 copies"
catalyses = "r"
mechanism = "uni uni"
[enzymes.E.steps]
binds_S = {{ forward = "2e6 /M/s", backward = "30 /s" }}
r = {{ forward = "60 /s" }}
releases_P = {{ forward = "1e6 /s", backward = "1 /M/s" }}
[run]
duration = "4 s"
sample_every = "4 s"
"""


def randomness(S: float, k1: float, k_off: float, k2: float) -> float:
    """Kou, Cherayil, Min, English & Xie, J. Phys. Chem. B 109:19068 (2005), eq. for r, from memory."""
    total = k1 * S + k_off + k2
    return (total**2 - 2 * k1 * k2 * S) / total**2


def turnover_statistics(S_uM: float, replicates: int, seed: int) -> tuple[float, float, float, float]:
    """Rate of turnover and variance over mean of the number of turnovers, each with its standard error."""
    run = driblet.run(driblet.loads(ONE_ENZYME.format(S=S_uM)), replicates=replicates, seed=seed)
    n = run.turnovers("r")[:, -1].astype(float)
    fano = n.var(ddof=1) / n.mean()
    return n.mean() / 4.0, n.std(ddof=1) / 4.0 / math.sqrt(replicates), fano, fano * math.sqrt(2.0 / replicates)


@pytest.mark.parametrize("S_uM", [5.0, 45.0, 300.0])
def test_turnover_time_and_randomness_of_one_molecule(S_uM: float) -> None:
    """False alarms: 2e-3. The start (enzyme free) and the 1 us release shift both by less than a per cent."""
    rate, rate_error, fano, fano_error = turnover_statistics(S_uM, 3000, int(S_uM))
    S = S_uM * 1e-6
    KM = (K_OFF + K2) / K1
    assert abs(rate - K2 * S / (KM + S)) < 3.3 * rate_error + 0.005 * rate
    assert abs(fano - randomness(S, K1, K_OFF, K2)) < 3.3 * fano_error + 0.01


def test_twin_randomness_of_a_single_step_is_refused() -> None:
    """A Poisson process of the same rate has r = 1; at S = K_M the enzyme's is 0.67."""
    _, _, fano, fano_error = turnover_statistics(45.0, 3000, 45)
    assert abs(fano - 1.0) > 3.3 * fano_error + 0.01
    assert abs(fano - randomness(45e-6, K1, 3 * K_OFF, K2)) > 3.3 * fano_error + 0.01


MANY = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "0.2 fL"
[species]
S = "0.4 mM"
P = "0 copies"
[reactions.r]
equation = "S <=> P"
energy = "-5 kJ/mol"
[enzymes.E]
amount = "0.1 uM"
catalyses = "r"
mechanism = "uni uni"
kcat = "100 /s"
KM = { S = "0.1 mM" }
[run]
replicates = 6
duration = "60 s"
sample_every = "6 s"
seed = 3
"""


def michaelis_menten(times: NDArray[np.float64], KM: float) -> NDArray[np.float64]:
    """P(t) of the reversible equation of one substrate with its reverse constants from the steps of the file, mol/L."""
    system = driblet.loads(MANY)
    reaction = system.reaction("r")
    from driblet.system.mechanisms import measured_constants

    enzyme = system.enzymes[0]
    back = measured_constants(enzyme, enzyme.activities[0], backward=True)
    V = 100.0 * 0.1e-6
    KP = back.KM_M[0]

    def slope(_: float, y: NDArray[np.float64]) -> NDArray[np.float64]:
        S, P = 0.4e-3 - y[0], y[0]
        return np.array([V / KM * (S - P / reaction.K) / (1 + S / KM + P / KP)])

    return solve_ivp(slope, (0, times[-1]), [0.0], t_eval=times, rtol=1e-10, atol=1e-15).y[0]


def test_michaelis_menten_turnover_at_large_copy_numbers() -> None:
    """48,000 substrates, 12 enzymes. False alarms: 1e-3 a time by the spread of six droplets, plus 0.2 % of all substrate
    for what the steady-state equation leaves out (E/(K_M + S), 2e-4 to 1e-3).
    """
    run = driblet.run(driblet.loads(MANY))
    omega = run.system.compartment.omega
    P = run.counts[:, :, run.species.index("P")] / omega
    expected = michaelis_menten(run.time_s, 1e-4)
    error = P.std(axis=0, ddof=1)[1:] / math.sqrt(6)
    assert (np.abs(P.mean(axis=0) - expected)[1:] < 6.9 * error + 0.002 * 0.4e-3).all()  # t of 5 degrees at 1e-3
    wrong = michaelis_menten(run.time_s, 1.5e-4)  # the twin: K_M off by half
    assert not (np.abs(P.mean(axis=0) - wrong)[1:] < 6.9 * error + 0.002 * 0.4e-3).all()


CLOSED = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "0.002 aL"
[species]
ATP = "4 copies"
sugar = "3 copies"
ADP = "1 copies"
sugarP = "0 copies"
[reactions.relay]
equation = "ATP + sugar <=> ADP + sugarP"
energy = "-3 kJ/mol"
[enzymes.kinase]
amount = "2 copies"
catalyses = "relay"
mechanism = "ordered bi bi"
releases = ["sugarP", "ADP"]
kcat = "200 /s"
KM = { ATP = "0.8 mM", sugar = "0.6 mM" }
Kd = { ADP = "1 mM", sugarP = "0.7 mM" }
[readouts]
held = "total(ATP) - ATP"
made = "total(sugarP)"
[run]
replicates = 400
duration = "0.5 s"
sample_every = "0.05 s"
seed = 11
"""


def enumerated(system: driblet.System) -> dict[tuple[int, ...], float]:
    """The law of (ATP, sugar, ADP, sugarP, E, EA, EAB, EQP, EQ) by loops over every split of the totals.

    pi ~ prod (c Omega)^n / n!, c of a complex its parts over the dissociation constants, and sugarP's c set by K'.
    """
    enzyme = system.enzymes[0]
    K = [s.forward / s.backward for s in enzyme.steps]
    Kd_ATP, Kd_sugar, Kd_sugarP, Kd_ADP = 1 / K[0], 1 / K[1], K[3], K[4]
    reaction = system.reaction("relay")
    free = np.array([1.0, 1.0, 1.0, reaction.K]) * 1e-3
    c = [*free, 1e-3]
    c += [c[4] * c[0] / Kd_ATP]
    c += [c[5] * c[1] / Kd_sugar]
    EQ = c[4] * c[2] / Kd_ADP
    c += [EQ * c[3] / Kd_sugarP, EQ]
    ln = np.log(np.array(c) * system.compartment.omega)
    law = {}
    for EA, EAB, EQP, EQ_n in product(range(3), repeat=4):
        E = 2 - EA - EAB - EQP - EQ_n
        if E < 0:
            continue
        for sugarP in range(4):
            sugar = 3 - sugarP - EAB - EQP
            # each transfer makes one ADP and one sugarP; all that is held counts
            transferred = sugarP + EQP
            ADP = 1 + transferred - EQP - EQ_n
            ATP = 4 - transferred - EA - EAB
            state = (ATP, sugar, ADP, sugarP, E, EA, EAB, EQP, EQ_n)
            if min(state) >= 0:
                n = np.array(state)
                law[state] = math.exp(float(n @ ln - gammaln(n + 1.0).sum()))
    total = math.fsum(law.values())
    return {state: weight / total for state, weight in law.items()}


def test_the_law_of_a_closed_system_with_an_enzyme_is_the_enumerated_one() -> None:
    system = driblet.loads(CLOSED)
    expected = enumerated(system)
    law = count_law(system, [s.mean_copies(1.0) for s in system.free_species], system.compartment.omega)
    assert law is not None
    found = {tuple(int(k) for k in state): p for state, p in zip(law.states, law.probability, strict=True)}
    assert found.keys() == expected.keys()
    for state, p in expected.items():
        assert found[state] == pytest.approx(p, rel=1e-9, abs=1e-15)


@pytest.fixture(scope="module")
def closed_run() -> driblet.Run:
    return driblet.run(driblet.loads(CLOSED), replicates=2000)


def marginal(expected: dict[tuple[int, ...], float], value) -> tuple[NDArray[np.int64], NDArray[np.float64]]:  # type: ignore[no-untyped-def]
    p: dict[int, float] = {}
    for state, weight in expected.items():
        p[value(state)] = p.get(value(state), 0.0) + weight
    support = np.array(sorted(p))
    return support, np.array([p[int(n)] for n in support])


def test_free_and_total_counts_at_equilibrium(closed_run: driblet.Run) -> None:
    """Chi-square of end states, false alarms 1e-3 each: free ATP, all ATP that enzymes hold, all sugarP."""
    expected = enumerated(closed_run.system)
    end = closed_run.counts[:, -1]
    for values, of_state in (
        (end[:, 0], lambda s: s[0]),
        (closed_run.readout("held")[:, -1].astype(int), lambda s: s[5] + s[6]),
        (closed_run.readout("made")[:, -1].astype(int), lambda s: s[3] + s[7]),
    ):
        assert chi_square(values, *marginal(expected, of_state)) > FALSE_ALARM


def test_twin_totals_are_not_free_counts(closed_run: driblet.Run) -> None:
    expected = enumerated(closed_run.system)
    support, pmf = marginal(expected, lambda s: s[3])
    made = closed_run.readout("made")[:, -1].astype(int)
    assert chi_square(made, support, pmf) < FALSE_ALARM


def test_check_agrees_with_a_right_run_and_exposes_a_constant_off_by_half_a_kilojoule(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """The product's binding constant is changed in the network alone, so that the file's energies are not those run."""
    text = CLOSED.replace("replicates = 400", "replicates = 800")
    assert check_run(driblet.run(driblet.loads(text))).verdict == "consistent"
    rates = Network.rates

    def off(self: Network, omega: NDArray[np.float64]) -> NDArray[np.float64]:
        out = rates(self, omega)
        r = self.reactions.index("kinase.releases_sugarP_with_ADP")
        out[:, self.channel_index(-1)[r]] *= math.exp(0.5 / driblet.loads(text).conditions.RT_kJ_per_mol)
        return out

    monkeypatch.setattr(Network, "rates", off)
    assert check_run(driblet.run(driblet.loads(text))).verdict == "inconsistent"


def by_hand(off_kJ_per_mol: float) -> str:
    """The closed system with its steps typed as ordinary reactions, the product's binding off by so much."""
    system = driblet.loads(CLOSED)
    lines = ['EA = "0 copies"', 'EAB = "0 copies"', 'EPQ = "0 copies"', 'EQ = "0 copies"', 'E = "2 copies"']
    names = dict(zip((s.name for s in system.enzymes[0].states), ("E", "EA", "EAB", "EPQ", "EQ"), strict=True))
    reactions = []
    for k, reaction in enumerate(r for r in system.reactions if r.enzyme):
        energy = reaction.dG0_kJ_per_mol or 0.0
        if reaction.name == "kinase.releases_sugarP_with_ADP":
            energy += off_kJ_per_mol
        sides = [
            " + ".join(names.get(name, name) for name, _ in side)
            for side in (reaction.equation.reactants, reaction.equation.products)
        ]
        unit = "/M/s" if len(reaction.equation.reactants) == 2 else "/s"
        reactions.append(
            f'[reactions.step{k}]\nequation = "{" <=> ".join(sides)}"\nenergy = "{energy!r} kJ/mol"\n'
            f'forward = "{reaction.forward!r} {unit}"'
        )
    top = CLOSED[: CLOSED.index("[reactions.relay]")]
    return "\n".join([top, *lines, *reactions, CLOSED[CLOSED.index("[run]") :].replace("400", "800")])


def test_an_enzyme_built_by_hand_with_a_wrong_constant_is_exposed_by_check() -> None:
    """The steps close whatever their constants, so only counts can tell: half a kilojoule off against the right file."""
    right, wrong = driblet.loads(by_hand(0.0)), driblet.loads(by_hand(0.5))
    assert check_run(driblet.run(right), right).verdict == "consistent"
    assert check_run(driblet.run(wrong), right).verdict == "inconsistent"


def test_adenylate_kinase_at_equilibrium() -> None:
    """2 ADP <=> ATP + AMP, one copy of enzyme that binds two ADP: end states against the exact law; false alarms 1e-3."""
    text = """
[conditions]
temperature = "25 degC"
[compartments.drop]
volume = "0.005 aL"
[species]
ADP = "9 copies"
ATP = "0 copies"
AMP = "2 copies"
[reactions.sharing]
equation = "2 ADP <=> ATP + AMP"
K = 1.2
[enzymes.adk]
amount = "1 copies"
catalyses = "sharing"
mechanism = "random bi bi"
kcat = "300 /s"
KM = { ADP = "0.5 mM" }
Kd = { ATP = "0.4 mM", AMP = "0.6 mM" }
[run]
replicates = 2000
duration = "0.5 s"
sample_every = "0.5 s"
seed = 5
"""
    run = driblet.run(driblet.loads(text))
    law = count_law(run.system, run.initial_counts()[0], run.system.compartment.omega)
    assert law is not None
    for i in (0, 1):
        assert chi_square(run.counts[:, -1, i], *law.marginal(i)) > FALSE_ALARM
    total = run.counts[:, -1, :3].sum(axis=1)
    bound = np.array([sum(n for _, n in s.holds) for s in run.system.free_species])
    assert (total + run.counts[:, -1] @ bound == 11).all()


DIGITAL = """
[conditions]
temperature = "25 degC"
[compartments.droplet]
volume = {{ median = "50 fL", cv = {cv} }}
[species]
substrate = "20 uM"
dye = "0 copies"
[reactions.cleavage]
equation = "substrate <=> dye"
energy = "-30 kJ/mol"
[enzymes.lacZ]
amount = "{amount}"
catalyses = "cleavage"
mechanism = "uni uni"
kcat = "300 /s"
KM = {{ substrate = "100 uM" }}
[run]
loading = "poisson"
replicates = 4000
duration = "0.5 s"
sample_every = "0.5 s"
seed = 9
"""


def test_digital_counting() -> None:
    """A droplet with an enzyme lights up: positives are Binomial(n, 1 - exp(-mean)), and -ln(1 - share) counts enzymes
    (common practice of digital assays, no source). False alarms 1e-3.
    """
    run = driblet.run(driblet.loads(DIGITAL.format(cv=0, amount="0.3 copies")))
    positives = int((run.counts[:, -1, run.species.index("dye")] > 0).sum())
    loaded = run.counts[:, 0, run.species.index("lacZ")]
    assert positives == int((loaded > 0).sum())  # at 50 turnovers a second nobody with an enzyme stays dark
    share = 1 - math.exp(-0.3)
    assert 5e-4 < binom.cdf(positives, 4000, share) < 1 - 5e-4
    assert not 5e-4 < binom.cdf(positives, 4000, 0.3) < 1 - 5e-4  # the twin: the mean taken for the share
    estimate = -math.log(1 - positives / 4000)
    error = math.sqrt(share / (1 - share) / 4000)
    assert abs(estimate - 0.3) < norm.isf(5e-4) * error


def test_share_of_empty_compartments_when_sizes_differ() -> None:
    """E[exp(-c V)] over lognormal volumes of cv 0.8, by Gauss-Hermite quadrature; false alarms 1e-3."""
    amount, cv = 1e-11, 0.8
    run = driblet.run(
        driblet.loads(DIGITAL.format(cv=cv, amount="10 pM")), replicates=6000, duration=1e-3, sample_every=1e-3
    )
    empty = int((run.counts[:, 0, run.species.index("lacZ")] == 0).sum())
    sigma = math.sqrt(math.log1p(cv**2))
    x, w = np.polynomial.hermite_e.hermegauss(60)
    mean = amount * run.system.compartment.omega * np.exp(sigma * x)
    share = float(w @ np.exp(-mean) / w.sum())
    assert 5e-4 < binom.cdf(empty, 6000, share) < 1 - 5e-4
    from driblet_analysis.enzyme_facts import share_without

    enzyme = next(s for s in run.system.species if s.name == "lacZ")
    assert share_without(run.system, enzyme) == pytest.approx(share, rel=1e-4)
    assert not 5e-4 < binom.cdf(empty, 6000, math.exp(-amount * run.system.compartment.omega)) < 1 - 5e-4  # the twin


def test_inactivation_follows_the_half_life() -> None:
    """Copies left after one and two half-lives are Binomial(n, 1/2), (n, 1/4), working or not; false alarms 1e-3 each."""
    text = CLOSED.replace('amount = "2 copies"', 'amount = "4 copies"\nhalf_life = "0.1 s"')
    run = driblet.run(driblet.loads(text), replicates=1000, duration=0.2, sample_every=0.1)
    states = [i for i, s in enumerate(run.system.free_species) if s.enzyme]
    left = run.counts[:, :, states].sum(axis=2)
    for k, share in ((1, 0.5), (2, 0.25)):
        support = np.arange(5)
        assert chi_square(left[:, k], support, binom.pmf(support, 4, share)) > FALSE_ALARM
        assert chi_square(left[:, k], support, binom.pmf(support, 4, 1.3 * share)) < FALSE_ALARM  # the twin
    bound = np.array([sum(n for _, n in s.holds) + (not s.enzyme) for s in run.system.free_species])
    assert (run.counts @ bound == 8).all()  # a dying complex lets go of what it holds
