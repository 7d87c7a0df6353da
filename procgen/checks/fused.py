"""What `shocks`, `structure`, `copies`, `pools` and `grids` do, compiled: each in one pass instead of dozens.

Called by `blocks.in_one_pass`, for tiles (steps, paths) of finite values in one piece of memory; imported only where
there is no machine code yet (numba, the extra `speed`). Every sum adds the same numbers in the same order as the plain
form, so that the bits are the same. What is written is passed: memory is got outside.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from procgen.chance.kernel import compiled_function

BLOCK = 64  # steps, as in `blocks`
SOME = 16  # paths whose marks are looked for at once
_SIZE = np.int64(2**63 - 1)  # all bits of a double but its sign
_STEEP, _FALL = 6 * np.sqrt(5.0), 0.5 * np.sqrt(5.0)  # of `cluster_scores`
_part = partial(compiled_function, inline="always")


def scored(g, table, scale, counts, clusters, worst):
    """Of scores g: their uniforms, counted in bins; cluster scores; and the size of the farthest of each step.

    table, scale: of `uniforms.pieces`.
    """
    steps, paths = g.shape
    cells, bins = float(table.shape[0] // 4 - 1), counts.shape[0]
    for t in range(steps):
        row, out, bits = g[t], clusters[t], g[t].view(np.int64)
        far = np.int64(0)
        for p in range(paths):
            out[p] = min(max(row[p] * scale + 0.5 * cells, 0.0), cells)
        for p in range(paths):  # one by one: processors fetch from tables no faster in vectors
            whole = np.int64(out[p])
            at, part = np.uint64(4 * whole), out[p] - whole
            u = table[at + np.uint64(2)] + part * table[at + np.uint64(3)]
            u = table[at] + part * (table[at + np.uint64(1)] + part * u)
            counts[np.uint64(min(np.int64(u * bins), bins - 1))] += 1
            out[p] = u
        for p in range(paths):
            v = out[p] - 0.5
            out[p] = v * v * _STEEP - _FALL
            far = max(far, bits[p] & _SIZE)
        worst[t] = far


def plain_sums(z, totals, block):
    """Add z and z² along paths to the third and fourth of the totals."""
    steps = z.shape[0]
    for first in range(0, steps, BLOCK):
        end = min(first + BLOCK, steps)
        _add(totals[2], z[first:end], block)
        _add_products(totals[3], z, 0, z, 0, first, end, block)


def lagged(a, b, steps, lags, counts, totals, block):
    """Add products of two windows' views to totals (lags, paths): at each lag over the last so many of the steps.

    a at t goes with b at t − lag, or at a lag below 0 b at t with a at t + lag.
    """
    a_held, b_held = a.shape[0] - steps, b.shape[0] - steps
    for first in range(0, steps, BLOCK):
        end = min(first + BLOCK, steps)
        for k in range(lags.shape[0]):
            start = max(first, steps - counts[k])
            if start < end:
                _add_products(totals[k], a, a_held + min(lags[k], 0), b, b_held - max(lags[k], 0), start, end, block)


def add_products(total, a, b, both, offset, block):
    """Add a·b (or a, unless `both`) to total, in blocks, where the rows begin `offset` steps after a block."""
    steps, first = a.shape[0], 0
    while first < steps:
        end = min(first + BLOCK - (first + offset) % BLOCK, steps)
        if both:
            _add_products(total, a, 0, b, 0, first, end, block)
        else:
            _add(total, a[first:end], block)
        first = end


def combined(x, y, one, other, means, first, end, total, block):
    """Add one · x + other · y − mean, summed over the steps first … end − 1 of each path, to total; a mean a step."""
    paths = x.shape[1]
    start = first
    while start < end:
        stop = min(start - start % BLOCK + BLOCK, end)
        for p in range(paths):
            block[p] = 0.0
        for t in range(start, stop):
            a, b, mean = x[t], y[t], means[t - first]
            for p in range(paths):
                block[p] += (one * a[p] + other * b[p]) - mean
        for p in range(paths):
            total[p] += block[p]
        start = stop


@_part
def _add(total, rows, block):
    paths = total.shape[0]
    for p in range(paths):
        block[p] = 0.0
    for t in range(rows.shape[0]):
        row = rows[t]
        for p in range(paths):
            block[p] += row[p]
    for p in range(paths):
        total[p] += block[p]


@_part
def _add_products(total, a, at, b, bt, first, end, block):
    """Add a·b, where both are there, summed over the steps of a block; those of step 0 are a[at], b[bt]."""
    paths = total.shape[0]
    for p in range(paths):
        block[p] = 0.0
    for t in range(max(first, -bt), end):
        x, y = a[at + t], b[bt + t]
        for p in range(paths):
            block[p] += x[p] * y[p]
    for p in range(paths):
        total[p] += block[p]


def powers(rows, sums, pairs, levels):
    """Sums of the first four powers of rows (paths, size), paths by halves, and of products of neighbours.

    What is not finite counts for nothing. pairs (2, size): numbers of neighbours that are both known, then the sums of
    their products, joined by the same halves. levels (depth, 6, size): room for the halves that wait for their others.
    """
    size, waiting = rows.shape[1], 0  # bit k of `waiting`: level k holds the sums of 2^k paths
    for path in range(rows.shape[0]):
        row, level = rows[path], 0
        now = levels[0]
        while waiting >> level & 1:
            level += 1
        now = levels[level]
        for k in range(size):
            x = row[k] if abs(row[k]) < np.inf else 0.0
            now[0, k], now[1, k], now[2, k] = x, x * x, x * x * x
            now[3, k], now[4, k], now[5, k] = x * x * x * x, 0.0, 0.0
        for joined in range(level):
            left = levels[joined]
            end = path - (1 << joined)  # the last path of the left half; what is between it and the next one comes last
            a, b = rows[end], rows[end + 1]
            for power in range(4):
                for k in range(size):
                    now[power, k] = left[power, k] + now[power, k]
            for k in range(size):
                product = a[k] * b[k]
                both = abs(product) < np.inf
                now[4, k] = left[4, k] + now[4, k] + (1.0 if both else 0.0)
                now[5, k] = left[5, k] + now[5, k] + (product if both else 0.0)
        waiting += 1
    level, end, begun = 0, rows.shape[0], False
    sums[:, :] = 0.0
    pairs[:, :] = 0.0
    while waiting >> level:
        if waiting >> level & 1:
            left = levels[level]
            for k in range(size):
                for power in range(4):
                    sums[power, k] = left[power, k] + sums[power, k]
                product = rows[end - 1, k] * rows[end, k] if begun else np.nan
                both = abs(product) < np.inf
                pairs[0, k] = left[4, k] + pairs[0, k] + (1.0 if both else 0.0)
                pairs[1, k] = left[5, k] + pairs[1, k] + (product if both else 0.0)
            end, begun = end - (1 << level), True
        level += 1


def scattered(rows, first, second, group, numbers, means, products, room):
    """Number, mean and scatter of rows (paths, size), by groups of so many paths that are joined by halves.

    Rows with an element that is not finite are left out. first, second: the places of which products are made. numbers
    (depth + 1), means (depth + 1, size), products (depth + 1, pairs): the first is the result, the others are room for
    the halves that wait for their others; room (paths of a group, size + 1).
    """
    waiting = 0  # bit k: level k + 1 holds 2^k groups
    for begin in range(0, rows.shape[0], group):
        level = 0
        while waiting >> level & 1:
            level += 1
        _group(rows[begin : begin + group], first, second, numbers, means, products, level + 1, room)
        for joined in range(level):
            _join(first, second, numbers, means, products, joined + 1, level + 1)
        waiting += 1
    level, begun = 0, False
    while waiting >> level:
        if waiting >> level & 1 and begun:
            _join(first, second, numbers, means, products, level + 1, 0)
        elif waiting >> level & 1:
            begun, numbers[0] = True, numbers[level + 1]
            for k in range(means.shape[1]):
                means[0, k] = means[level + 1, k]
            for pair in range(products.shape[1]):
                products[0, pair] = products[level + 1, pair]
        level += 1


@_part
def _group(rows, first, second, numbers, means, products, at, room):
    """Number, mean and scatter of a few rows, into place `at`."""
    count, size, n = rows.shape[0], rows.shape[1], 0
    for path in range(count):
        known = True
        for k in range(size):
            known = known and abs(rows[path, k]) < np.inf
        n += known
        room[path, size] = 1.0 if known else 0.0
        for k in range(size):
            room[path, k] = rows[path, k] if known else 0.0
    numbers[at] = n
    for k in range(size):
        means[at, k] = _halves(room, count, k, k, False) / max(n, 1)
    for path in range(count):
        for k in range(size):
            room[path, k] = rows[path, k] - means[at, k] if room[path, size] else 0.0
    for pair in range(first.shape[0]):
        products[at, pair] = _halves(room, count, first[pair], second[pair], True)


@_part
def _halves(room, count, i, j, both):
    """Sum over up to sixteen rows of a column, or of the product of two, neighbours first."""
    total = 0.0
    for eight in range(0, count, 8):
        half = 0.0
        for four in range(eight, min(eight + 8, count), 4):
            quarter = 0.0
            for two in range(four, min(four + 4, count), 2):
                a = room[two, i] * room[two, j] if both else room[two, i]
                if two + 1 < count:
                    a += room[two + 1, i] * room[two + 1, j] if both else room[two + 1, i]
                quarter = a if two == four else quarter + a
            half = quarter if four == eight else half + quarter
        total = half if eight == 0 else total + half
    return total


@_part
def _join(first, second, numbers, means, products, left, right):
    """Both sides together, into the place of the right one (Chan, Golub & LeVeque 1983)."""
    n, m = numbers[left], numbers[right]
    share = m / max(n + m, 1)
    for pair in range(first.shape[0]):
        i, j = first[pair], second[pair]
        a = means[right, i] - means[left, i] if n else means[right, i]
        b = means[right, j] - means[left, j] if n else means[right, j]
        products[right, pair] = products[left, pair] + (products[right, pair] + a * b * (n * share))
    for k in range(means.shape[1]):
        if n:
            means[right, k] = means[left, k] + (means[right, k] - means[left, k]) * share
        elif not m:
            means[right, k] = means[left, k]
    numbers[right] = n + m


def looked(x, weights, prints, low, high, zeros):
    """Add the fingerprints of values x to prints; fill the bits of the extremes of each step, and its zeros."""
    steps, paths = x.shape
    for t in range(steps):
        bits, signed = x[t].view(np.uint64), x[t].view(np.int64)
        least, most, none = _SIZE, -_SIZE, 0
        for p in range(paths):
            none += (bits[p] << np.uint64(1)) == 0
            prints[p] += (bits[p] ^ (bits[p] >> np.uint64(32))) * weights[t]
            key = signed[p] ^ ((signed[p] >> 63) & _SIZE)  # ordered as the values are
            least, most = min(least, key), max(most, key)
        zeros[t] = none
        low[t], high[t] = least ^ ((least >> 63) & _SIZE), most ^ ((most >> 63) & _SIZE)


def marked(before, x, ends, mix, some, hashes, values, paths, steps, mixed, where, found_in_all):
    """Fill in the marks of stretches that end in x, and how many there are; `before`: the rows of a stretch before x.

    some: for each step of x, how many paths have the value of the step before. mixed, where: room for four rows and for
    one.
    """
    reach, lanes, count, end_of = before.shape[0], x.shape[1], 0, mixed[3]
    for t in range(-2, x.shape[0]):
        row = x[t] if t >= 0 else before[reach + t]
        bits, last = row.view(np.uint64), x[t - 1] if t > 0 else before[reach - 1]
        one, two, three = mixed[t % 3], mixed[(t - 1) % 3], mixed[(t - 2) % 3]
        if t < 0:
            for p in range(lanes):
                one[p] = bits[p] * mix[0]
            continue
        same = 0
        for p in range(lanes):
            now = bits[p] * mix[0]
            one[p] = now
            end_of[p] = now ^ (two[p] >> np.uint64(1)) ^ (three[p] >> np.uint64(2))
            same += row[p] == last[p]
        some[t] = same
        found = 0
        for begin in range(0, lanes, SOME):
            end = min(begin + SOME, lanes)
            if _least(end_of[begin:end]) <= ends:
                for p in range(begin, end):
                    where[found] = p
                    found += end_of[p] <= ends
        for k in range(found):
            p = where[k]
            first = x[t - reach, p] if t >= reach else before[t, p]
            known, total = first != x[t, p], np.uint64(0)
            for s in range(t - reach, t + 1):
                value = x[s, p] if s >= 0 else before[reach + s, p]
                known = known and np.isfinite(value)
                bits_of = np.float64(value).view(np.uint64)
                total = (total ^ bits_of ^ (bits_of >> np.uint64(32))) * mix[1]
                total ^= total >> np.uint64(29)
            if known:
                hashes[count], values[count], paths[count], steps[count] = total, x[t, p], p, t
                count += 1
    found_in_all[0] = count


@_part
def _least(row):
    least = np.uint64(2**64 - 1)
    for p in range(row.shape[0]):
        least = min(least, row[p])
    return least


def divided(gaps, across, room, apart, found):
    """The greatest common divisor of gaps that add up to `across`, as `grids` measures it; 0 where they have none."""
    grid, error = gaps[0], room
    for k in range(gaps.shape[0]):
        grid = min(grid, gaps[k])
    found[0] = 0.0
    while grid > apart * (room + error * (across / grid)):
        least, doubt = np.inf, 0.0
        for k in range(gaps.shape[0]):
            multiple = gaps[k] / grid
            left, unsure = abs(multiple - np.rint(multiple)) * grid, room + multiple * error
            if left > unsure and left < least:
                least, doubt = left, unsure
        if least == np.inf:
            found[0] = across / np.rint(across / grid)
            return
        grid, error = least, doubt
