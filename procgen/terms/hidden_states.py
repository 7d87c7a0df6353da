"""Ranks of values whose law is known in each state of a hidden chain: the chances of the states are followed.

A filter of the state (Hamilton 1989) gives its chances given the past, which weigh the laws of the value in each state.
It asks that a value has nothing to do with those before it where the states are given: the parts of the same step may
be added, scaled, switched on and off, and nothing among them may have a memory but the chains.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import reduce
from itertools import product
from typing import Any

import numpy as np

from procgen.terms.base import Array, Cell, Node, State, Unknown
from procgen.terms.combine import Hidden
from procgen.terms.graph import Graph, Source
from procgen.terms.instate import InState
from procgen.terms.recover import sources_below

MOST = 40  # states, and stages of stays, of all chains together
NEAR = 1e-9  # of a value's size: what is as near to a value with a chance of its own is it
NARROW = 1e-3  # of a spread: in a cell of at most this width a density is flat
_LOG_ROOT = 0.9189385332046727  # log sqrt(2 π): densities of several laws are weighed against each other


class Refused(Exception):
    """Why a value's law in a state is not known, in words."""


class HiddenStates:
    """What a node answers to `rank`, as a term would: its value is that of `InState` in each state of its chains."""

    watched: tuple[str, ...] = ()
    piles: tuple[float, ...] = ()

    def __init__(self, node: Node, known: list[Node], chains: list[Any], grain: float):
        self._node, self._known, self._half = node, known, grain / 2.0
        self._sources = [source for source, _ in chains]
        laws = [law for _, law in chains]
        self._cases = [*product(*(range(max(owners) + 1) for _, _, owners in laws))]
        places = {case: i for i, case in enumerate(self._cases)}
        stages = [*product(*(range(len(owners)) for _, _, owners in laws))]
        self._owners = np.array(
            [places[tuple(law[2][k] for law, k in zip(laws, stage, strict=True))] for stage in stages]
        )
        self._first, self._moves = np.ones(1), np.ones((1, 1))
        for first, moves, _ in laws:
            self._first, self._moves = np.kron(self._first, first), np.kron(self._moves, moves)
        laws = self._laws([np.ones((1, 1)) for _ in known])  # refuses what has no law in a state
        self.lumpy = any(_lumpy(law) for _, _, law in laws)

    def unranked(self) -> str:
        return ""

    def events(self, values: Array, cell: Cell, known: Any, state: State | None, at: Array) -> Any:
        return ()

    def rank(self, values: Array, cell: Cell, known: Any, state: State | None, at: Array) -> Any:
        """P(X ≤ lower) and P(X ≤ upper) given the past, and the chances of the stages at the next step."""
        try:
            laws = self._laws(known)
        except Refused as refused:
            return Unknown(str(refused))
        half: Any = self._half
        if self.lumpy and not half:
            half = NEAR * reduce(np.maximum, [np.abs(level) + np.abs(spread) for level, spread, _ in laws])
        ends = values - half, values + half
        in_states = [_law_of(*law, values, ends) for law in laws]
        below, upto, logs = (np.stack(part) for part in zip(*in_states, strict=True))
        with np.errstate(invalid="ignore"):
            logs -= np.where(np.isfinite(best := logs.max(axis=0)), best, 0.0)
        now = np.repeat(self._first[:, None], values.shape[1], axis=1) if state is None else state["now"]
        chances, now = self._followed(np.exp(logs), now)
        lost = np.where(np.isnan(values), np.nan, 0.0)
        mixed = (sum(c * p for c, p in zip(chances, part, strict=True)) for part in (below, upto))
        lower, upper = (np.clip(part, 0.0, 1.0) + lost for part in mixed)
        return (lower, upper), {"now": now}

    def _followed(self, likely: Array, now: Array) -> tuple[Array, Array]:
        """Chances of the states given the past (states, steps, paths), and those of the stages after the last step."""
        states, steps, paths = likely.shape
        whole = 1.0 * (np.arange(states)[:, None] == self._owners)
        plain = states == len(self._owners)
        own, chances = np.ascontiguousarray(likely.transpose(1, 0, 2)), np.empty((steps, states, paths))
        for t in range(steps):
            chances[t] = now if plain else _weighed(whole, now)
            joint = now * (own[t] if plain else own[t][self._owners])
            total = _weighed(np.ones((1, len(joint))), joint)[0]
            if total.min() > 0.0:
                joint /= total
            else:  # a value that is missing, or possible in no state, tells nothing
                told = total > 0.0
                joint = np.where(told, joint / np.where(told, total, 1.0), now)
            now = _weighed(self._moves.T, joint)
        return chances.transpose(1, 0, 2), now

    def _laws(self, known: Any) -> list[tuple[Any, Any, Any]]:
        """Level, spread and law of the shock in each state; a spread of 0 and no law where there is no shock."""
        rows = {id(part): row for part, row in zip(self._known, known, strict=True)}
        return [self._law(rows, dict(zip(self._sources, case, strict=True))) for case in self._cases]

    def _law(self, known: dict[int, Array], states: dict[Any, int]) -> tuple[Any, Any, Any]:
        found = in_state(self._node, known, states)
        shocks = [shock for shock in found.shocks.values() if np.any(shock[0])]
        if not shocks:
            return found.level, 0.0, None
        if not all(np.all(spread) for spread, _, _ in shocks):
            raise Refused(f"the spread of {self._node.name} is 0 at some steps")
        if len(shocks) == 1:
            spread, _, law = shocks[0]
            return found.level, spread, law
        together = {id(source.group) for _, source, _ in shocks if source.group is not None}
        apart = len(together) == sum(source.group is not None for _, source, _ in shocks)
        if not (apart and all(getattr(law, "gaussian", False) for _, _, law in shocks)):
            raise Refused(f"{self._node.name} is a sum of shocks that are not all normal and independent")
        return found.level, np.sqrt(sum(np.square(spread) for spread, _, _ in shocks)), shocks[0][2]


