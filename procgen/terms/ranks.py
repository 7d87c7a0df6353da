"""The ranks of values given their past: uniform shocks of terms that cannot be undone.

If F is the law of a value X given all before it, P(X < x) + v·P(X = x) is uniform and independent of the past for
a uniform v of its own (Rosenblatt 1952; Brockwell 2007): whatever the law, it can be judged as shocks are.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from procgen.terms.base import Array, Node, Unknown
from procgen.terms.combine import Exp, Hidden, Product, Scaled, Sum, Use
from procgen.terms.graph import Graph, Source
from procgen.terms.hidden_memory import hidden_memory
from procgen.terms.hidden_states import hidden_states
from procgen.terms.operators import Integrate, Lag
from procgen.terms.recover import KnownParts, sources_below

ROOT_12 = 3.4641016151377544
ROUNDING = 8.0 * np.finfo(float).eps  # of the numbers that values are undone through
OFF = 1e-6  # how far from a whole number a value may lie that is one
_APART = 0.1  # how far rounding may bring values from whole numbers that are still told apart, with room for large ones
_STRAIGHT = (Sum, Scaled, Product, Use, Lag, Integrate)  # rounding goes through these as through a straight line
_TILE = 4096  # steps


def ranking(graph: Graph, series: str, whole: bool, grain: float) -> Ranking | Unknown | None:
    """A way from a series to the ranks of one of its terms; why there is none, or None where no term has ranks.

    whole: whether the term's values are whole numbers. grain: the distance of neighbouring values as stored, or 0.
    """
    found = _of_a_term(graph, series, whole, grain)
    if isinstance(found, Ranking) and (found.plain or not grain):
        return found
    followed = _of_hidden_states(graph, series, whole, grain)
    return found if found is not None and not isinstance(followed, Ranking) else followed


def _of_hidden_states(graph: Graph, series: str, whole: bool, grain: float) -> Ranking | Unknown | None:
    """Ranks of what has a law in each state of chains that are not seen, as far out as there are any."""
    node: Any = graph.series[series]
    chain: list[tuple[Node, int]] = []
    why = None
    while not isinstance(node, Source):
        found = hidden_states(graph, node, grain)
        if isinstance(found, Unknown):
            found = hidden_memory(graph, node, grain) or found
        if isinstance(found, Node):
            blurred = _blurring(chain, whole) if found.term.lumpy else ()
            if blurred:
                return Unknown(f"{blurred[0]} gives {node.name} back only up to rounding, and its values have chances")
            return Ranking(graph, chain, found, whole, grain)
        why = why or found
        below = _undone(graph, node)
        if below is None:
            break
        chain.append((node, below))
        node = node.inputs[below]
    return why


def _passed(size: Array, node: Node, beside: list[Array], undone: Array) -> Array:
    """The size of the numbers that rounding is a share of, after one more term is undone."""
    before = np.ones(1) if isinstance(node.term, Exp) else size  # a logarithm turns shares into distances
    for rows in (*beside, undone):
        before = np.fmax(before, np.abs(rows))
    if isinstance(node.term, Integrate):  # the value before was as large
        before[1:] = np.fmax(before[1:], before[:-1])
    return before


def _undone(graph: Graph, node: Node) -> int | None:
    """Which input comes out where a node is undone: the only one that moves by chance; None where it cannot be."""
    random = [i for i, part in enumerate(node.inputs) if sources_below(graph, part)]
    return None if len(random) != 1 or not node.term.undoes else random[0]


def _blurring(chain: list[tuple[Node, int]], whole: bool) -> list[str]:
    """The names of what gives values with chances of their own back only up to rounding."""
    sums = [over.name for over, _ in chain if isinstance(over.term, Integrate)]
    blurred = [over.name for over, _ in chain if over.term.blurs]
    return blurred + ([] if whole else sums[1:])  # a second difference of numbers with digits is not exact


def _of_a_term(graph: Graph, series: str, whole: bool, grain: float) -> Ranking | Unknown | None:
    """Ranks that a term gives itself."""
    node: Any = graph.series[series]
    chain: list[tuple[Node, int]] = []
    while not isinstance(node, Source):
        node = _shown(node)
        if not node.term.unranked():
            hidden = [part for part in node.inputs if not isinstance(part, Source) and sources_below(graph, part)]
            if hidden:
                return Unknown(f"{node.name} follows {hidden[0].name}, which moves by chance and is not seen")
            blurred = _blurring(chain, whole)
            if blurred:
                return Unknown(f"{blurred[0]} gives {node.name} back only up to rounding, and its values have chances")
            return Ranking(graph, chain, node, whole, grain)
        below = _undone(graph, node)
        if below is None:
            return None
        chain.append((node, below))
        node = node.inputs[below]
    return None


def _shown(node: Node) -> Node:
    """A node as it is, or what the term behind a hidden output has to say of it."""
    term = node.inputs[0].term.shown(node.term.output) if isinstance(node.term, Hidden) else None
    return node if term is None else replace(node, term=term, inputs=())


class Ranking:
    """Ranks of one series of a fixed set of paths, as standardised uniforms, tile after tile from step 0."""

    def __init__(self, graph: Graph, chain: list[tuple[Node, int]], node: Node, whole: bool, grain: float):
        self.node, self._whole, self._grain = node, whole, grain
        self._steps = [*chain, (node, -1)]
        self._states: list[Any] = [None] * len(self._steps)
        self._step = 0
        self._off = 0.0
        self.seen: Any = ()  # of the last tile: events that the term watches, and their chances
        beside = [part for at, i in self._steps for k, part in enumerate(at.inputs) if k != i]
        self._sure = [part for part in beside if not sources_below(graph, part)]
        self._known = KnownParts(graph, self._sure) if self._sure else None

    @property
    def plain(self) -> bool:
        """Whether the series is the term itself, so that stored rounding is that of the term."""
        return len(self._steps) == 1

    def tile(self, values: Array, v: Array) -> Array | Unknown:
        """Standardised uniforms (steps, paths) of the next steps' values, by uniforms `v`; NaN where not known."""
        at = np.arange(self._step, self._step + len(values))
        known = self._known.rows(len(values)) if self._known else {}
        undone = self._through(values, known, at)
        if isinstance(undone, Unknown):
            return undone
        values, size = undone
        values = self._on_piles(values, ROUNDING * size)
        told = values, self._cell(values), [known.get(id(part)) for part in self.node.inputs], self._states[-1], at
        lost = np.isnan(values)
        self.seen = [(happened, np.where(lost, np.nan, p)) for happened, p in self.node.term.events(*told)]
        answer = self.node.term.rank(*told)
        if isinstance(answer, Unknown):
            return answer
        ends, self._states[-1] = answer
        self._step += len(at)
        below, upto = (np.where(lost, np.nan, end) for end in ends)
        return ROOT_12 * (below + v * (upto - below) - 0.5)

    def _through(self, values: Array, known: dict[int, Any], at: Array) -> tuple[Array, Array] | Unknown:
        """The values of the term behind those of the series, and the size of the numbers that they come through."""
        size = np.abs(values)
        for k, (node, random) in enumerate(self._steps[:-1]):
            beside = [None if i == random else known.get(id(part)) for i, part in enumerate(node.inputs)]
            answer = node.term.invert(values, beside, self._states[k], at)
            if isinstance(answer, Unknown):
                return answer
            size = _passed(size, node, [rows for rows in beside if rows is not None], answer[0])
            values, self._states[k] = answer
        return values, size

    def strayed(self, steps: int) -> float:
        """How far from whole numbers rounding brings what is undone, at most; infinite where that cannot be told.

        For a Ranking from step 0 on, which is of no further use then.
        """
        if not steps or not self._whole or not all(isinstance(over.term, _STRAIGHT) for over, _ in self._steps[:-1]):
            return np.inf
        most = 0.0
        for first in range(0, steps, _TILE):
            at = np.arange(first, min(first + _TILE, steps))
            rows = 0.5 * self._grain * np.column_stack([0.0 * at, 1.0 - 2.0 * (at % 2)])  # a sum's steps at their worst
            undone = self._through(rows, self._known.rows(len(at)) if self._known else {}, at)
            if isinstance(undone, Unknown):
                return np.inf
            moved = np.abs(undone[0][:, 1] - undone[0][:, 0])
            most = max(most, float(np.max(np.nan_to_num(moved, nan=0.0, posinf=np.inf))))
        return most

    def told_apart(self, strayed: float) -> bool:
        """Whether whole numbers that have strayed so far by rounding are known; from now on they are taken for that."""
        self._off = 4.0 * strayed
        return strayed <= _APART

    def _on_piles(self, values: Array, error: Array) -> Array:
        """Values that are within what undoing has rounded of one with a chance of its own, on it."""
        for pile in self.node.term.piles if len(self._steps) > 1 else ():
            values = np.where(np.abs(values - pile) <= error, pile, values)
        return values

    def _cell(self, values: Array) -> tuple[Array, Array]:
        """What is stored as these values: a cell of the rounding, or the value alone."""
        if self._whole:
            near = np.rint(values)
            near = np.where(np.abs(values - near) <= self._off + OFF * np.maximum(1.0, np.abs(near)), near, np.nan)
            return near - 0.5, near + 0.5
        half = self._grain / 2.0
        return (values - half, values + half) if half else (np.nextafter(values, -np.inf), values)
