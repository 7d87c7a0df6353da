"""Steps of a Kalman filter with a small state, one after another: a few operations for each value, on rows of paths.

All steps of a chunk are run from a state of 0; what the state before the chunk adds to them is linear in it, and is
taken off behind. So many chunks can be run side by side where there are few paths, and the bits are those of one chunk
after another.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import machine
from procgen.checks.blocks import compiled

MOST = 24  # products for each value up to which steps are taken: with more, matrix products of whole chunks are quicker


def products(a: NDArray, c: NDArray) -> int:
    """How many products a step takes for each path."""
    return int(np.count_nonzero(a)) + int(np.count_nonzero(c)) + 2 * len(c)


class Steps:
    """Some steps at once, `count` of them: a gain and a standard deviation for each.

    v[i] = y[i] − mean[i] − C s[i],   s[i+1] = A s[i] + K[i] v[i];   out is v[i] / sd[i]
    """

    def __init__(self, a: NDArray, c: NDArray, gains: Sequence[NDArray], roots: Sequence[float]):
        self.a, self.c = np.ascontiguousarray(a), np.ascontiguousarray(c)
        self.gains = np.array(gains)
        sds = np.array(roots)
        self.scales = 1.0 / np.where(sds > 0.0, sds, np.nan)
        self.seen = np.empty(self.gains.shape)  # what a state before the steps adds to each of them
        self.moved = np.eye(len(c))  # and what to the state after them
        if len(c) == 1:
            self._of_one()
            return
        for i, gain in enumerate(self.gains):
            row = c @ self.moved
            self.seen[i] = row * self.scales[i]
            self.moved = a @ self.moved - gain[:, None] * row

    def _of_one(self) -> None:
        """The same for a state of one number, in numbers of Python's: each series of many has steps of its own."""
        a, c, moved, rows = float(self.a[0, 0]), float(self.c[0]), 1.0, []
        for gain in self.gains[:, 0].tolist():
            rows.append(c * moved)
            moved = a * moved - gain * rows[-1]
        self.seen[:, 0] = np.array(rows) * self.scales
        self.moved[0, 0] = moved

    def take(self, y: NDArray, mean: NDArray, start: NDArray, out: NDArray) -> NDArray:
        """Innovations, into `out`, of rows that are a whole number of chunks; the state (d, paths) after them."""
        paths = y.shape[1]
        if not compiled(paths):
            return self._plain(y - mean[:, None], start, out)
        start, room = start.copy(), np.empty((2, *start.shape))
        numbers = self.c, self.a, self.gains, self.scales, self.seen, self.moved
        run = machine("stepped", "filtered", __package__)
        run(np.ascontiguousarray(y), mean, *numbers, start, out, room, np.empty(paths))
        return start

    def _plain(self, y: NDArray, start: NDArray, out: NDArray) -> NDArray:
        count, d, paths = len(self.scales), len(self.c), y.shape[1]
        v = np.ascontiguousarray(y.reshape(-1, count, paths).transpose(1, 0, 2))
        room, z = np.empty(v.shape[1:]), np.empty(v.shape)
        states, seen = [np.zeros(room.shape) for _ in range(d)], -self.c
        for i in range(count):
            _add(v[i], seen, states, room)
            np.multiply(v[i], self.scales[i], out=z[i])
            new = [gain * v[i] for gain in self.gains[i]]
            for state, row in zip(new, self.a, strict=True):
                _add(state, row, states, room)
            states = new
        starts, after = np.empty((d, *room.shape)), np.stack(states)
        for k in range(v.shape[1]):
            starts[:, k], now = start, start
            start = after[:, k]
            for j in range(d):
                start = start + self.moved[:, j, None] * now[j]
        for j in range(d):
            z -= self.seen[:, j, None, None] * starts[j]
        out.reshape(-1, count, paths)[...] = z.transpose(1, 0, 2)
        return start


def _add(total: NDArray, weights: NDArray, rows: Sequence[NDArray], room: NDArray) -> None:
    """Add weighted rows to the total, one after another; without those of weight 0."""
    for weight, row in zip(weights, rows, strict=True):
        if weight != 0.0:
            total += np.multiply(weight, row, out=room)
