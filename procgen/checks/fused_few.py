"""What `fused` does, for tiles of few paths: these go one by one, each with many sums side by side.

Called by `blocks.in_one_pass`, as `fused` is. Every sum adds the same numbers in the same order as the plain form.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from procgen.chance.kernel import compiled_function

BLOCK, STRETCH = 64, 16  # steps, as in `blocks` and `stretches`
SOME = 64  # values whose marks are looked for at once
_EXPONENT = np.uint64(0x7FF << 52)
_part = partial(compiled_function, inline="always")


def summed(g, clusters, paths, steps, lags, cluster_lags, totals, beside, profile, squares, blocks, rest):
    """Add products along paths and across them to totals, beside; fill sums by step and by block.

    g, clusters: views of windows, (held + steps, paths) in one row. totals: of g, g², two that are left alone,
    asymmetry, another such, then by lag: first 1, 2, 3, 4, 5, 6, 8, 12, and of clusters just 1, 2, 3, 5. squares: by
    path those of the sums over stretches of 16 steps and over blocks. rest: room for three rows, or four numbers.
    """
    held, held_too, more = g.shape[0] // paths - steps, clusters.shape[0] // paths - steps, lags.shape[0] - 8
    early = 0 if held >= 12 and held_too >= 5 else min(BLOCK, steps)  # steps of blocks where partners may be missing
    for p in range(paths):
        at, there = held * paths + p, held_too * paths + p
        for k in range(15 + more + min(p, 1)):  # one after another, where not all go side by side
            row, q, lag, known, end = totals[k], p, 0, held, early
            a, i, b, j = g, at, g, at
            if k == 15 + more:
                row, q, j, end = beside, p - 1, at - 1, steps
            elif k >= 11 + more:
                row, lag, known = totals[3 + k], cluster_lags[k - 11 - more], held_too
                a, i, b, j = clusters, there, clusters, there
            elif k >= 3:
                row, lag, end = totals[3 + k], lags[k - 3], early if k < 11 else steps
            elif k == 2:
                row, lag, a, i = totals[4], 1, clusters, there
            row[q] = _along(row[q], a, i, b, j - lag * paths, k > 0, paths, max(lag - known, 0), end)
        for first in range(early, steps, BLOCK):
            place, count = first * paths, min(BLOCK, steps - first)
            _block(g, clusters, at + place, there + place, count, np.uint64(paths), totals, more, p)
        for block in range(blocks.shape[0]):
            for k in range(4):
                rest[k] = _halved(g, at + (BLOCK * block + STRETCH * k) * paths, paths)
            squares[0, p] += (rest[0] * rest[0] + rest[1] * rest[1]) + (rest[2] * rest[2] + rest[3] * rest[3])
            total = (rest[0] + rest[1]) + (rest[2] + rest[3])
            squares[1, p] += total * total
            blocks[block, p] = total
    for t in range(steps):
        if paths == 1:
            x = g[held + t]
            profile[0, t], profile[1, t] = x, x * x
            continue
        row = g[(held + t) * paths : (held + t + 1) * paths]
        profile[0, t] = _across(row, rest)
        for p in range(paths):
            rest[2 * paths + p] = row[p] * row[p]
        profile[1, t] = _across(rest[2 * paths : 3 * paths], rest)


@_part
def _block(g, c, at, there, count, one, totals, more, p):
    """Add the products of one path in a block whose partners are all there; its values are `one` apart."""
    two, three, four, five = one + one, one + one + one, one + one + one + one, one + one + one + one + one
    six, eight, twelve = three + three, four + four, four + four + four
    plain = square = crossed = lag1 = lag2 = lag3 = lag4 = lag5 = lag6 = lag8 = lag12 = 0.0
    cluster1 = cluster2 = cluster3 = cluster5 = 0.0
    for k in range(count):
        t, u = np.uint64(at) + np.uint64(k) * one, np.uint64(there) + np.uint64(k) * one
        x, y = g[t], c[u]
        plain += x
        square += x * x
        crossed += y * g[t - one]
        lag1 += x * g[t - one]
        lag2 += x * g[t - two]
        lag3 += x * g[t - three]
        lag4 += x * g[t - four]
        lag5 += x * g[t - five]
        lag6 += x * g[t - six]
        lag8 += x * g[t - eight]
        lag12 += x * g[t - twelve]
        cluster1 += y * c[u - one]
        cluster2 += y * c[u - two]
        cluster3 += y * c[u - three]
        cluster5 += y * c[u - five]
    totals[0, p] += plain
    totals[1, p] += square
    totals[4, p] += crossed
    totals[6, p] += lag1
    totals[7, p] += lag2
    totals[8, p] += lag3
    totals[9, p] += lag4
    totals[10, p] += lag5
    totals[11, p] += lag6
    totals[12, p] += lag8
    totals[13, p] += lag12
    totals[14 + more, p] += cluster1
    totals[15 + more, p] += cluster2
    totals[16 + more, p] += cluster3
    totals[17 + more, p] += cluster5


def add_products(total, a, b, both, offset):
    """Add a·b (or a, unless `both`) to total, in blocks, where the rows begin `offset` steps after a block.

    a, b: (steps, paths) in one row.
    """
    paths = total.shape[0]
    end = offset + a.shape[0] // paths
    for p in range(paths):
        at = p - offset * paths
        total[p] = _along(total[p], a, at, b, at, both != 0, paths, offset, end)


def lagged(a, b, steps, lags, counts, totals):
    """Add products of two windows' views to totals (lags, paths): at each lag over the last so many of the steps.

    a at t goes with b at t − lag, or at a lag below 0 b at t with a at t + lag. a, b: (steps, paths) in one row.
    """
    paths = totals.shape[1]
    a_held, b_held = a.shape[0] // paths - steps, b.shape[0] // paths - steps
    for k in range(lags.shape[0]):
        at, bt = (a_held + min(lags[k], 0)) * paths, (b_held - max(lags[k], 0)) * paths
        for p in range(paths):
            totals[k, p] = _along(totals[k, p], a, at + p, b, bt + p, True, paths, steps - counts[k], steps)


@_part
def _along(total, a, at, b, bt, both, one, start, end):
    """The total with a·b (or a, unless `both`) of one path added over steps from `start` on, block after block.

    Blocks begin at multiples of 64; that of step 0 would be a[at], and `one` further that of step 1. Four go on
    together, where each sum has to wait for its last addition.
    """
    t = start
    while t < end:
        if t % BLOCK == 0 and t + 4 * BLOCK <= end:
            r0 = r1 = r2 = r3 = 0.0
            far = np.uint64(BLOCK * one)
            for s in range(t, t + BLOCK):
                i, j = np.uint64(at + s * one), np.uint64(bt + s * one)
                r0 += a[i] * (b[j] if both else 1.0)
                r1 += a[i + far] * (b[j + far] if both else 1.0)
                r2 += a[i + far + far] * (b[j + far + far] if both else 1.0)
                r3 += a[i + far + far + far] * (b[j + far + far + far] if both else 1.0)
            total = (((total + r0) + r1) + r2) + r3
            t += 4 * BLOCK
        else:
            r0, stop = 0.0, min(t - t % BLOCK + BLOCK, end)
            for s in range(t, stop):
                r0 += a[at + s * one] * (b[bt + s * one] if both else 1.0)
            total += r0
            t = stop
    return total


@_part
def _across(row, rest):
    """Sum over a row, neighbours first; `rest` has room for twice the row."""
    n, at, x = row.shape[0], 0, row
    while n > 1:
        half = n // 2
        y = rest[at : at + half + n % 2]
        for i in range(half):
            y[i] = x[2 * i] + x[2 * i + 1]
        if n % 2:
            y[half] = x[n - 1]
        n, at, x = half + n % 2, at + half + n % 2, y
    return x[0]


@_part
def _halved(x, at, one):
    """Sum of sixteen values, `one` apart, neighbours first."""
    return (
        ((x[at] + x[at + one]) + (x[at + 2 * one] + x[at + 3 * one]))
        + ((x[at + 4 * one] + x[at + 5 * one]) + (x[at + 6 * one] + x[at + 7 * one]))
    ) + (
        ((x[at + 8 * one] + x[at + 9 * one]) + (x[at + 10 * one] + x[at + 11 * one]))
        + ((x[at + 12 * one] + x[at + 13 * one]) + (x[at + 14 * one] + x[at + 15 * one]))
    )


def in_turn(row, values, first, width):
    """Add values that begin at place `first` to the entries of a row that `width` of them share, in their order.

    Four entries go on together, as blocks do.
    """
    t, end = 0, values.shape[0]
    while t < end:
        k = (first + t) // width
        if (first + t) % width == 0 and t + 4 * width <= end:
            r0, r1, r2, r3 = row[k], row[k + 1], row[k + 2], row[k + 3]
            for s in range(t, t + width):
                r0 += values[s]
                r1 += values[s + width]
                r2 += values[s + 2 * width]
                r3 += values[s + 3 * width]
            row[k], row[k + 1], row[k + 2], row[k + 3] = r0, r1, r2, r3
            t += 4 * width
        else:
            stop = min(t - (first + t) % width + width, end)
            for s in range(t, stop):
                row[k] += values[s]
            t = stop


def looked(x, first_step, prints, found):
    """Add the fingerprint of one path's values to prints; found: how many are 0, and how many not finite."""
    bits, total, zeros, wild = x.view(np.uint64), np.uint64(0), 0, 0
    for t in range(x.shape[0]):
        w = np.uint64(first_step + t) * np.uint64(0x9E3779B97F4A7C15) + np.uint64(0x632BE59BD9B4E019)
        w = (w ^ (w >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
        w = (w ^ (w >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
        w = (w ^ (w >> np.uint64(31))) | np.uint64(1)
        total += (bits[t] ^ (bits[t] >> np.uint64(32))) * w
    for t in range(x.shape[0]):
        zeros += (bits[t] << np.uint64(1)) == 0
        wild += (bits[t] & _EXPONENT) == _EXPONENT
    prints[0] += total
    found[0], found[1] = zeros, wild


def marked(before, x, ends, mix, hashes, values, steps, mixed, found):
    """Fill in the marks of stretches that end in x, of one path; `before`: the values of a stretch before x.

    found: how many marks, and how many values that equal the one before. mixed: room for SOME values and two more.
    """
    reach, bits, bits_before, count, same = before.shape[0], x.view(np.uint64), before.view(np.uint64), 0, 0
    mixed[SOME], mixed[SOME + 1] = bits_before[reach - 2] * mix[0], bits_before[reach - 1] * mix[0]
    for begin in range(0, x.shape[0], SOME):
        n, least = min(SOME, x.shape[0] - begin), np.uint64(2**64 - 1)
        mixed[0], mixed[1] = mixed[SOME], mixed[SOME + 1]
        for k in range(n):
            mixed[k + 2] = bits[begin + k] * mix[0]
        for k in range(n):
            least = min(least, mixed[k + 2] ^ (mixed[k + 1] >> np.uint64(1)) ^ (mixed[k] >> np.uint64(2)))
        for k in range(n if least <= ends else 0):
            if mixed[k + 2] ^ (mixed[k + 1] >> np.uint64(1)) ^ (mixed[k] >> np.uint64(2)) > ends:
                continue
            t = begin + k
            first = x[t - reach] if t >= reach else before[t]
            known, total = first != x[t], np.uint64(0)
            for s in range(t - reach, t + 1):
                value = x[s] if s >= 0 else before[reach + s]
                known = known and np.isfinite(value)
                bits_of = np.float64(value).view(np.uint64)
                total = (total ^ bits_of ^ (bits_of >> np.uint64(32))) * mix[1]
                total ^= total >> np.uint64(29)
            if known:
                hashes[count], values[count], steps[count] = total, x[t], t
                count += 1
    for t in range(1, x.shape[0]):
        same += x[t] == x[t - 1]
    found[0], found[1] = count, same + (x[0] == before[reach - 1])


def dithered(first_path, first_step, salt, paths, out):
    """Fill (steps, paths), in one row, with the numbers of `recover.dither`."""
    for t in range(out.shape[0] // paths):
        of_step = np.uint64(first_step + t) * np.uint64(0x9E3779B97F4A7C15) + salt
        for p in range(paths):
            x = of_step + np.uint64(first_path + p) * np.uint64(0xD1B54A32D192ED03)
            x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
            x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
            x ^= x >> np.uint64(31)
            out[t * paths + p] = np.float64(np.int64(x >> np.uint64(11))) * 2.0**-53 - (0.5 - 2.0**-54)
