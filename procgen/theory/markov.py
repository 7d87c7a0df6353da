"""Markov chains of a few states: every moment of functions of the state at one step or two, exactly.

With transitions P and shares q, P^h - 1 q' is D^h for D = P - 1 q' and h >= 1, and I - 1 q' for h = 0. Covariances are
sums of its entries, so that what is left of them after a long time keeps its digits (Kemeny & Snell 1960, ch. 4).
"""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from typing import Any

import numpy as np

from procgen.theory import known
from procgen.theory.expression import Expression
from procgen.theory.linear import At, Linear
from procgen.theory.processes import Process, Steps
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import SETTLES, VARIES

AT_ONCE = 1 << 14
FORGETS = 1.0 - 1e-9  # a chain whose second eigenvalue is nearer to 1 in modulus never forgets its start


class States:
    """A chain of states 0 .. K-1, stationary or from a given state at step 0."""

    def __init__(self, transitions: np.ndarray, shares: np.ndarray | None, start: int | None):
        self.p, self.start = np.asarray(transitions, float), start
        self.shares = np.zeros(len(self.p)) if shares is None else np.asarray(shares, float)
        self.decay = self.p - self.shares

    @property
    def forgets(self) -> bool:
        return bool(self.shares.any()) and float(np.abs(np.linalg.eigvals(self.decay)).max()) < FORGETS

    def chances(self, steps: Steps) -> np.ndarray:
        """Chances of each state at steps, (*steps, K)."""
        if self.start is None:
            return np.broadcast_to(self.shares, (*np.shape(steps), len(self.p)))
        return self.shares + self.left(steps)[..., self.start, :]

    def left(self, gaps: Steps) -> np.ndarray:
        """P^h - 1 q' at gaps h >= 0, (*gaps, K, K), by repeated squaring."""
        gaps = np.asarray(gaps, np.int64)
        if gaps.min(initial=0) < 0:
            raise Unknown("a chain that leaves from a given state has no past")
        power, out = self.decay, np.broadcast_to(np.eye(len(self.p)), (*gaps.shape, len(self.p), len(self.p)))
        for bit in range(int(gaps.max(initial=0)).bit_length()):
            out = np.where((gaps >> bit & 1)[..., None, None], out @ power, out)
            power = power @ power
        return np.where((gaps == 0)[..., None, None], np.eye(len(self.p)) - self.shares, out)

    def covariance(self, f: np.ndarray, g: np.ndarray, t: Steps, s: Steps) -> np.ndarray:
        """Cov(f(S(t)), g(S(s))) for functions of the state given as arrays, (*steps, K) or (K,)."""
        shape = (*t.shape, len(self.p))
        f, g = (np.broadcast_to(x, shape).reshape(-1, len(self.p)) for x in (f, g))
        out, t, s = np.empty(t.size), t.ravel(), s.ravel()
        for first in range(0, len(out), AT_ONCE):
            part = slice(first, first + AT_ONCE)
            out[part] = self._covariance(f[part], g[part], t[part], s[part])
        return out.reshape(shape[:-1])

    def _covariance(self, f, g, t, s):
        ahead = (t >= s)[:, None]
        late, early = np.where(ahead, f, g), np.where(ahead, g, f)
        gaps, which = np.unique(np.abs(t - s), return_inverse=True)
        rest = np.einsum("nij,nj->ni", self.left(gaps)[which.ravel()], late)
        chances = self.chances(np.minimum(t, s))
        rest = rest - (chances * rest).sum(axis=1, keepdims=True)
        return (chances * early * rest).sum(axis=1)


class Indicator(Process):
    """1 in one state of a chain and 0 in the others, less its mean."""

    def __init__(self, name: str, driver: Expression, chain: States, state: int, says: tuple[tuple[str, str], ...]):
        super().__init__(name, (driver,), says)
        self.chain, self.state = chain, state

    def covariance(self, t, s):
        return self._with(self, t, s)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Indicator) and other.detail.chain is self.chain:
            return self._with(other.detail, t, s)
        return super().with_process(own, other, t, s)

    def _with(self, other: Indicator, t: Steps, s: Steps) -> np.ndarray:
        one = np.eye(len(self.chain.p))
        return self.chain.covariance(one[self.state], one[other.state], t, s)

    def product(self, factors, t, s):
        """E M E N and Cov(M, N) of products of forms in the states at one step each: both are functions of it."""
        m, n = (self._function([f for f, side in factors if side == i], steps) for i, steps in enumerate((t, s)))
        apart = np.ones(t.shape)
        for function, steps in ((m, t), (n, s)):
            apart = apart * (self.chain.chances(steps - function[1]) * function[0]).sum(axis=-1)
        return apart, self.chain.covariance(m[0], n[0], t - m[1], s - n[1])

    def _function(self, forms: list[Linear], steps: Steps) -> tuple[np.ndarray, int]:
        """A product of centred forms as a function of the state, (*steps, K), and how many steps ago that is."""
        keys = [key for form in forms for key in form]
        delays = {key.delay for key in keys if isinstance(key, At) and not key.base.phi}
        if len(delays) > 1 or any(not isinstance(key, At) or key.base.phi for key in keys):
            raise Unknown(f"{self.name}: moments of its states at three steps or more")
        by = delays.pop() if delays else 0
        centred = np.eye(len(self.chain.p)) - self.chain.chances(steps - by)[..., None, :]
        value = np.ones((*steps.shape, len(self.chain.p)))
        for form in forms:
            value = value * sum(c * centred[..., key.base.source.detail.state] for key, c in form.items())
        return value, by


def number_of_state(make: Any, driver: Expression, name: str, chain: States, names: tuple[str, ...]) -> Expression:
    """The number of the state as a series, which offers the indicator of each state k as `state k`.

    `make(process, mean)` is the axis' way to put a process to work.
    """
    says: tuple[tuple[str, str], ...] = ()
    if chain.start is not None:
        leaves = f"{name} leaves from {names[chain.start]}"
        says = ((SETTLES, f"{leaves} and forgets it") if chain.forgets else (VARIES, f"{leaves} and remembers it"),)
    states = [make(Indicator(name, driver, chain, k, says), _chance(chain, name, k)) for k in range(len(names))]
    total = states[1]
    for k, state in enumerate(states[2:], start=2):
        total = total + state * float(k)
    return offering(total, {f"state {k}": state for k, state in enumerate(states)})


def offering(x: Expression, outputs: dict[str, Expression]) -> Expression:
    """A series with hidden outputs."""
    return replace(x, outputs={name: partial(_same, output) for name, output in outputs.items()})


def _same(x: Expression) -> Expression:
    return x


def _chance(chain: States, name: str, k: int) -> known.Known:
    if chain.start is None:
        return known.constant(float(chain.shares[k]))

    def at(steps: Steps) -> np.ndarray:
        steps = np.asarray(steps, np.int64)
        return np.where(steps < 0, np.nan, chain.chances(np.maximum(steps, 0))[..., k])

    return known.whole(("chance", name, k), at, note=f"the chances of the states of {name}, from a given one")