def hidden_states(graph: Graph, node: Node, grain: float) -> Node | Unknown | None:
    """The node with its law in the states of the chains below it in the place of its term; or why that is not known.

    None where there is no chain below. grain: the distance of neighbouring values as stored, or 0.
    """
    below = [part for part in graph.order([node]) if not isinstance(part, Source)]
    chains = [found for part in below if (found := part.term.chained(part.inputs)) is not None]
    if not chains or node.pace > 1:
        return None
    count = int(np.prod([len(owners) for _, (_, _, owners) in chains]))
    if count > MOST:
        return Unknown(f"the chains behind {node.name} have {count} states together, and up to {MOST} are followed")
    random = {id(part) for part in below if sources_below(graph, part)}
    known = [part for part in _read(below, random) if id(part) not in random]
    try:
        term: Any = HiddenStates(node, known, chains, grain)
    except Refused as refused:
        return Unknown(str(refused))
    return Node(node.key, node.name, term, tuple(known), place=node.place)


def _read(below: list[Node], random: set[int]) -> Iterator[Node]:
    """What is read by random nodes, each once."""
    seen = set()
    for node in below:
        for part in node.inputs if id(node) in random else ():
            if not isinstance(part, Source) and id(part) not in seen:
                seen.add(id(part))
                yield part


def in_state(node: Any, known: dict[int, Array], states: dict[Any, int]) -> InState:
    """A node's value where the sources of chains are in these states; Refused where it is not of that step alone."""
    if id(node) in known:
        return InState(known[id(node)])
    if isinstance(node, Source):
        return InState(0.0, {id(node): (1.0, node, node.law)})
    owner = node.inputs[0] if isinstance(node.term, Hidden) else node
    own = owner.term.chained(owner.inputs)
    state = None if own is None else states[own[0]]
    if owner is node:
        parts = [None if part in states else in_state(part, known, states) for part in node.inputs]
        found = node.term.in_state(parts, state)
    elif node.term.output == "regime" and own is None:
        found = in_state(owner.inputs[-1], known, states)
    else:
        found = owner.term.output_in_state(node.term.output, state)
    if found is None:
        raise Refused(f"{node.name} is not made of its own step alone, and the state that says what is seen is hidden")
    return found


def _weighed(weights: Array, rows: Array) -> Array:
    """Sums of rows by weights, from the first row on: the same bits for any number of paths."""
    total = weights[:, :1] * rows[0]
    for k in range(1, len(rows)):
        total = total + weights[:, k : k + 1] * rows[k]
    return total


def _lumpy(law: Any) -> bool:
    return law is None or getattr(law, "points", None) is not None or hasattr(law, "pmf")


def _law_of(level: Any, spread: Any, law: Any, values: Array, ends: Cell) -> tuple[Array, Array, Array]:
    """P(X ≤ lower), P(X ≤ upper), and the logarithm of the chance of the cell; of the density where it has no width."""
    lower, upper = ends
    with np.errstate(divide="ignore", over="ignore"):
        if law is None:
            below, upto = 1.0 * (lower >= level), 1.0 * (upper >= level)
            return below, upto, np.log(upto - below)
        width = (upper - lower) / np.abs(spread)
        cdf, sf, logpdf = _functions(law)
        low, high = (lower - level) / spread, (upper - level) / spread
        below, upto = cdf(low), (cdf(high) if np.any(width > 0.0) else None)
        upto = below if upto is None else upto
        if not _lumpy(law) and np.nanmax(width, initial=0.0) <= NARROW:
            logs = logpdf((values - level) / spread) - np.log(np.abs(spread))
            logs = logs + (np.log(upper - lower) if np.any(width > 0.0) else 0.0)
        else:
            beside = np.where(low + high > 0.0, sf(low) - sf(high), upto - below)
            logs = np.log(np.maximum(np.abs(beside), 0.0))
        return (below, upto, logs) if np.all(spread > 0.0) else (sf(low), sf(high), logs)


def _functions(law: Any) -> tuple[Any, Any, Any]:
    """Distribution function, its complement, and the logarithm of the density, of a law of shocks or a frozen one."""
    if getattr(law, "gaussian", False):
        from scipy.special import ndtr

        return ndtr, lambda z: ndtr(-z), lambda z: -0.5 * z * z - _LOG_ROOT
    found = law.distribution() if hasattr(law, "distribution") else law
    sf = getattr(found, "sf", lambda z: 1.0 - found.cdf(z))
    return found.cdf, sf, getattr(found, "logpdf", None) or (lambda z: np.log(found.pdf(z)))
