"""The state of a Markov chain as a series: one indicator a state, each a process of its own."""

from __future__ import annotations

from dataclasses import replace
from functools import partial, reduce
from operator import add
from typing import Any

import numpy as np

from procgen.theory import known
from procgen.theory.chains import States, Switching
from procgen.theory.expression import Expression
from procgen.theory.linear import At, Linear, base_of
from procgen.theory.lumps import Few
from procgen.theory.processes import Process, Steps
from procgen.theory.sources import GARCH
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import SETTLES, VARIES


class Indicator(Process):
    """1 in one state of a chain and 0 in the others, less its mean."""

    discrete = True

    def __init__(self, name: str, driver: Expression, chain: States, state: int, says: tuple[tuple[str, str], ...]):
        super().__init__(name, (driver,), says)
        self.chain, self.state = chain, state
        self.share, self.apart_from = _chance(chain, name, state), chain

    def covariance(self, t, s):
        return self._with(self, t, s)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Indicator) and other.detail.chain is self.chain:
            return self._with(other.detail, t, s)
        return super().with_process(own, other, t, s)

    def with_expression(self, other, t, s):
        if all(source.kind == GARCH and isinstance(source.detail, Switching) for source in other.sources):
            return np.zeros(t.shape)  # whatever the state, the mean of the shock is 0
        return super().with_expression(other, t, s)

    def _with(self, other: Indicator, t: Steps, s: Steps) -> np.ndarray:
        one = np.eye(len(self.chain.p))
        return self.chain.covariance(one[self.state], one[other.state], t, s)

    def marginal(self, step):
        p = float(self.chain.chances(np.array([step]))[0][self.state])
        return Few((-p, 1.0 - p), (1.0 - p, p))

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
            value = value * sum(c * centred[..., base_of(key).source.detail.state] for key, c in form.items())
        return value, by


def number_of_state(
    make: Any, driver: Expression, name: str, chain: States, names: tuple[str, ...], owners: tuple[int, ...]
) -> Expression:
    """The number of the state as a series, which offers the indicator of each state k as `state k`.

    `owners` are the states that the stages of the chain belong to. `make(process, mean)` is the axis' way to put a
    process to work.
    """
    says: tuple[tuple[str, str], ...] = ()
    if chain.start is not None:
        leaves = f"{name} leaves from {names[owners[chain.start]]}"
        says = ((SETTLES, f"{leaves} and forgets it") if chain.forgets else (VARIES, f"{leaves} and remembers it"),)
    indicators = [Indicator(name, driver, chain, k, says) for k in range(len(owners))]
    stages = [make(each, each.share) for each in indicators]
    states = [reduce(add, [x for x, i in zip(stages, owners, strict=True) if i == k]) for k in range(len(names))]
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

    note = f"the chances of the states of {name}, from a given one"
    return known.whole(("chance", name, k), at, note=note, settles=chain.forgets)
