"""All sums over the scores of a tile in one pass, compiled: strips of 32 paths by 64 steps, which stay in the nearest
cache.

Called by `shocks` for tiles (steps, paths) of known scores; imported only where there is no machine code yet (numba,
the extra `speed`). Every sum adds the same numbers in the same order as the plain form, so that the bits are the same:
along a path step after step in blocks of 64, across paths neighbours first. Four steps go at once, so that a row once
loaded serves all lags. Rows before the first known score, and columns beyond the last path, are zeros: these add
nothing.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from procgen.chance.kernel import compiled_function

BLOCK, STRETCH = 64, 16  # steps, as in `blocks` and `stretches`
STRIP, WIDTH = 32, 40  # paths of a strip, and numbers from one of its rows to the next: one path more is at hand
BEFORE, SIZES_BEFORE = 12, 5  # steps back to the longest lag of `shocks.MEMORY_LAGS`, and of `CLUSTER_LAGS`
SUMS, NEIGHBOURS = 16, 2  # of g, g², neighbours, asymmetry, g at each of its lags, sizes at each of theirs
_ROWS = (BEFORE + BLOCK, SIZES_BEFORE + BLOCK, SUMS, BLOCK // 2, BLOCK // 4, BLOCK // 8)
ROOM = tuple([WIDTH * rows for rows in _ROWS])  # numbers to work in
_MOST = np.int64(2**63 - 1)  # all bits of a double but its sign
_STEEP, _FALL = 6 * np.sqrt(5.0), 0.5 * np.sqrt(5.0)  # of `scores.cluster_scores`
_part = partial(compiled_function, inline="always")


def strips(
    g, clusters, steps, kept, table, scale, counts, worst, totals, at, beside, profile, tops, squares, blocks, room
):
    """Sum over the last `steps` of two windows' views, g of scores and clusters, whose new rows are filled in here.

    kept: how many of the last rows of each block of clusters are filled in. table, scale: of `uniforms.pieces`.
    counts: by bin of the uniforms. worst: bits of the largest size of each step. totals: rows by path, of which at[k]
    is that of sum k; beside: products with the left neighbour, from the second path on. profile (2, steps): sums of g
    and g² over paths; tops: room for (2, 64, strips). squares: by path those of the sums over stretches of 16 and of
    64 steps, the latter being blocks. room: arrays of the sizes of ROOM.
    """
    held, held_too, paths = g.shape[0] - steps, clusters.shape[0] - steps, g.shape[1]
    scores, sizes, sums, twos, fours, eights = room
    worst[:steps] = 0
    for first in range(0, steps, BLOCK):
        count = min(BLOCK, steps - first)
        for strip in range(tops.shape[2]):
            path = strip * STRIP
            width, more = min(STRIP, paths - path), min(STRIP + 1, paths - path)
            _fetch(g, held + first - BEFORE, BEFORE + count, path, more, scores)
            _fetch(clusters, held_too + first - SIZES_BEFORE, SIZES_BEFORE, path, width, sizes)
            new, fresh = scores[WIDTH * BEFORE :], sizes[WIDTH * SIZES_BEFORE :]
            _scored(new, width, count, table, scale, counts, fresh)
            for t in range(max(count - kept, 0), count):
                row, out = fresh[WIDTH * t : WIDTH * (t + 1)], clusters[held_too + first + t][path:]
                for p in range(width):
                    out[p] = row[p]
            for t in range(count):
                bits, far = new[WIDTH * t : WIDTH * (t + 1)].view(np.int64), np.int64(0)
                for p in range(STRIP):
                    far = max(far, bits[p] & _MOST)
                worst[first + t] = max(worst[first + t], far)
            for k in range(count * WIDTH // 2):
                twos[k] = new[2 * k] + new[2 * k + 1]
            _across(twos, fours, eights, count, tops[0], strip)
            for k in range(count * WIDTH // 2):
                twos[k] = new[2 * k] * new[2 * k] + new[2 * k + 1] * new[2 * k + 1]
            _across(twos, fours, eights, count, tops[1], strip)
            sums[:] = 0.0
            _summed(scores, sizes, (count + 3) // 4, sums)
            for k in range(SUMS):
                row = sums[WIDTH * k : WIDTH * (k + 1)]
                if k == NEIGHBOURS:
                    for p in range(more - 1):
                        beside[path + p] += row[p]
                else:
                    total = totals[at[k]][path:]
                    for p in range(width):
                        total[p] += row[p]
            if count == BLOCK:
                for k in range(4):
                    _halved(new[WIDTH * STRETCH * k :], twos[WIDTH * k : WIDTH * (k + 1)])
                _stretched(twos, width, squares[0][path:], squares[1][path:], blocks[first // BLOCK][path:])
        for t in range(count):
            profile[0, first + t] = _row_sum(tops[0, t])
            profile[1, first + t] = _row_sum(tops[1, t])


@_part
def _fetch(x, at, count, path, width, out):
    """Fill rows with x[at : at + count, path : path + width]: zeros before the first row of x, behind the last path.

    Rows are filled up to a multiple of four.
    """
    for t in range(count):
        row = out[WIDTH * t : WIDTH * (t + 1)]
        if at + t >= 0 and width >= STRIP:
            there = x[at + t][path:]
            for p in range(STRIP):
                row[p] = there[p]
            row[STRIP] = there[STRIP] if width > STRIP else 0.0
        else:
            for p in range(WIDTH):
                row[p] = 0.0
            if at + t >= 0:
                there = x[at + t][path:]
                for p in range(width):
                    row[p] = there[p]
    for k in range(WIDTH * count, min(WIDTH * ((count + 3) // 4 * 4), out.shape[0])):
        out[k] = 0.0


@_part
def _scored(g, width, count, table, scale, counts, out):
    """Count the uniforms of so many rows of scores, and fill in their cluster scores: zeros behind the last one."""
    cells, bins = float(table.shape[0] // 4 - 1), counts.shape[0]
    for k in range(out.shape[0]):
        out[k] = min(max(g[k] * scale + 0.5 * cells, 0.0), cells)
    for t in range(count):
        row = out[WIDTH * t : WIDTH * (t + 1)]
        for p in range(width):  # one by one: processors fetch from tables no faster in vectors
            whole = np.int64(row[p])
            at, part = np.uint64(4 * whole), row[p] - whole
            u = table[at + np.uint64(2)] + part * table[at + np.uint64(3)]
            u = table[at] + part * (table[at + np.uint64(1)] + part * u)
            counts[np.uint64(min(np.int64(u * bins), bins - 1))] += 1
            row[p] = u
    for k in range(out.shape[0]):
        v = out[k] - 0.5
        out[k] = v * v * _STEEP - _FALL
    for t in range(count if width < STRIP else 0):
        for p in range(width, STRIP):
            out[WIDTH * t + p] = 0.0
    for k in range(WIDTH * count, min(WIDTH * ((count + 3) // 4 * 4), out.shape[0])):
        out[k] = 0.0


@_part
def _summed(g, c, fours, sums):
    """Add products of scores g and of cluster scores c to rows of sums; the first rows are those before the block."""
    n = WIDTH
    for four in range(fours):
        r = g[4 * n * four : n * (4 * four + BEFORE + 4)]
        for p in range(STRIP):
            x0, x1, x2, x3 = r[12 * n + p], r[13 * n + p], r[14 * n + p], r[15 * n + p]
            y1, y2, y3, y4 = r[11 * n + p], r[10 * n + p], r[9 * n + p], r[8 * n + p]
            y5, y6, y7, y8 = r[7 * n + p], r[6 * n + p], r[5 * n + p], r[4 * n + p]
            y9, ya, yb, yc = r[3 * n + p], r[2 * n + p], r[n + p], r[p]
            sums[p] = (((sums[p] + x0) + x1) + x2) + x3
            sums[n + p] = (((sums[n + p] + x0 * x0) + x1 * x1) + x2 * x2) + x3 * x3
            z0, z1, z2, z3 = r[12 * n + 1 + p], r[13 * n + 1 + p], r[14 * n + 1 + p], r[15 * n + 1 + p]
            sums[2 * n + p] = (((sums[2 * n + p] + z0 * x0) + z1 * x1) + z2 * x2) + z3 * x3
            sums[4 * n + p] = (((sums[4 * n + p] + x0 * y1) + x1 * x0) + x2 * x1) + x3 * x2
            sums[5 * n + p] = (((sums[5 * n + p] + x0 * y2) + x1 * y1) + x2 * x0) + x3 * x1
            sums[6 * n + p] = (((sums[6 * n + p] + x0 * y3) + x1 * y2) + x2 * y1) + x3 * x0
            sums[7 * n + p] = (((sums[7 * n + p] + x0 * y4) + x1 * y3) + x2 * y2) + x3 * y1
            sums[8 * n + p] = (((sums[8 * n + p] + x0 * y5) + x1 * y4) + x2 * y3) + x3 * y2
            sums[9 * n + p] = (((sums[9 * n + p] + x0 * y6) + x1 * y5) + x2 * y4) + x3 * y3
            sums[10 * n + p] = (((sums[10 * n + p] + x0 * y8) + x1 * y7) + x2 * y6) + x3 * y5
            sums[11 * n + p] = (((sums[11 * n + p] + x0 * yc) + x1 * yb) + x2 * ya) + x3 * y9
        s = c[4 * n * four : n * (4 * four + SIZES_BEFORE + 4)]
        for p in range(STRIP):
            x0, x1, x2, x3 = s[5 * n + p], s[6 * n + p], s[7 * n + p], s[8 * n + p]
            y1, y2, y3, y4, y5 = s[4 * n + p], s[3 * n + p], s[2 * n + p], s[n + p], s[p]
            z0, z1, z2, z3 = r[11 * n + p], r[12 * n + p], r[13 * n + p], r[14 * n + p]
            sums[3 * n + p] = (((sums[3 * n + p] + x0 * z0) + x1 * z1) + x2 * z2) + x3 * z3
            sums[12 * n + p] = (((sums[12 * n + p] + x0 * y1) + x1 * x0) + x2 * x1) + x3 * x2
            sums[13 * n + p] = (((sums[13 * n + p] + x0 * y2) + x1 * y1) + x2 * x0) + x3 * x1
            sums[14 * n + p] = (((sums[14 * n + p] + x0 * y3) + x1 * y2) + x2 * y1) + x3 * x0
            sums[15 * n + p] = (((sums[15 * n + p] + x0 * y5) + x1 * y4) + x2 * y3) + x3 * y2


@_part
def _across(twos, fours, eights, count, out, strip):
    """Of sums of two neighbours in each row of a strip the sums of all; fours, eights: room for those on the way."""
    for k in range(count * WIDTH // 4):
        fours[k] = twos[2 * k] + twos[2 * k + 1]
    for k in range(count * WIDTH // 8):
        eights[k] = fours[2 * k] + fours[2 * k + 1]
    for t in range(count):
        row = eights[WIDTH // 8 * t : WIDTH // 8 * t + 4]
        out[t, strip] = (row[0] + row[1]) + (row[2] + row[3])


@_part
def _row_sum(row):
    """Sum over a row, neighbours first; the row is used up."""
    n = row.shape[0]
    while n > 1:
        half = n // 2
        for i in range(half):
            row[i] = row[2 * i] + row[2 * i + 1]
        if n % 2:
            row[half] = row[n - 1]
        n = half + n % 2
    return row[0]


@_part
def _halved(x, out):
    """Sums over sixteen rows, neighbours first."""
    n = WIDTH
    for p in range(STRIP):
        out[p] = (
            ((x[p] + x[n + p]) + (x[2 * n + p] + x[3 * n + p]))
            + ((x[4 * n + p] + x[5 * n + p]) + (x[6 * n + p] + x[7 * n + p]))
        ) + (
            ((x[8 * n + p] + x[9 * n + p]) + (x[10 * n + p] + x[11 * n + p]))
            + ((x[12 * n + p] + x[13 * n + p]) + (x[14 * n + p] + x[15 * n + p]))
        )


@_part
def _stretched(short, width, squares, more, block):
    """Of the four sums over stretches of a block: that over the block, and what is added to the sums of squares."""
    n = WIDTH
    for p in range(width):
        a, b, c, d = short[p], short[n + p], short[2 * n + p], short[3 * n + p]
        squares[p] += (a * a + b * b) + (c * c + d * d)
        whole = (a + b) + (c + d)
        more[p] += whole * whole
        block[p] = whole
