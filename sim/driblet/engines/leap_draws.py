"""What is drawn in a leap: firings of pairs, those of lumped enzymes with the mean and covariance of their turnovers."""

from __future__ import annotations

import math

import numpy as np

from driblet.engines.compile_cache import bare
from driblet.engines.draws import binomial, normal, poisson, regular, rounded
from driblet.engines.leap_steps import clipped

U = np.uint64
SOME = 10.0  # firings in a leap below which a falling rate thins them
MANY = 9.0  # variance of turnovers in a leap from which they are drawn jointly, as normal numbers
REACH = 9.0  # times that variance: the square of what fires, so that a normal number hardly ever asks for more than there is


@bare
def draw_independent(f, b, excess, stream, r, k, forward_drawn, backward_drawn):  # type: ignore[no-untyped-def]
    """Firings of pair k both ways with means f and b. excess : by how much the variance of the net is to be less than f + b;
    taken off the busier direction, or added to both where it is negative."""
    there, back = f, b
    if excess > 0.0:
        if f >= b:
            there = f - excess
        else:
            back = b - excess
    more = regular(f, there, stream, r)
    less = regular(b, back, stream, r)
    if excess < 0.0:
        extra = poisson(-0.5 * excess, stream, r) - poisson(-0.5 * excess, stream, r)
        if extra > 0.0:
            more += extra
        else:
            less -= extra
    forward_drawn[k] = more
    backward_drawn[k] = less


@bare
def one_way(number, mean, fix, stream, r):  # type: ignore[no-untyped-def]
    """Firings of a channel without a reverse: the `number` drawn about `mean`, moved by `fix` on average and never below zero.
    A few are thinned where they are to be fewer, which leaves a Poisson number one of the smaller mean."""
    if fix < 0.0 and mean < SOME:
        return binomial(number, clipped(1.0 + fix / mean), stream, r)
    return clipped(number + rounded(fix, stream, r))


@bare
def enzyme_noise(  # type: ignore[no-untyped-def]
    e, monomial_start, variable_start, species, held, row_start, at, coefficients, counts, activities, J, value, C
):
    """C : (A, A), covariance of turnovers per copy and time, 1/s, of enzyme e at `counts` (turnover_noise.py).

    at : where its coefficients begin; J : (A,), net turnovers per copy, 1/s; value : scratch, (most rows,).
    """
    first, last = monomial_start[e], monomial_start[e + 1]
    rows, monomials = row_start[e + 1] - row_start[e], last - first
    value[:rows] = 0.0
    for t in range(first, last):
        q = 1.0
        for v in range(variable_start[t], variable_start[t + 1]):
            q *= clipped(counts[U(species[v])] - held[v])
        for k in range(rows):
            value[k] += coefficients[at + k * monomials + (t - first)] * q
    c1, c2 = value[0], value[1]
    g = 2 + activities
    for a in range(activities):
        for c in range(a, activities):
            cross = J[c] * value[2 + a] + J[a] * value[2 + c] + 2.0 * c2 * J[a] * J[c]
            C[a, c] = (value[g] - cross) / c1 if c1 > 0.0 else 0.0
            C[c, a] = C[a, c]
            g += 1


