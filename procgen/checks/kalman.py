"""Kalman innovations: the shocks of a Gaussian linear sum, standardised, whatever the number of its sources.

For s[t+1] = A s[t] + B e[t], y[t] = mean[t] + C s[t] (+ rounding noise) the one-step prediction errors divided by
their standard deviations are independent standard normals if and only if the series is the one stated
(Kalman 1960; Schweppe 1965). Where the gain has settled, steps are taken in chunks by one matrix product.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

_CHUNK = 32  # steps taken at once after the gain has settled
_COLUMNS = 256  # paths in one product: small enough that the linear algebra library stays in one thread
_SETTLED = 1e-13  # relative change of the gain that counts as none
_LONGEST = 65_536  # the gain is taken as settled after this many steps at the latest


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
        self._scale = float(np.max(np.abs(np.diag(self._p + self.q)))) or 1.0

    def start(self, paths: int) -> NDArray:
        """The predicted state (d, paths) before step 0."""
        return np.zeros((len(self.c), paths))

    def prepare(self, most: int = 4096) -> int:
        """Compute the gains ahead; returns the step at which they have settled, at most `most`."""
        self._extend(most - 1)
        return min(len(self.gains), most)

    def innovations(self, y: NDArray, state: NDArray, step: int) -> tuple[NDArray, NDArray]:
        """Standardised innovations (steps, paths) of the deviations `y` from the mean, and the state after them.

        `state` is the prediction for `step`, the first row of `y`. Rows that the theory calls constant are NaN.
        """
        out = np.empty_like(y)
        t = 0
        while t < len(y):
            self._extend(step + t)
            if self.settled is not None and step + t >= self.settled and len(y) - t >= _CHUNK:
                whole = (len(y) - t) // _CHUNK * _CHUNK
                out[t : t + whole], state = self._chunks(y[t : t + whole], state)
                t += whole
                continue
            state = self._step(y[t], state, min(step + t, len(self.gains) - 1), out[t])
            t += 1
        return out, state

    def _step(self, y: NDArray, state: NDArray, at: int, out: NDArray) -> NDArray:
        v = y - self.c @ state
        root = self.roots[at]
        out[:] = v / root if root > 0 else np.nan
        return self.a @ state + np.multiply.outer(self.gains[at], v)

    def _extend(self, step: int) -> None:
        """Gains up to `step`, until they settle."""
        while self.settled is None and len(self.gains) <= step:
            p = self._p
            pc = p @ self.c
            known = float(self.c @ pc) <= 1e-14 * self._scale  # rounding alone is no shock
            f = float(self.c @ pc) + self.rounding
            gain = np.zeros(len(self.c)) if known else self.a @ pc / f
            p = self.a @ p @ self.a.T + self.q - (0.0 if known else np.outer(gain, gain) * f)
            self._p = 0.5 * (p + p.T)
            self.gains.append(gain)
            self.roots.append(0.0 if known else float(np.sqrt(f)))
            if self._quiet():
                self.settled = len(self.gains) - 1
                self._prepare()

    def _quiet(self) -> bool:
        if len(self.gains) >= _LONGEST:
            return True
        if len(self.gains) < 3 or self.roots[-1] == 0.0:
            return False
        new, old = self.gains[-1], self.gains[-2]
        close = np.max(np.abs(new - old)) <= _SETTLED * max(float(np.max(np.abs(new))), 1e-300)
        return bool(close) and abs(self.roots[-1] - self.roots[-2]) <= _SETTLED * self.roots[-1]

    def _prepare(self) -> None:
        """Matrices of one settled chunk: v = H y - O state, state' = M state + R y."""
        d, gain = len(self.c), self.gains[-1]
        m = self.a - np.outer(gain, self.c)
        observe, power, respond = np.empty((_CHUNK, d)), np.eye(d), np.empty((_CHUNK, d))
        for i in range(_CHUNK):
            observe[i] = self.c @ power
            respond[i] = power @ gain
            power = m @ power
        h = np.eye(_CHUNK)
        impulse = respond @ self.c
        for i in range(1, _CHUNK):
            h[i, :i] = -impulse[i - 1 :: -1][:i]
        root = self.roots[-1]
        self._h, self._o, self._m, self._r = h / root, observe / root, power, respond[::-1].T.copy()

    def _chunks(self, y: NDArray, state: NDArray) -> tuple[NDArray, NDArray]:
        paths = y.shape[1]
        blocks = y.reshape(-1, _CHUNK, paths)
        out, ends = np.empty_like(blocks), np.empty_like(state)
        for left in range(0, paths, _COLUMNS):
            some = slice(left, left + _COLUMNS)
            ends[:, some] = self._some(blocks[:, :, some], state[:, some], out[:, :, some])
        return out.reshape(y.shape), ends

    def _some(self, blocks: NDArray, state: NDArray, out: NDArray) -> NDArray:
        pushed = np.matmul(self._r, blocks)
        starts = np.empty((len(blocks), *state.shape))
        for i, push in enumerate(pushed):
            starts[i] = state
            state = self._m @ state + push
        out[...] = np.matmul(self._h, blocks)
        out -= np.matmul(self._o, starts)
        return state
