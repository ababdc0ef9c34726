"""Published test problems of tau-leaping, as systems. Constants are from memory of the papers named; those defined per pair of
molecules, n (n - 1) / 2, are halved to become constants per falling factorial. One copy is 1 mol/L."""

from __future__ import annotations

import driblet
from tests.unit.leap_cases import HEAD


def dimerising(start: tuple[int, int, int], c1: float, c2: float, c3: float, c4: float) -> driblet.System:
    """S1 -> nothing (c1), 2 S1 -> S2 (c2) and back (c3), S2 -> S3 (c4)."""
    counts = "\n".join(f'S{i + 1} = "{n} copies"' for i, n in enumerate(start))
    return driblet.loads(
        f"{HEAD}{counts}\n[reactions]\n"
        f'decay = {{ equation = "S1 -> nothing", one_way = "as published", forward = "{c1} /s" }}\n'
        f'pair = {{ equation = "2 S1 <=> S2", forward = "{c2 / 2} /M/s", backward = "{c3} /s" }}\n'
        f'convert = {{ equation = "S2 -> S3", one_way = "as published", forward = "{c4} /s" }}\n'
    )


def decaying_dimerising(c2: float = 0.002) -> driblet.System:
    """Gillespie, J. Chem. Phys. 115:1716 (2001)."""
    return dimerising((100_000, 0, 0), 1.0, c2, 0.5, 0.04)


def stiff_dimerising() -> driblet.System:
    """Rathinam, Petzold, Cao & Gillespie, J. Chem. Phys. 119:12784 (2003); Cao, Gillespie & Petzold, J. Chem. Phys. 126:224101
    (2007). To 0.2 s."""
    return dimerising((400, 798, 0), 1.0, 10.0, 1000.0, 0.1)


def stiff_isomerisations(ratio: float = 1e4, copies: int = 20_000) -> driblet.System:
    """S1 <=> S2 fast and S2 <=> S3 slow, after the first example of Rathinam et al. (2003): rates are `ratio`
    apart; sizes are ours."""
    return driblet.loads(
        f'{HEAD}S1 = "{copies} copies"\nS2 = "0 copies"\nS3 = "0 copies"\n[reactions]\n'
        f'fast = {{ equation = "S1 <=> S2", K = 1, forward = "{ratio} /s" }}\n'
        'slow = { equation = "S2 <=> S3", K = 2, forward = "1 /s" }\n'
    )
