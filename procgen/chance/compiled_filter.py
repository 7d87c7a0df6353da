"""Filters of many coefficients, and products of matrices, compiled: by strips that stay in the nearest cache.

Called by `filters` and `matrices`; imported only where there is no machine code yet (numba, the extra `speed`).
Products are added one after another in the order of the coefficients, four of them each time that sums are fetched.
"""

from __future__ import annotations

from functools import partial

from procgen.chance.kernel import compiled_function

STRIP = 32  # paths, or columns


def filtered(x, a, p, q, back, phi, back_too, theta, forward, rows, rows_too, sums):
    """x[t] = a[t] + Σφ x[t−i] + Σθ a[t−j]: fills in x behind its first p rows, or, not `forward`, a behind its first q.

    back, back_too: the distances i and j of coefficients phi and theta. rows, rows_too: room for as many rows as x and
    a have of a strip each, one behind the other; sums: for one row. Coefficients have the sign with which they are
    added.
    """
    steps, lanes = x.shape[0] - p, x.shape[1]
    for first in range(0, lanes, STRIP):
        width = min(STRIP, lanes - first)
        _fetch(x, p if forward else p + steps, first, width, rows)
        _fetch(a, q + steps if forward else q, first, width, rows_too)
        for t in range(steps):
            base = rows_too[STRIP * (q + t) :] if forward else rows[STRIP * (p + t) :]
            for k in range(STRIP):
                sums[k] = base[k]
            _added(rows, p + t, back, phi, sums)
            _added(rows_too, q + t, back_too, theta, sums)
            made = rows[STRIP * (p + t) :] if forward else rows_too[STRIP * (q + t) :]
            out = x[p + t][first:] if forward else a[q + t][first:]
            for k in range(STRIP):
                made[k] = sums[k]
            for k in range(width):
                out[k] = sums[k]


def product(a, b, out, back, rows, sums):
    """a b into out; back: how far the rows of b lie before the one behind them; rows: room for a strip of these."""
    for first in range(0, b.shape[1], STRIP):
        width = min(STRIP, b.shape[1] - first)
        _fetch(b, b.shape[0], first, width, rows)
        for i in range(a.shape[0]):
            sums[:] = 0.0
            _added(rows, b.shape[0], back, a[i], sums)
            row = out[i][first:]
            for k in range(width):
                row[k] = sums[k]


@partial(compiled_function, inline="always")
def _fetch(x, count, first, width, rows):
    """Fill in the first rows of a strip."""
    for t in range(count):
        row, there = rows[STRIP * t : STRIP * (t + 1)], x[t][first:]
        for k in range(width):
            row[k] = there[k]


@partial(compiled_function, inline="always")
def _added(rows, at, back, weights, sums):
    """Add products of weights and rows so far before a row."""
    n, k = back.shape[0], 0
    while k + 4 <= n:
        r0, r1 = rows[STRIP * (at - back[k]) :], rows[STRIP * (at - back[k + 1]) :]
        r2, r3 = rows[STRIP * (at - back[k + 2]) :], rows[STRIP * (at - back[k + 3]) :]
        c0, c1, c2, c3 = weights[k], weights[k + 1], weights[k + 2], weights[k + 3]
        for i in range(STRIP):
            sums[i] = (((sums[i] + c0 * r0[i]) + c1 * r1[i]) + c2 * r2[i]) + c3 * r3[i]
        k += 4
    while k < n:
        r0, c0 = rows[STRIP * (at - back[k]) :], weights[k]
        for i in range(STRIP):
            sums[i] = sums[i] + c0 * r0[i]
        k += 1
