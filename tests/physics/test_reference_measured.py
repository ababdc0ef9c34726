"""Measured apparent constants of enzyme-catalysed reactions, predicted by the reference table.

data/measured_constants.csv: 55 rows of the open NIST compilation (Goldberg, Tewari and co-workers, J. Phys. Chem. Ref. Data,
1993 to 2007), each with its reference, all whose reactants the table covers. Where a row leaves pMg and ionic strength open,
pMg 3 and 0.25 mol/L are assumed; such rows scatter by 0.3 in log10 K' and more.
"""

from __future__ import annotations

import csv
import math
from collections import defaultdict
from pathlib import Path
from statistics import median
from typing import Any

import numpy as np
import pytest
from scipy import constants

from driblet.energetics.conditions import Conditions
from driblet.energetics.reference import Reference, reference_table
from driblet.system.equation import read_equation
from driblet.system.reference_energies import full_change

FILE = Path(__file__).parent / "data" / "measured_constants.csv"
ASSUMED_PMG, ASSUMED_IONIC_STRENGTH = 3.0, 0.25
# median deviation log10(K' of the table / K' measured) and number of rows, as found
FOUND = {
    "acetate kinase": (+0.11, 3),
    "adenylate kinase": (+0.36, 10),
    "creatine kinase": (-0.01, 6),
    "glucose-6-phosphate isomerase": (-0.03, 11),
    "lactate dehydrogenase": (+0.24, 6),
    "phosphatase": (+0.09, 4),
    "phosphofructokinase": (+0.31, 1),
    "phosphoglucomutase": (+0.01, 1),
    "phosphoglycerate kinase": (+0.30, 1),
    "phosphoglycerate mutase": (+0.24, 4),
    "pyrophosphatase": (-1.63, 1),
    "pyruvate kinase": (-1.48, 3),
    "triose-phosphate isomerase": (+0.01, 4),
}
# its gap is the subject of its own test; the one row of pyrophosphatase names no magnesium, and magnesium, which it needs,
# moves its constant by a factor of ten: without any the deviation is -0.7
SHOWN_NOT_MET = {"pyruvate kinase", "pyrophosphatase"}


def rows() -> list[dict[str, str]]:
    with FILE.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def conditions_of(row: dict[str, str]) -> Conditions:
    return Conditions(
        float(row["temperature_K"]),
        float(row["pH"]),
        float(row["pMg"] or ASSUMED_PMG),
        float(row["ionic_strength_M"] or ASSUMED_IONIC_STRENGTH),
    )


def deviation(row: dict[str, str], table: Reference) -> float:
    change = full_change(read_equation(row["reaction"]))
    conditions = conditions_of(row)
    dG0 = table.from_formation(table.terms(change), conditions)
    return -dG0 / (constants.R * conditions.temperature_K / 1000) / math.log(10) - math.log10(float(row["K"]))


def by_enzyme() -> dict[str, list[float]]:
    found: dict[str, list[float]] = defaultdict(list)
    for row in rows():
        found[row["enzyme"]].append(deviation(row, reference_table()))
    return dict(found)


def test_every_row_is_predicted_and_the_deviations_are_those_reported() -> None:
    found = by_enzyme()
    assert {enzyme: len(values) for enzyme, values in found.items()} == {e: n for e, (_, n) in FOUND.items()}
    for enzyme, values in found.items():
        assert median(values) == pytest.approx(FOUND[enzyme][0], abs=0.01), f"{enzyme}: {sorted(values)}"


@pytest.mark.parametrize("enzyme", [e for e in FOUND if e not in SHOWN_NOT_MET])
def test_medians_lie_within_half_a_decade(enzyme: str) -> None:
    assert abs(median(by_enzyme()[enzyme])) < 0.5


def test_pyruvate_kinase_is_off_by_a_factor_of_thirty_to_sixty_in_every_laboratory() -> None:
    for value in by_enzyme()["pyruvate kinase"]:
        assert -1.8 < value < -1.4


def test_with_the_measured_constant_pyruvate_kinase_agrees() -> None:
    """energy = "reference" takes one laboratory's constant; the two others must lie within 0.5 of what it gives for them."""
    table = reference_table()
    for row in (r for r in rows() if r["enzyme"] == "pyruvate kinase"):
        conditions = conditions_of(row)
        found = table.energy(full_change(read_equation(row["reaction"])), conditions)
        log_K = -found.dG0 / (constants.R * conditions.temperature_K / 1000) / math.log(10)
        assert abs(log_K - math.log10(float(row["K"]))) < 0.5


def test_the_constant_of_lactate_dehydrogenase_rises_tenfold_per_pH() -> None:
    data = [row for row in rows() if row["enzyme"] == "lactate dehydrogenase"]
    # the row of 1937 lies a decade below the other one at its pH; with it the slope is 1.25
    kept = [row for row in data if "1937" not in row["reference"]]
    assert len(data) - len(kept) == 1
    slope = np.polyfit([float(r["pH"]) for r in kept], [math.log10(float(r["K"])) for r in kept], 1)[0]
    assert slope == pytest.approx(1.0, abs=0.15)
    with_it = np.polyfit([float(r["pH"]) for r in data], [math.log10(float(r["K"])) for r in data], 1)[0]
    assert with_it == pytest.approx(1.25, abs=0.01)
    # and so does the table's
    predicted = [deviation(r, reference_table()) + math.log10(float(r["K"])) for r in kept]
    assert np.polyfit([float(r["pH"]) for r in kept], predicted, 1)[0] == pytest.approx(1.0, abs=0.15)


class Shifted:
    """A table whose energies of reaction are wrong by a fixed amount, kJ/mol: what the half decade must expose."""

    def __init__(self, shift: float) -> None:
        self.shift, self.terms = shift, reference_table().terms

    def from_formation(self, *arguments: Any) -> float:
        return reference_table().from_formation(*arguments) + self.shift


@pytest.mark.parametrize("shift", [-5.0, 5.0])
def test_an_error_of_5_kJ_per_mol_fails_the_half_decade(shift: float) -> None:
    table = Shifted(shift)
    values = [deviation(row, table) for row in rows() if row["enzyme"] == "creatine kinase"]  # type: ignore[arg-type]
    assert abs(median(values)) > 0.5
