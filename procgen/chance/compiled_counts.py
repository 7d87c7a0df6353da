"""Counts by adding up chances, and survivors of a thinning: the loops of `counting` and `tables`, compiled.

Imported only where kernels are compiled (numba, the extra `speed`). Every number comes by the operations of the plain
form in their order, so that the bits are the same; what needs more than adding up is left to the plain form.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from procgen.chance.compiled_elementary import _exp
from procgen.chance.counting import LEFT
from procgen.chance.kernel import compiled_function

_GRID = 2.0**52  # of uniforms
_TERMS = 8  # chances that are added up before it is asked who needs more


@partial(compiled_function, inline="always")
def _taken(u, nothing, wanted, chance, below, places):
    """Uniforms and chances of none into work arrays, and their places; as many as there are."""
    for j in range(u.shape[0]):
        wanted[j] = u[j]
    for j in range(u.shape[0]):
        chance[j] = nothing[j]
    for j in range(u.shape[0]):
        below[j] = nothing[j]
    for j in range(u.shape[0]):
        places[j] = j


@partial(compiled_function, inline="always")
def _left(k, size, out, count, wanted, each, chance, below, places, at):
    """Add so many counts to out at their places, and move those that need more to the front; how many there are."""
    if k == 0:
        for j in range(size):
            out[j] = count[j]
    else:
        for j in range(size):
            out[places[j]] = out[places[j]] + count[j]
    more = 0
    for j in range(size):
        at[more] = j
        more += wanted[j] > below[j]
    for i in range(more):
        j = at[i]
        wanted[i], each[i], chance[i], below[i], places[i] = wanted[j], each[j], chance[j], below[j], places[j]
    return more


@partial(compiled_function, inline="always")
def _above_poisson(k, chance, mean, found, most):
    """The chance of more than k, from the chance of k."""
    total, term = 0.0, chance
    for _ in range(most):
        k = k + 1.0
        step = mean / k
        term = term * step
        total = total + term
        if not term > found * total * (1.0 - min(step, 1.0)):
            break
    return total


@partial(compiled_function, inline="always")
def _above_negative_binomial(k, chance, share, size, found, most):
    total, term = 0.0, chance
    for _ in range(most):
        k = k + 1.0
        step = (k - 1.0 + size) / k * share
        term = term * step
        total = total + term
        if not term > found * total * (1.0 - min(step, 1.0)):
            break
    return total


@partial(compiled_function, inline="always")
def _rare_poisson(wanted, nothing, mean, climb, rare, near, found, most):
    """The least count that is enough for one uniform, which may be so near to 1 that areas are added from above."""
    chance, below = nothing, nothing
    for k in range(climb):
        more = wanted > below
        if wanted > rare and below > near:
            more = _above_poisson(float(k), chance, mean, found, most) > 1.0 - wanted
        if not more:
            return float(k)
        chance = chance * (mean / (k + 1.0))
        below = below + chance
    return LEFT


@partial(compiled_function, inline="always")
def _poisson_terms(k, wanted, mean, chance, below):
    """How many of the counts from k on are not enough, of _TERMS; the chance of the next one, and what is below it."""
    count = 0.0
    for i in range(_TERMS):
        count = count + (1.0 if wanted > below else 0.0)
        chance = chance * (mean / (float(k + i) + 1.0))
        below = below + chance
    return count, chance, below


@partial(compiled_function, inline="always")
def _means_taken(u, mean, wanted, each, chance, below, places):
    """Uniforms and means into work arrays, with the chances of none."""
    for j in range(u.shape[0]):
        wanted[j] = u[j]
    for j in range(u.shape[0]):
        each[j] = mean[j]
    for j in range(u.shape[0]):
        chance[j] = _exp(-each[j])
    for j in range(u.shape[0]):
        below[j] = chance[j]
    for j in range(u.shape[0]):
        places[j] = j


def poisson(u, mean, climb, rare, near, found, most, wanted, each, chance, below, count, places, at, out):
    """The least counts that are enough for uniforms u, for means of at least 0.

    A few chances are added up for all, then for those that need more: what is added beyond the count changes none.
    From `wanted` to `at`: work arrays of one length.
    """
    abreast = wanted.shape[0]
    for first in range(0, u.shape[0], abreast):
        left = min(abreast, u.shape[0] - first)
        _means_taken(u[first : first + left], mean[first : first + left], wanted, each, chance, below, places)
        here = out[first : first + left]
        for k in range(0, climb, _TERMS):
            if k == 0:  # said by itself, for half of these divisions are by a power of two
                for j in range(left):
                    count[j], chance[j], below[j] = _poisson_terms(0, wanted[j], each[j], chance[j], below[j])
            else:
                for j in range(left):
                    count[j], chance[j], below[j] = _poisson_terms(k, wanted[j], each[j], chance[j], below[j])
            left = _left(k, left, here, count, wanted, each, chance, below, places, at)
            if left == 0:
                break
        for j in range(here.shape[0]):
            if here[j] >= climb:
                here[j] = LEFT
            if u[first + j] > rare:
                nothing = _exp(-mean[first + j])
                here[j] = _rare_poisson(u[first + j], nothing, mean[first + j], climb, rare, near, found, most)


@partial(compiled_function, inline="always")
def _rare_negative_binomial(wanted, nothing, share, size, ratios, climb, rare, near, found, most):
    chance, below = nothing, nothing
    for k in range(climb):
        more = wanted > below
        if wanted > rare and below > near:
            more = _above_negative_binomial(float(k), chance, share, size, found, most) > 1.0 - wanted
        if not more:
            return float(k)
        chance = chance * (ratios[k] * share)
        below = below + chance
    return LEFT


@partial(compiled_function, inline="always")
def _negative_binomial_terms(k, wanted, share, ratios, chance, below):
    count = 0.0
    for i in range(_TERMS):
        count = count + (1.0 if wanted > below else 0.0)
        chance = chance * (ratios[k + i] * share)
        below = below + chance
    return count, chance, below


def negative_binomial(
    u, nothing, share, size, ratios, climb, rare, near, found, most, wanted, each, chance, below, count, places, at, out
):
    """The same, of negative binomial counts; share: mean / (mean + size); ratios: (k - 1 + size) / k from k = 1 on."""
    abreast = wanted.shape[0]
    for first in range(0, u.shape[0], abreast):
        left = min(abreast, u.shape[0] - first)
        _taken(u[first : first + left], nothing[first : first + left], wanted, chance, below, places)
        for j in range(left):
            each[j] = share[first + j]
        here = out[first : first + left]
        for k in range(0, climb, _TERMS):
            for j in range(left):
                count[j], chance[j], below[j] = _negative_binomial_terms(
                    k, wanted[j], each[j], ratios, chance[j], below[j]
                )
            left = _left(k, left, here, count, wanted, each, chance, below, places, at)
            if left == 0:
                break
        for j in range(here.shape[0]):
            if here[j] >= climb:
                here[j] = LEFT
            if u[first + j] > rare:
                here[j] = _rare_negative_binomial(
                    u[first + j], nothing[first + j], share[first + j], size, ratios, climb, rare, near, found, most
                )


def looked_up(u, low, places, shift, first, at, out):
    """The least numbers that are enough for uniforms u, by the guide of a `Table`, or by halves where it is below 0."""
    last, abreast = low.shape[0] - 1, at.shape[0]
    for begin in range(0, u.shape[0], abreast):
        given, found = u[begin : begin + abreast], out[begin : begin + abreast]
        for i in range(given.shape[0]):
            found[i] = low[min(max(np.int64(np.floor(given[i] * _GRID)) >> shift, 0), last)]
        more = 0
        for i in range(given.shape[0]):
            at[more] = i
            more += found[i] < 0.0
        for j in range(more):
            place = np.int64(np.floor(given[at[j]] * _GRID))
            a, b = 0, places.shape[0]
            while a < b:
                middle = (a + b) >> 1
                if places[middle] <= place:
                    a = middle + 1
                else:
                    b = middle
            found[at[j]] = float(a)
        for i in range(given.shape[0]):
            found[i] = found[i] + first


def uniforms(z, per_root_12, out):
    """The uniforms that standardised ones were made of."""
    for i in range(z.shape[0]):
        place = np.floor(z[i] * (_GRID * per_root_12)) + 0.5 * _GRID
        place = 0.0 if place < 0.0 else place
        place = _GRID - 1.0 if place > _GRID - 1.0 else place
        out[i] = (place + 0.5) / _GRID


@compiled_function
def thinned(x, new, stay, grid, keys, guide, cells, zero, out):
    """Rows of counts from x before them: who stays of the last ones, and the new ones.

    keys, guide, cells, zero: of a `Thinning`; rows stop before a count that is beyond it. Returns how many there are.
    By a guide nearly all are found at once: a search by halves is wrongly foreseen by the processor at every turn.
    """
    most, end = zero.shape[0] - 1, keys.shape[0]
    for t in range(new.shape[0]):
        last = x if t == 0 else out[t - 1]
        for lane in range(x.shape[0]):
            if last[lane] > most:
                return t
        for lane in range(x.shape[0]):
            n = np.int64(last[lane])
            place = np.int64(np.floor(stay[t, lane] * grid)) + (n << np.int64(52))
            low = np.int64(guide[place >> cells])
            while low < end and keys[low] <= place:
                low = low + 1
            out[t, lane] = float(low - zero[n]) + new[t, lane]
    return new.shape[0]


@compiled_function
def thinned_by_path(x, new, stay, grid, places, out):
    """The same where each path has a table of its own: places (paths, counts, counts), as many as a power of two."""
    wide = places.shape[1]
    for t in range(new.shape[0]):
        last = x if t == 0 else out[t - 1]
        for lane in range(x.shape[0]):
            if last[lane] >= wide:
                return t
        for lane in range(x.shape[0]):
            row, place = places[lane, np.int64(last[lane])], np.int64(np.floor(stay[t, lane] * grid))
            at, step = 0, wide // 2
            while step > 0:
                at = at + step if row[at + step - 1] <= place else at
                step = step // 2
            out[t, lane] = float(at) + new[t, lane]
    return new.shape[0]