@bare
def draw_jointly(  # type: ignore[no-untyped-def]
    first_law, last_law, law_pair, law_turns, unit, activities, J, C, scale, there, back, stream, r, lower, turned, big,
    forward_drawn, backward_drawn,
):  # fmt: skip
    """Firings of all laws of an enzyme of several activities, so that turnovers have means J and covariance C times `scale`.

    there, back : (K,), means of pairs both ways; lower, turned, big : scratch. Activities of a variance below MANY are
    drawn as they come, the others as rounded normal numbers. Returns whether all of some variance were drawn so.
    """
    count, missed = 0, 0
    for a in range(activities):
        variance, most = C[a, a] * scale, max(there[unit[a]], back[unit[a]])
        big[a] = 1 if variance >= MANY and most * most >= REACH * variance else 0
        count += big[a]
        missed += 1 if variance >= 1.0 and not big[a] else 0
    # exchanges, and the laws of activities that turn rarely
    for m in range(first_law, last_law):
        k = law_pair[m]
        alone = False
        for a in range(activities):
            if unit[a] == k and big[a]:
                alone = True
        if not alone:
            draw_independent(there[k], back[k], 0.0, stream, r, k, forward_drawn, backward_drawn)
    if count == 0:
        return missed == 0
    # Cholesky of the covariance less what rounding adds, over the busy activities
    for a in range(activities):
        for c in range(a + 1):
            lower[a, c] = 0.0
        if not big[a]:
            continue
        for c in range(a + 1):
            if not big[c]:
                continue
            total = C[a, c] * scale - (1.0 / 6.0 if a == c else 0.0)
            for q in range(c):
                total -= lower[a, q] * lower[c, q]
            if a == c:
                lower[a, a] = math.sqrt(clipped(total))
            else:
                lower[a, c] = total / lower[c, c] if lower[c, c] > 0.0 else 0.0
    for a in range(activities):
        turned[a] = normal(stream, r) if big[a] else 0.0
    for back_a in range(activities):
        a = activities - 1 - back_a
        if not big[a]:
            continue
        away = 0.0
        for c in range(a + 1):
            away += lower[a, c] * turned[c]
        turned[a] = rounded(J[a] * scale + away, stream, r)
    for a in range(activities):
        if not big[a]:
            continue
        k = unit[a]
        net = turned[a]
        for m in range(first_law, last_law):
            if law_pair[m] != k and law_turns[m, a] != 0.0:
                other = law_pair[m]
                net -= law_turns[m, a] * (forward_drawn[other] - backward_drawn[other])
        gross = there[k] + back[k]
        share = there[k] / gross if gross > 0.0 else 1.0
        sway = math.sqrt(there[k] * back[k] / gross) * normal(stream, r) if gross > 0.0 else 0.0
        more = math.floor(there[k] + share * (net - there[k] + back[k]) + sway + 0.5)
        more = max(more, 0.0, net)
        forward_drawn[k] = more
        backward_drawn[k] = more - net
    return missed == 0


@bare
def draw_turnovers(  # type: ignore[no-untyped-def]
    e, copies, step, activities, law_start, law_pair, law_turns, unit, monomial_start, variable_start, ligand, held, row_start,
    at, coefficients, counts, forward, backward, critical, there, back, stream, r, J, value, C, lower, turned, big, more, fewer,
    drawn,
):  # fmt: skip
    """Draw the firings of all pairs of enzyme e into more and fewer, and set drawn[k] = 1 for those that are.

    there, back : (K,), means of pairs both ways over `step`. Where a channel is critical, an enzyme of one law keeps the
    independent firings of the rest; one of several is left to the caller. Returns 1 where turnovers were not correlated.
    """
    first, last = law_start[e], law_start[e + 1]
    whole = True
    for a in range(activities):
        J[a] = 0.0
    for m in range(first, last):
        k = law_pair[m]
        if (forward[k] >= 0 and critical[forward[k]]) or (backward[k] >= 0 and critical[backward[k]]):
            whole = False
        for a in range(activities):
            J[a] += law_turns[m, a] * (there[k] - back[k]) / (copies * step)
    if not whole:
        return 1.0
    enzyme_noise(
        e, monomial_start, variable_start, ligand, held, row_start, at, coefficients, counts, activities, J, value, C
    )
    scale = copies * step
    done = True
    if last - first == 1:
        k = law_pair[first]
        excess = there[k] + back[k] - C[0, 0] * scale
        draw_independent(there[k], back[k], excess, stream, r, k, more, fewer)
    else:
        done = draw_jointly(
            first, last, law_pair, law_turns, unit, activities, J, C, scale, there, back, stream, r, lower, turned, big, more,
            fewer,
        )  # fmt: skip
    for m in range(first, last):
        drawn[law_pair[m]] = 1
    return 0.0 if done else 1.0
