"""Stationary Gaussian series drawn exactly from their autocovariances: each value is predicted from all before it."""

from __future__ import annotations

from threading import local

import numpy as np

from procgen.chance.kernel import is_compiling, kernel
from procgen.spec.records import dataclass
from procgen.terms.base import Ahead, Array, State

LONGEST_EXACT = 10_000  # steps: their work grows with the square of them
MARKS = 256  # steps: so far apart are weights kept
NARROW = 64  # paths, from which on a call for each step before costs less than all of them at once


@kernel
def predict(weights, past, z, out):
    """out = z + Σ weights[j] past[−1−j]."""
    n = weights.shape[0]
    x = z[0]
    for j in range(n):
        x = x + weights[j] * past[n - 1 - j]
    out[0] = x


def predicted(weights: Array, past: Array, z: Array, out: Array) -> None:
    """`predict`, where few paths are not compiled by one call for all steps before: the same sums in the same order."""
    if past.shape[1] >= NARROW or is_compiling():
        predict(weights, past, z, out)
    else:
        out[:] = np.add.accumulate(np.concatenate([z, weights[:, None] * past[::-1]]), axis=0)[-1]


class Predictors(local):
    """Best linear predictors from all t values before (Durbin 1960; Levinson 1947), by autocorrelations at all lags.

    Each thread has weights of its own, as each is at a step of its own. Whoever goes back, as a tile that is undone
    after it was drawn, goes on from the weights that were met last at a multiple of `MARKS` steps.
    """

    def __init__(self, gamma: Array):
        self.gamma = gamma
        self.weights, self.variance = np.zeros(0), 1.0
        self._marks = [(self.weights, self.variance)]

    def at(self, t: int) -> tuple[Array, float]:
        """The weights of the last t values, newest first, and the standard deviation of what is new; sd 1."""
        if t < len(self.weights):
            self.weights, self.variance = self._marks[t // MARKS]
        while len(self.weights) < t:
            self._next()
        return self.weights, float(np.sqrt(self.variance))

    def _next(self) -> None:
        """Weights of one value more."""
        known = len(self.weights)
        missed = self.gamma[known + 1] - added(self.weights * self.gamma[known:0:-1])
        partial = missed / self.variance
        weights = np.empty(known + 1)
        np.subtract(self.weights, partial * self.weights[::-1], out=weights[:known])
        weights[known] = partial
        self.weights, self.variance = weights, self.variance * (1.0 - partial * partial)
        if (known + 1) % MARKS == 0 and (known + 1) // MARKS == len(self._marks):
            self._marks.append((self.weights, self.variance))


@dataclass(frozen=True)
class Exact:
    """A series of standard deviation `sd` by its predictors. Its state is all its values so far, x (steps, paths)."""

    predictors: Predictors
    sd: float

    def begin(self) -> State:
        return {"x": np.zeros((0, 1))}

    def draw(self, normals: Array, state: State) -> tuple[Array, State]:
        """The values of as many standard normals (steps, paths), and the state after them."""
        z, past = self.sd * normals, state["x"]
        x = np.empty((len(past) + len(z), max(z.shape[1], past.shape[1] if len(past) else 1)))
        x[: len(past)] = past
        for t in range(len(past), len(x)):
            weights, spread = self.predictors.at(t)
            predicted(weights, x[:t], spread * z[t - len(past) : t - len(past) + 1], x[t : t + 1])
        return x[len(past) :].copy(), {"x": x}

    def undo(self, values: Array, state: State | None) -> tuple[Array, State]:
        """The standard normals behind values (steps, paths), and the state after them."""
        past = state["x"] if state else np.zeros((0, values.shape[1]))
        x, out = np.concatenate([past, values]), np.empty_like(values)
        for t in range(len(past), len(x)):
            weights, spread = self.predictors.at(t)
            row = out[t - len(past) : t - len(past) + 1]
            predicted(-weights, x[:t], x[t : t + 1], row)
            row /= spread * self.sd
        return out, {"x": x}

    def ahead(self, steps: int, state: State) -> Ahead:
        mean, _ = self.draw(np.zeros((steps, max(1, state["x"].shape[1]))), state)
        psi, _ = self.draw(np.eye(steps), {"x": np.zeros((len(state["x"]), steps))})
        return Ahead(mean, (psi * psi) @ np.ones((steps, 1)))


def added(values: Array) -> float:
    """The sum of a vector, which is used up: halves onto halves, an order that is the same everywhere."""
    n = len(values)
    while n > 1:
        half = n // 2
        np.add(values[:half], values[half : 2 * half], out=values[:half])
        if n % 2:
            values[half] = values[n - 1]
        n -= half
    return float(values[0]) if n else 0.0
