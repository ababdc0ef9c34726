"""Systems that tests of sizing start from, all invented."""

from __future__ import annotations

# one copy or more of E, Poisson loaded, whose chance is 1 - exp(-mean); a slow turn so that something can happen
ONE_INSIDE = """\
title = "one inside"

[conditions]
temperature = "25 degC"

[compartments.drop]
volume = "10 fL"

[species]
A = "4 copies"
B = "0 copies"
E = { amount = "3 copies", loading = "poisson" }
mark = { amount = "2 copies", loading = "nearest" }

[reactions.turn]
equation = "A <=> B"
K = 2
forward = "1 /s"

[reactions.loss]
equation = "mark -> nothing"
forward = "0.1 /s"
one_way = "a decay"

[requirements.inside]
must = "E >= 1"
when = "at end"
share = 0.95

[requirements.kept]
must = "mark >= 1"
when = "at end"
share = 0.9

[requirements.loose]
must = "E >= 1"
when = "at end"

[requirements.surely]
must = "E >= 1"
when = "at end"
share = 1.0

[run]
duration = "1 s"
sample_every = "1 s"
replicates = 10
seed = 3
"""
