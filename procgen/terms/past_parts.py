"""The parts of a Gaussian sum that can leave from its recorded past: what each is as a state space, and what it is
told of where it stands.

An autoregressive, integrated or moving-average part has the state of its recursion just before step 0, and is told by
its `before`; a level or slope is given at step 0 and is told by its `start`.

Everything here makes values: only portable operations (see `procgen.chance.portable`).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import field, replace
from typing import Any

import numpy as np

from procgen.chance.portable import sum_doubling
from procgen.spec.model import Entry, Frozen
from procgen.spec.records import dataclass
from procgen.terms.arima import Integrated
from procgen.terms.arma import Arma
from procgen.terms.base import Array, Node
from procgen.terms.combine import Scaled
from procgen.terms.cycle import StochasticCycle
from procgen.terms.graph import Source
from procgen.terms.noise import WhiteNoise
from procgen.terms.past_filter import StateSpace
from procgen.terms.start import companion
from procgen.terms.structural import LocalLevel, LocalLinearTrend
from procgen.terms.walk import RandomWalk


@dataclass(frozen=True)
class Part:
    """One entry of a sum: its state space, its values that no shock gives, and how it is told where it stands.

    With `at_zero` it is told of step 0, else of step −1.
    """

    entry: Entry
    space: StateSpace
    told: Callable[[Array], Entry]
    path: Callable[[Array], Array] = field(default=lambda steps: np.zeros(np.shape(steps)))
    at_zero: bool = False


@dataclass(frozen=True)
class Recursion:
    """x − path = w summed up by `delta`, φ(B) w = θ(B) a."""

    phi: tuple[float, ...]
    theta: tuple[float, ...]
    delta: tuple[float, ...]
    path: Callable[[Array], Array]

    def differenced(self, x: Array) -> Array:
        """w from x less its path, behind the first rows of x."""
        n = len(self.delta)
        w = x[n:]
        for i, c in enumerate(self.delta, start=1):
            if c:
                w = w - c * x[n - i : len(x) - i]
        return w


def unscaled(node: Node) -> Node:
    """The node behind its factor."""
    while isinstance(node.term, Scaled):
        node = node.inputs[0]
    return node


def recursion_of(term: Any) -> Recursion | None:
    """The recursion of a linear term of one shock, or None where it is none."""
    if isinstance(term, Arma):
        return Recursion(term.phi, term.theta, (), lambda steps: np.zeros(np.shape(steps)))
    if isinstance(term, RandomWalk):
        return Recursion((), (), (1.0,), lambda steps: term.drift * np.asarray(steps, np.float64))
    if isinstance(term, Integrated) and term.even:
        return Recursion(term.core.phi, term.core.theta, term.delta, lambda steps: term.path(steps, drifting=True))
    return None


def is_gaussian(node: Node) -> bool:
    """Whether all shocks of a linear part are independent normals."""
    if isinstance(node.term, WhiteNoise):
        return bool(node.inputs[0].law.gaussian)
    if node.term.takes_shock:
        return is_gaussian(node.inputs[-1])
    return isinstance(node.term, LocalLevel | StochasticCycle) and all(isinstance(x, Source) for x in node.inputs)


def part_of(entry: Entry, node: Node) -> Part | None:
    """An entry with its node (behind its factor) as a part; None where it is no Gaussian linear one."""
    term = node.term
    if not is_gaussian(node) or getattr(term, "timed", False):  # steps of their own lengths
        return None
    if isinstance(term, WhiteNoise):
        nothing = np.zeros((0, 0))
        space = StateSpace(nothing, nothing, np.zeros(0), _square(term.scale() * entry.times), nothing, nothing)
        return Part(entry, space, lambda state: entry)
    if isinstance(term, LocalLinearTrend):
        sds = term.disturbances()
        matrix, added = np.array([[1.0, 1.0], [0.0, 1.0]]), np.diag([_square(sds["level"]), _square(sds["slope"])])
        return _structural(entry, matrix, added, sds["noise"], ("start", "slope"))
    if isinstance(term, LocalLevel):
        sds = term.disturbances()
        return _structural(entry, np.ones((1, 1)), np.full((1, 1), _square(sds["level"])), sds["noise"], ("start",))
    if isinstance(term, StochasticCycle):
        return _cycle(entry, term)
    recursion = recursion_of(term)
    return None if recursion is None else _filter(entry, recursion, node.inputs[-1].term.scale())


def told_before(entry: Entry, x: Array, shocks: Array) -> Entry:
    """The entry with its past in its `before`, as far as it reads it."""
    record: Mapping[str, Any] = {"x": tuple(x.tolist())}
    if entry.kind in ("ar", "ma", "arma", "arima"):
        record = {**record, "shocks": tuple(shocks.tolist())}
    return replace(entry, values=Frozen({**entry.values, "before": record}))


def _filter(entry: Entry, recursion: Recursion, sd: float) -> Part:
    p, q, n = max(1, len(recursion.phi)), len(recursion.theta), len(recursion.delta)
    inner, loading = companion(recursion.phi, recursion.theta, p, q)
    size = n + p + q
    transition, b = np.zeros((size, size)), np.zeros(size)
    transition[n:, n:], b[n:] = inner, loading
    if n:
        transition[0, :n], transition[0, n:], b[0] = recursion.delta, inner[0], 1.0
        for i in range(1, n):
            transition[i, i - 1] = 1.0
    initial = np.zeros((size, size))
    initial[n:, n:] = sum_doubling(inner, _square(sd) * (loading[:, None] * loading[None, :]))
    row = np.zeros(size)
    row[0] = entry.times  # x itself, or w where nothing is summed up
    added = _square(sd) * (b[:, None] * b[None, :])

    def told(state: Array) -> Entry:
        w, a = state[n : n + len(recursion.phi)], state[n + p :]
        x = _further(list(state[:n]), w, recursion.delta) if n else list(w)
        steps = np.arange(-len(x), 0)
        return told_before(entry, np.array(x[::-1]) + recursion.path(steps), a[::-1])

    return Part(entry, StateSpace(transition, added, row, 0.0, initial, np.eye(size, n)), told, recursion.path)


def _further(x: list[float], w: Array, delta: tuple[float, ...]) -> list[float]:
    """Values newest first, further back by one for each value of w."""
    for k, value in enumerate(w.tolist()):
        rest = x[k] - value
        for i, c in enumerate(delta[:-1], start=1):
            rest = rest - c * x[k + i]
        x.append(rest / delta[-1])
    return x


def _structural(entry: Entry, transition: Array, added: Array, noise: float, names: tuple[str, ...]) -> Part:
    size = len(names)

    def told(state: Array) -> Entry:
        return replace(entry, values=Frozen({**entry.values, **dict(zip(names, state.tolist(), strict=True))}))

    row = np.zeros(size)
    row[0] = entry.times
    space = StateSpace(transition, added, row, _square(noise * entry.times), np.zeros((size, size)), np.eye(size))
    return Part(entry, space, told, at_zero=True)


def _cycle(entry: Entry, term: StochasticCycle) -> Part:
    c, s = term.turn()

    def told(state: Array) -> Entry:
        past = {"cycle": float(state[0]), "star": float(state[1])}
        return replace(entry, values=Frozen({**entry.values, "before": past}))

    space = StateSpace(
        np.array([[c, s], [-s, c]]),
        _square(term.disturbance()) * np.eye(2),
        np.array([entry.times, 0.0]),
        0.0,
        _square(term.whole()) * np.eye(2),
        np.zeros((2, 0)),
    )
    return Part(entry, space, told)


def _square(x: float) -> float:
    return float(x) * float(x)
