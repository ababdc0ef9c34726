"""System files that tests start from, all invented, and ways to change one thing in them."""

from __future__ import annotations

from pathlib import Path

SMALL = """\
title = "small"

[conditions]
temperature = "25 degC"

[compartments.drop]
volume = "0.1 fL"

[species]
A = "10 copies"
B = "0 copies"

[reactions.turn]
equation = "A <=> B"
K = 2
forward = "1 /s"

[readouts]
part = "B / (A + B)"

[run]
replicates = 3
duration = "2 s"
sample_every = "0.5 s"
seed = 1
"""

# uni-, bi-, ter- and nullmolecular channels, a homodimer and a homotrimer, a held species, a catalyst, a one-way leak;
# energies that close; sizes and loads that differ between compartments
MIXED = """\
title = "every kind of channel"

[conditions]
temperature = "30 degC"

[compartments.vesicle]
diameter = { median = "120 nm", cv = 0.1 }
wall = "4 nm"

[species]
A = "60 uM"
B = { amount = "20 copies", loading = "nearest" }
C = "0 copies"
D = "9 copies"
E = { amount = "5 copies", loading = "nearest" }
F = { amount = "1 mM", held = true }

[reactions.supply]
equation = "nothing <=> A"
K = "5e-5 M"
forward = "2e-4 M/s"

[reactions.turn]
equation = "A + E <=> B + E"
K = 3
forward = "1e4 /M/s"

[reactions.pair]
equation = "2 B <=> C"
K = "1e4 /M"
forward = "5e4 /M/s"

[reactions.triple]
equation = "3 D <=> C"
K = "1e12 /M^2"
backward = "0.5 /s"

[reactions.meet]
equation = "A + B + D <=> C + F"
K = "5e7 /M"
backward = "1e3 /M/s"

[reactions.leak]
equation = "C -> nothing"
one_way = "leaves through a pore"
forward = "0.05 /s"

[readouts]
pairs = "2 * C"
level = "conc(A)"
pull = "gibbs(pair)"

[run]
replicates = 12
duration = "4 s"
sample_every = "0.5 s"
loading = "poisson"
seed = 11
"""


def ready_systems() -> list[Path]:
    """The system files in configs/, where sweep files lie too."""
    return [
        p for p in sorted(Path(__file__).parents[1].glob("configs/*.toml")) if "[reactions." in p.read_text("utf-8")
    ]


def changed(text: str, *pairs: tuple[str, str]) -> str:
    """`text` with each old replaced by new; every old must stand there exactly once."""
    for old, new in pairs:
        assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times"
        text = text.replace(old, new)
    return text
