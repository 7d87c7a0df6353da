"""Kalman innovations: the shocks of a Gaussian linear sum, standardised, whatever the number of its sources.

For s[t+1] = A s[t] + B e[t], y[t] = mean[t] + C s[t] (+ rounding noise) the one-step prediction errors divided by
their standard deviations are independent standard normals if and only if the series is the one stated
(Kalman 1960; Schweppe 1965). The gains do not depend on the values, so steps are taken in chunks: one by one on rows
of paths where the state is small (`small`), by matrix products where it is not.
"""

from __future__ import annotations

from dataclasses import field
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import BLOCK, GROUP
from procgen.checks.small import MOST, Steps, products
from procgen.spec.records import dataclass

_CHUNK, _LONG_CHUNK = 32, 128  # steps taken at once by matrix products, from a multiple of it on; of a large state
_MOST_GROWN = 1e3  # what a state may become over a chunk without its gains, which are taken off: rounding grows with it
_KEPT = 16 << 20  # bytes of chunks that are kept
_SETTLED = 1e-13  # relative change of the gain that counts as none
_LONGEST = 65_536  # the gain is taken as settled after this many steps at the latest
_LARGE = 64  # elements of a state from which on it repays to tell which are only passed on


@dataclass
class Kalman:
    """Innovations of one series.

    Parameters
    ----------
    a, q : (d, d) arrays
        Transition, and covariance of the state's noise B E[e e'] B'.
    c : (d,) array
        Observation row.
    p0 : (d, d) array
        Covariance of the state at step 0; its mean is 0.
    rounding : float
        Variance of independent noise on the values (rounding to decimals), usually 0.
    """

    a: NDArray
    q: NDArray
    c: NDArray
    p0: NDArray
    rounding: float = 0.0
    gains: list[NDArray] = field(default_factory=list, repr=False)
    roots: list[float] = field(default_factory=list, repr=False)
    settled: int | None = None

    def __post_init__(self) -> None:
        self._p = np.array(self.p0, dtype=float)
        self._still = 0  # steps in a row that have moved no gain
        self._chunks: dict[tuple[int, int], Chunk | Steps] = {}
        # an element without a past has no gain either: it stays at its mean
        self._moves = np.flatnonzero(self.a.any(axis=1))
        self._a, self._c = self.a[np.ix_(self._moves, self._moves)], self.c[self._moves]
        self._memory = max(len(self._c), 1)
        self._small = products(self._a, self._c) <= MOST
        self._step, self._step_of_moves = _quick(self.a), _quick(self._a)
        self._runs: dict[int, Run] = {}
        self._scale = float(np.max(np.abs(np.diag(self._p + self.q)))) or 1.0

    def start(self, paths: int) -> NDArray:
        """The predicted state before step 0: a row for each element that moves."""
        return np.zeros((len(self._c), paths))

    def prepare(self, most: int = 4096) -> int:
        """Compute the gains ahead; returns the step at which they have settled, at most `most`."""
        self._extend(most - 1)
        return min(len(self.gains), most)

    def innovations(
        self, y: NDArray, state: NDArray, step: int, mean: NDArray | None = None, out: NDArray | None = None
    ) -> tuple[NDArray, NDArray]:
        """Standardised innovations (steps, paths) of the values `y` about their mean (steps,), and the state after.

        `state` is the prediction for `step`, the first row of `y`. Rows that the theory calls constant are NaN. `out`:
        where innovations may be put.
        """
        mean = np.zeros(len(y)) if mean is None else mean
        out = np.empty(y.shape) if out is None else out
        if not self.a.any():
            y = np.subtract(y, mean[:, None], out=out) if mean.any() else y
            return np.multiply(y, self._scales(step, len(y))[:, None], out=out), state
        small = self._small and y.shape[1] % GROUP == 0
        size = BLOCK if small else self._size
        y = y if small else y - mean[:, None]
        t = 0
        while t < len(y):
            at, left = step + t, len(y) - t
            self._extend(at + min(left, size) - 1)
            count = min(size - at % size, left)
            if count == size and self.settled is not None and at >= self.settled:
                count = left - left % size
            chunk, rows = self._chunk(at, min(count, size), small), slice(t, t + count)
            if isinstance(chunk, Steps):
                state = chunk.take(y[rows], mean[rows], state, out[rows])
            else:
                state = self._take(chunk, y[rows], state, out[rows])
            t += count
        return out, state

    def _scales(self, step: int, steps: int) -> NDArray:
        """What values are multiplied by where nothing is carried from step to step: the prediction is always 0."""
        self._extend(step + steps - 1)
        roots = np.array(self.roots[step : step + steps])
        roots = np.append(roots, np.full(steps - len(roots), self.roots[-1]))
        return 1.0 / np.where(roots > 0, roots, np.nan)

    def _take(self, chunk: Chunk, y: NDArray, state: NDArray, out: NDArray) -> NDArray:
        """Innovations of rows that are a whole number of chunks; the state after them."""
        size, paths = len(chunk.h), y.shape[1]
        if paths % GROUP:
            columns = y.reshape(-1, size, paths).transpose(1, 0, 2).reshape(size, -1)
            starts, state = chunk.starts(columns, state)
            z = chunk.h @ columns - chunk.o @ starts
            out[...] = z.reshape(size, -1, paths).transpose(1, 0, 2).reshape(out.shape)
            return state
        blocks = np.ascontiguousarray(y.reshape(-1, size, paths // GROUP, GROUP).transpose(0, 2, 1, 3))
        groups = np.ascontiguousarray(state.reshape(len(state), -1, GROUP).transpose(1, 0, 2))
        pushed = np.matmul(chunk.r, blocks)
        before = np.empty((len(blocks), *groups.shape))
        for i, push in enumerate(pushed):
            before[i] = groups
            groups = np.matmul(chunk.m, groups) + push
        z = np.matmul(chunk.h, blocks)
        z -= np.matmul(chunk.o, before)
        out.reshape(-1, size, paths // GROUP, GROUP)[...] = z.transpose(0, 2, 1, 3)
        return groups.transpose(1, 0, 2).reshape(state.shape)

    def _chunk(self, first: int, count: int, small: bool) -> Chunk | Steps:
        """The chunk of `count` steps from `first` on; those after the gain has settled are all the same."""
        if self.settled is not None and first >= self.settled:
            first = self.settled
        key = (first, count if small else -count)
        if key not in self._chunks:
            while len(self._chunks) * 8 * (count + len(self._c)) ** 2 > _KEPT:
                del self._chunks[next(iter(self._chunks))]
            at = [min(first + i, len(self.gains) - 1) for i in range(count)]
            gains, roots = [self.gains[k][self._moves] for k in at], [self.roots[k] for k in at]
            self._chunks[key] = (
                Steps(self._a, self._c, gains, roots) if small else Chunk(self._run(count), gains, roots)
            )
        return self._chunks[key]

    @cached_property
    def _size(self) -> int:
        """Steps of a chunk."""
        size = _LONG_CHUNK if len(self._c) >= _LARGE else _CHUNK
        while size > 1 and np.max(np.abs(self._run(size).power), initial=0.0) > _MOST_GROWN:
            size //= 2
        return size

    def _run(self, count: int) -> Run:
        if count not in self._runs:
            self._runs[count] = Run(self._step_of_moves, self._a, self._c, count)
        return self._runs[count]

    def _extend(self, step: int) -> None:
        """Gains up to `step`, until they settle."""
        while self.settled is None and len(self.gains) <= step:
            p = self._p
            pc = p @ self.c
            known = float(self.c @ pc) <= 1e-14 * self._scale  # rounding alone is no shock
            f = float(self.c @ pc) + self.rounding
            gain = np.zeros(len(self.c)) if known else self._step @ pc / f
            p = (self._step @ (self._step @ p).T).T + self.q - (0.0 if known else np.outer(gain, gain) * f)
            self._p = 0.5 * (p + p.T)
            self.gains.append(gain)
            self.roots.append(0.0 if known else float(np.sqrt(f)))
            if self._quiet():
                self.settled = len(self.gains) - 1

    def _quiet(self) -> bool:
        if len(self.gains) >= _LONGEST:
            return True
        if len(self.gains) < 3 or self.roots[-1] == 0.0:
            return False
        new, old = self.gains[-1], self.gains[-2]
        close = np.max(np.abs(new - old)) <= _SETTLED * max(float(np.max(np.abs(new))), 1e-300)
        still = bool(close) and abs(self.roots[-1] - self.roots[-2]) <= _SETTLED * self.roots[-1]
        self._still = self._still + 1 if still else 0
        return self._still >= self._memory  # gains of a season may move once a season only


class Passing:
    """A transition most of whose elements only become others: products with it take rows as they are."""

    def __init__(self, a: NDArray):
        passed = (np.count_nonzero(a, axis=1) == 1) & (a.max(axis=1) == 1.0)
        self.source, self.others = np.argmax(a, axis=1), np.flatnonzero(~passed)
        self.rows = np.ascontiguousarray(a[self.others])

    def __matmul__(self, x: NDArray) -> NDArray:
        out = x[self.source]
        out[self.others] = self.rows @ x
        return out


def _quick(a: NDArray) -> NDArray | Passing:
    """What multiplies as a transition does, quickest."""
    passing = Passing(a) if len(a) >= _LARGE else None
    return a if passing is None or 4 * len(passing.others) > len(a) else passing


class Run:
    """Some steps without gains: rows c A^i for each of them, and the power A^count."""

    def __init__(self, step: NDArray | Passing, a: NDArray, c: NDArray, count: int):
        self.step, self.c = step, c
        self.rows = np.empty((count, len(c)))
        row = c
        for i in range(count):
            self.rows[i], row = row, row @ a
        self.power = np.linalg.matrix_power(a, count)


class Chunk:
    """Some steps at once: v = H y − O state, and state' = M state + R y.

    From y = rows state + (gains pushed on and seen) v, a triangular system for v, and state' = A^n state + G v, where
    column i of G is the gain of step i pushed on to the end: H is the inverse of the system, O = H rows,
    M = A^n − G O and R = G H. What is above the diagonal of H is rounding's, hence nothing.

    A sum over columns goes the same way for each of them, since every product has 16 columns, one lane group. What
    is left beside whole groups are always the same paths.
    """

    def __init__(self, run: Run, gains: list[NDArray], roots: list[float]):
        count = len(gains)
        pushed, system = np.zeros((len(run.c), count)), np.eye(count)
        for i, gain in enumerate(gains):
            system[i, :i] = run.c @ pushed[:, :i]
            pushed[:, :i] = run.step @ pushed[:, :i]
            pushed[:, i] = gain
        self.h = np.tril(np.linalg.inv(system))
        self.o = self.h @ run.rows
        self.m, self.r = run.power - pushed @ self.o, pushed @ self.h
        scales = np.where(np.array(roots) > 0, roots, np.nan)[:, None]
        self.h, self.o = self.h / scales, self.o / scales

    def starts(self, columns: NDArray, state: NDArray) -> tuple[NDArray, NDArray]:
        """The state before each of a run of chunks, all in columns (size, chunks · paths), and that after the last."""
        paths = state.shape[1]
        after = self.r @ columns
        after[:, :paths] += self.m @ state
        power, reach = self.m, paths
        while reach < after.shape[1]:  # after k rounds, the last 2^k chunks are felt
            after[:, reach:] += power @ after[:, :-reach]
            power, reach = power @ power, 2 * reach
        return np.concatenate([state, after[:, :-paths]], axis=1), after[:, -paths:].copy()
