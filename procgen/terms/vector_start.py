"""The stationary past of a system of several series, drawn exactly: the joint law of its last values and normals.

Everything here makes values: only portable operations (see `procgen.chance.portable`).
"""

from __future__ import annotations

from functools import cached_property

import numpy as np

from procgen.chance.portable import cholesky, matmul, sum_doubling
from procgen.terms.start import weigh


def state_space(phi, theta, loading, depth_x, depth_z):
    """Transition A and loading B of m = (x lags, z lags), newest first: m[t] = A m[t−1] + B z[t], a = loading z."""
    k, n = len(loading), (depth_x + depth_z) * len(loading)
    a, b = np.zeros((n, n)), np.zeros((n, k))
    for i, matrix in enumerate(phi):
        a[:k, i * k : (i + 1) * k] = matrix
    for j, matrix in enumerate(theta):
        a[:k, (depth_x + j) * k : (depth_x + j + 1) * k] = matmul(np.array(matrix, np.float64), loading)
    b[:k] = loading
    for lag in range(1, depth_x):
        a[lag * k : (lag + 1) * k, (lag - 1) * k : lag * k] = np.eye(k)
    if depth_z:
        b[depth_x * k : (depth_x + 1) * k] = np.eye(k)
    for lag in range(1, depth_z):
        at = (depth_x + lag) * k
        a[at : at + k, at - k : at] = np.eye(k)
    return a, b


class VectorStart:
    """The stationary past of a system: p values and q normals a component, and what lies further back."""

    def __init__(self, phi, theta, loading):
        self.k, self.p, self.q = len(loading), max(1, len(phi)), len(theta)
        self._parts = phi, theta, loading

    def _covariance(self, extra):
        """Joint covariance to `extra` more depth, in the order: z and x of the core, then z and x further back."""
        p, q = self.p + extra, self.q + extra if self.q else 0
        a, b = state_space(*self._parts, p, q)
        s = sum_doubling(a, matmul(b, b.T))
        k, z = self.k, p * self.k
        core = [z + i for i in range(self.q * k)] + list(range(self.p * k))
        rest = [z + i for i in range(self.q * k, q * k)] + list(range(self.p * k, p * k))
        order = core + rest
        return s[np.ix_(order, order)], len(core)

    @cached_property
    def factor(self):
        """Lower factor of the core: normals before step 0, then values, newest first."""
        return cholesky(self._covariance(0)[0])

    @cached_property
    def further(self):
        """Weights on the core's own coordinates, and the factor of what is new, for one more step back."""
        s, n = self._covariance(1)
        lower = cholesky(s)
        weights = np.zeros((len(s) - n, n))
        rest = lower[n:, :n].copy()
        for j in range(n - 1, -1, -1):  # W with W L = rest
            if lower[j, j] == 0.0:
                continue
            weights[:, j] = rest[:, j] / lower[j, j]
            rest = rest - weights[:, j : j + 1] * lower[j : j + 1, :n]
        return weights, lower[n:, n:]

    def draw(self, normals, starts, head):
        """Values (at least `head` steps) and normals (q), newest first, as lists of rows, k a step.

        `normals(step, count)` and `starts(step, count)` give k rows a step of standard normals, backwards from −1.
        """
        k, p, q = self.k, self.p, self.q
        core = weigh(self.factor, [*normals(0, q), *starts(0, p)])
        z, x = core[: q * k], core[q * k :]
        for step in range(max(0, head - p)):
            weights, factor = self.further
            known = [*z[step * k : (step + q) * k], *x[step * k : (step + p) * k]]
            fresh = [*(normals(q + step, 1) if q else ()), *starts(p + step, 1)]
            new = [w + n for w, n in zip(weigh(weights, known), weigh(factor, fresh), strict=True)]
            z, x = [*z, *new[: k * (q > 0)]], [*x, *new[k * (q > 0) :]]
        return x, z[: q * k]
