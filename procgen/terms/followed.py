"""A chain whose states are seen, followed through stages that are not: the chances of the next state given the past.

The chances of the stages are carried on from step to step, and cut down to those of the state that is seen: a hidden
Markov chain's filter (Baum & Petrie 1966) whose observation is the state itself. So stays are judged as renewals are,
by their hazard at each age (Cox 1962).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np

from procgen.terms.base import Array, State
from procgen.terms.instate import InState


class Followed(NamedTuple):
    """Of a tile: chances of each state (states, steps, paths), the state before, how long it has lasted; the carry."""

    chances: Array
    before: Array
    age: Array
    carried: dict[str, Array]


def follow(chain: Any, values: Array, state: State | None) -> Followed:
    """Steps that follow `state` (None: none came before); a value that is no state is followed no further."""
    owners = np.array(chain.owners, float)[:, None]
    first = np.array([[1.0 if chain.owners.index(owner) == i else 0.0] for i, owner in enumerate(chain.owners)])
    chances = np.empty((len(chain.names), *values.shape))
    before, age = np.empty(values.shape), np.empty(values.shape)
    belief: Any = None
    last: Any = None
    since: Any = None
    if state is not None:
        belief, last, since = state["belief"], state["last"][0], state["age"][0]
    for t, x in enumerate(values):
        ahead = _first(chain, x) if belief is None else _next(chain, belief)
        for row, chance in zip(chances, chain.whole(ahead), strict=True):
            row[t] = chance
        before[t] = np.nan if last is None else last
        age[t] = 0.0 if since is None else since
        since = np.ones(x.shape) if last is None else np.where(x == last, since + 1.0, 1.0)
        last = x
        own = x == owners
        kept = np.where(own, ahead, 0.0)
        total = _sum(kept)
        known = np.where(np.isnan(_sum(ahead)) | ~own.any(axis=0), np.nan, 1.0)
        could = total > 0.0  # what could not happen is taken as just entered
        total = np.where(could, total, 1.0)
        belief = known * np.where(could, kept / total, np.where(own, first, 0.0))
    carried = {} if belief is None else {"belief": belief, "last": last[None, :], "age": since[None, :]}
    return Followed(chances, before, age, carried)


def stages(chain: Any) -> tuple[Array, Array, tuple[int, ...]]:
    """Chances of a chain's stages at step 0, their transitions, and the states that they belong to."""
    return (chain.shares if chain.start is None else np.eye(len(chain.p))[chain.start]), chain.p, chain.owners


def _first(chain: Any, x: Array) -> Array:
    """Chances of the stages at step 0, (stages, paths)."""
    at = chain.shares if chain.start is None else np.eye(len(chain.p))[chain.start]
    return np.tile(np.asarray(at, float)[:, None], x.shape)


def _next(chain: Any, belief: Array) -> Array:
    """Chances of the stages at the next step, (stages, paths)."""
    return _sum(b * to[:, None] for b, to in zip(belief, chain.p, strict=True))


def _sum(parts: Any) -> Any:
    total = 0.0
    for part in parts:
        total = total + part
    return total


class Seen:
    """What a term whose values are the states of its `chain` answers to checks."""

    chain: Any
    _held: tuple[Any, Any, Followed] | None = None

    def unranked(self) -> str:
        return ""

    def chained(self, inputs: Sequence[Any]) -> Any:
        return inputs[0], stages(self.chain)

    def in_state(self, parts: Sequence[Any], state: int | None) -> Any:
        return None if state is None else InState(float(state))

    def _followed(self, values: Array, state: State | None) -> Followed:
        """The events of a tile and its ranks are asked for one after the other."""
        held = self._held
        if held is None or held[0] is not values or held[1] is not state:
            held = self._held = (values, state, follow(self.chain, values, state))
        return held[2]

    def rank(self, values: Array, cell: Any, known: Sequence[Array | None], state: State | None, at: Array) -> Any:
        found = self._followed(values, state)
        lost = np.where(np.isnan(cell[0] + found.chances[0]), np.nan, 0.0)
        lower, upper = (
            lost + _sum(np.where(edge >= k, chance, 0.0) for k, chance in enumerate(found.chances)) for edge in cell
        )
        return (lower, upper), found.carried

    @property
    def _limits(self) -> list[float]:
        """Whole steps of half the mean stay in each state: stays that all have the mean length end in time by it."""
        return [max(1.0, float(np.floor(mean / 2.0))) for mean in self.chain.stays]

    @property
    def watched(self) -> tuple[str, ...]:
        ends = zip(self.chain.names, self._limits, strict=True)
        said = [(n, f"up to {end:g} step{'' if end == 1 else 's'}") for n, end in ends]
        return tuple(f"{n} after {n}, {what}" for n, upto in said for what in (upto, "longer"))

    def events(self, values: Array, cell: Any, known: Sequence[Array | None], state: State | None, at: Array) -> Any:
        found, out = self._followed(values, state), []
        for k, (chance, end) in enumerate(zip(found.chances, self._limits, strict=True)):
            for age in (found.age <= end, found.age > end):
                out.append((values == k, np.where((found.before == k) & age, chance, np.nan)))
        return tuple(out)


class Shown(Seen):
    """The states of a chain inside another term, as that term's hidden output shows them."""

    def __init__(self, chain: Any):
        self.chain = chain
