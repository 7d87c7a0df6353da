"""Systems of several series: components of one linear state space, whose covariances are all exact."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from procgen.theory.processes import Process, Steps
from procgen.theory.system import System

SETTLED = 1e-18  # share of what is added by a doubling, from which on nothing changes


class Component(Process):
    """One component of a system, less its mean."""

    gaussian = True

    def __init__(self, name: str, ingredients: tuple[Any, ...], system: System, row: int, started: bool, says):
        super().__init__(name, ingredients, says)
        self.system, self.row, self.started = system, row, started

    def covariance(self, t, s):
        return self._between(self, t, s)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Component) and other.detail.system is self.system:
            return self._between(other.detail, t, s)
        return super().with_process(own, other, t, s)

    def _between(self, other: Component, t: Steps, s: Steps) -> np.ndarray:
        shape = np.broadcast_shapes(np.shape(t), np.shape(s))
        t, s = (np.broadcast_to(x, shape).astype(np.int64).ravel() for x in (t, s))
        if self.started:  # what lies before step 0 is stated
            out, random = np.zeros(len(t)), (t >= 0) & (s >= 0)
            if random.any():
                out[random] = self.system.covariance(self.row, other.row, t[random], s[random])
            return out.reshape(shape)
        by = max(0, -int(min(t.min(initial=0), s.min(initial=0))))
        return self.system.covariance(self.row, other.row, t + by, s + by).reshape(shape)

    def marginal(self, step: int) -> Any:
        from scipy.stats import norm

        at = np.array([step], np.int64)
        return norm(0.0, float(np.sqrt(self.covariance(at, at)[0])))


def space_of(phi: Sequence, theta: Sequence, loading: np.ndarray, initial: str, names: tuple[str, ...]) -> System:
    """The state space of x(t) = sum Phi x(t-i) + a(t) + sum Theta a(t-j), a = loading z.

    Its state at step 0 is in its `stationary` law, `shocked` once after what is known, or `known`.
    The state is (x(t), .., x(t-p+1), a(t), .., a(t-q+1)); Luetkepohl (2005), sec. 11.3.
    """
    k, p, q = len(loading), max(1, len(phi)), len(theta)
    n = (p + q) * k
    transition, b = np.zeros((n, n)), np.zeros((n, k))
    for place, matrices in ((0, phi), (p, theta)):
        for i, matrix in enumerate(matrices):
            transition[:k, (place + i) * k : (place + i + 1) * k] = matrix
    for lag in [*range(1, p), *range(p + 1, p + q)]:
        transition[lag * k : (lag + 1) * k, (lag - 1) * k : lag * k] = np.eye(k)
    b[:k] = np.eye(k)
    if q:
        b[p * k : (p + 1) * k] = np.eye(k)
    sigma = np.asarray(loading) @ np.asarray(loading).T
    now = b @ sigma @ b.T
    start = {"known": np.zeros((n, n)), "shocked": now}.get(initial)
    return System(transition, b, np.eye(k, n), stationary(transition, now) if start is None else start, sigma, names)


def stationary(transition: np.ndarray, added: np.ndarray) -> np.ndarray:
    """S = A S A' + Q by doubling (Smith 1968)."""
    power, total = transition.copy(), added.copy()
    while True:
        more = power @ total @ power.T
        total = total + more
        if np.abs(more).max() <= SETTLED * np.abs(total).max():
            return total
        power = power @ power


def components(axis: Any, noises: Sequence[Any], phi, theta, loading, before=None, start=None, rank=0) -> list[Any]:
    """The components of a system: stationary, after rows of `before`, or from values `start` at step 0.

    `before` has rows of values x and of shocks before step 0, oldest first; `rank` is that of the cointegration.
    """
    from procgen.theory.verdict import GROWS, LEAVES, SETTLES

    k, p, q = len(loading), max(1, len(phi)), len(theta)
    says: tuple[tuple[str, str], ...] = ()
    initial, past = "stationary", None
    if start is not None:
        roots = f"{k - rank} unit {'root' if k - rank == 1 else 'roots'} in {axis.name} (cointegration rank {rank})"
        initial, says, past = "known", ((GROWS, roots),), (0, np.tile(start, p), np.array([start]))
    elif before is not None:
        x, a = (np.array(before[name], float).reshape(-1, k) for name in ("x", "shocks"))
        newest = np.zeros(((p + q) * k,))
        newest[: min(p, len(x)) * k], newest[p * k :] = x[::-1][:p].ravel(), a[::-1][:q].ravel()
        initial, says, past = "shocked", ((SETTLES, f"{axis.name} {LEAVES}"),), (-1, newest, x)
    names = tuple(source.key for noise in noises for source in noise.sources)
    system, parts = space_of(phi, theta, loading, initial, names), []
    for row in range(k):
        part = axis.process(Component(axis.name, tuple(noises), system, row, past is not None, says))
        parts.append(part if past is None or not past[1].any() else part + axis.known(_path(system, row, *past)))
    return parts


def _path(system: System, row: int, last: int, state: np.ndarray, values: np.ndarray) -> Any:
    """The mean of a component: the stated values up to step `last`, and what the recursion makes of the state then."""
    told = np.array([np.nan, *values[:, row]])

    def at(steps: np.ndarray) -> np.ndarray:
        steps = np.asarray(steps, np.int64)
        known = told[np.clip(steps - last - 1 + len(told), 0, len(told) - 1)]
        return np.where(steps <= last, known, system.carried(row, state, np.maximum(steps - last, 0)))

    return at
