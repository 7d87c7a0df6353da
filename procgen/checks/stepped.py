"""Steps of small filters, compiled: what `small` does with a tile, in one pass over its rows.

Called by `small`, for tiles (steps, paths) in one piece of memory; imported only where there is no machine code yet
(numba, the extra `speed`). A path goes through the same operations in the same order as in the plain form, so that
the bits are the same. What is written is passed: memory is got outside.
"""

from __future__ import annotations

from functools import partial

from procgen.chance.kernel import compiled_function

_part = partial(compiled_function, inline="always")


def filtered(y, mean, c, a, gains, scales, seen, moved, start, out, states, v):
    """Innovations of rows that are a whole number of chunks, into out; start (d, paths) becomes the state after them.

    A chunk is run from a state of 0, and what its true state adds to each step, `seen`, is taken off. states, v: room
    for two states and for a row.
    """
    count, d, paths = scales.shape[0], c.shape[0], y.shape[1]
    if d == 1 and c[0] != 0.0 and a[0, 0] != 0.0:
        _alone(y, mean, c[0], a[0, 0], gains, scales, seen, moved[0, 0], start[0], out, states[0, 0])
        return
    for first in range(0, y.shape[0], count):
        for j in range(d):
            s = states[0, j]
            for p in range(paths):
                s[p] = 0.0
        for i in range(count):
            row, z, level, scale = y[first + i], out[first + i], mean[first + i], scales[i]
            old, new = states[i % 2], states[(i + 1) % 2]
            for p in range(paths):
                v[p] = row[p] - level
            for j in range(d):
                if c[j] != 0.0:
                    _take_off(v, c[j], old[j])
            for p in range(paths):
                z[p] = v[p] * scale
            for j in range(d):
                _take_off(z, seen[i, j], start[j])
            for k in range(d):
                s, gain = new[k], gains[i, k]
                for p in range(paths):
                    s[p] = gain * v[p]
                for j in range(d):
                    if a[k, j] != 0.0:
                        _add(s, a[k, j], old[j])
        end = states[count % 2]
        for k in range(d):
            for j in range(d):
                _add(end[k], moved[k, j], start[j])
        for k in range(d):
            s, last = start[k], end[k]
            for p in range(paths):
                s[p] = last[p]


@_part
def _alone(y, mean, c, a, gains, scales, seen, moved, start, out, state):
    """The same where a state is one number, in one go for each row."""
    count, paths = scales.shape[0], y.shape[1]
    for first in range(0, y.shape[0], count):
        for p in range(paths):
            state[p] = 0.0
        for i in range(count):
            row, z, level, scale = y[first + i], out[first + i], mean[first + i], scales[i]
            gain, before = gains[i, 0], seen[i, 0]
            for p in range(paths):
                v = (row[p] - level) - c * state[p]
                z[p] = v * scale - before * start[p]
                state[p] = gain * v + a * state[p]
        for p in range(paths):
            start[p] = state[p] + moved * start[p]


@_part
def _add(out, weight, row):
    for p in range(out.shape[0]):
        out[p] += weight * row[p]


@_part
def _take_off(out, weight, row):
    for p in range(out.shape[0]):
        out[p] -= weight * row[p]
