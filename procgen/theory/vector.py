"""Systems of several series: components of one linear state space, whose covariances are all exact."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Gaussian
from procgen.theory.known import observed
from procgen.theory.linear import At, Linear
from procgen.theory.processes import Process, Steps
from procgen.theory.sources import Source
from procgen.theory.system import System

CANCELS = 1e-9  # share of its parts that is left of a unit root where it has cancelled
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

    def goes_with(self, source: Source) -> bool:
        return getattr(source.detail, "system", None) is self.system

    def verdicts(self, form: Linear) -> tuple[tuple[str, str], ...]:
        """What is to be said of a combination of components of this system: unit roots may cancel in it."""
        from procgen.theory.verdict import GROWS, LEAVES, SETTLES

        gains, sizes = np.zeros((2, len(self.system.observation)))
        for key, c in form.items():
            if not isinstance(key, At):  # a running sum of a component, or its value of step 0 for ever
                return self.says
            gain, row = c / (1.0 - sum(key.base.phi)), key.base.source.detail.row
            gains[row], sizes[row] = gains[row] + gain, sizes[row] + abs(gain)
        staying = self.system.observation @ _staying(self.system.transition)  # what stays for ever, in each component
        cancels = np.all(np.abs(gains @ staying) <= CANCELS * (sizes @ np.abs(staying)))
        if all(verdict != GROWS for verdict, _ in self.says) or not cancels:
            return self.says
        return ((SETTLES, f"{self.name} {LEAVES}: its unit roots cancel"),)

    def marginal(self, step: int) -> Any:
        at = np.array([step], np.int64)
        return Gaussian(0.0, float(np.sqrt(self.covariance(at, at)[0])))


def _staying(transition: np.ndarray) -> np.ndarray:
    """The states that a transition leaves as they are, as columns: an orthonormal basis."""
    _, sizes, rows = np.linalg.svd(transition - np.eye(len(transition)))
    return rows[sizes <= CANCELS * max(1.0, float(sizes[0]))].T


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
    from procgen.theory.expression import Expression
    from procgen.theory.verdict import GROWS, LEAVES, SETTLES

    k, p, q = len(loading), max(1, len(phi)), len(theta)
    says: tuple[tuple[str, str], ...] = ()
    initial, past, leaves = "stationary", None, f"{axis.name} {LEAVES}"
    if start is not None:
        roots = f"{k - rank} unit {'root' if k - rank == 1 else 'roots'} in {axis.name} (cointegration rank {rank})"
        leaves = f"the mean of {axis.name} leaves from its start"
        initial, says, past = "known", ((GROWS, roots),), (0, np.tile(start, p), np.array([start]))
    elif before is not None:
        x, a = (np.array(before[name], float).reshape(-1, k) for name in ("x", "shocks"))
        newest = np.zeros(((p + q) * k,))
        newest[: min(p, len(x)) * k], newest[p * k :] = x[::-1][:p].ravel(), a[::-1][:q].ravel()
        initial, says, past = "shocked", ((SETTLES, leaves),), (-1, newest, x)
    names = tuple(source.key for noise in noises for source in noise.sources)
    system, parts = space_of(phi, theta, loading, initial, names), []
    for row in range(k):
        part = axis.process(Component(axis.name, tuple(noises), system, row, past is not None, says))
        if past is not None and past[1].any():
            path, key = _path(system, row, *past), ("mean of", axis.name, row)
            mean = observed(key, path, axis.horizon, axis.name, settles=True, note=leaves)
            part = part + Expression(axis.space, mean)
        parts.append(part)
    return parts


def _path(system: System, row: int, last: int, state: np.ndarray, values: np.ndarray) -> Any:
    """The mean of a component: the stated values up to step `last`, and what the recursion makes of the state then."""
    told = np.array([np.nan, *values[:, row]])

    def at(steps: np.ndarray) -> np.ndarray:
        steps = np.asarray(steps, np.int64)
        known = told[np.clip(steps - last - 1 + len(told), 0, len(told) - 1)]
        return np.where(steps <= last, known, system.carried(row, state, np.maximum(steps - last, 0)))

    return at
