"""From values back to shocks, and forward to forecasts: the other two questions a graph answers.

A series driven by one source can be undone step by step from the outside in; what stands beside the random
part at each node must be known (deterministic), and is taken away with the value code itself.
"""

from __future__ import annotations

from copy import copy
from dataclasses import replace
from typing import Any

import numpy as np

from procgen.terms.base import Ahead, Array, Node, Unknown
from procgen.terms.graph import Graph, Source
from procgen.terms.run import Run, within


def sources_below(graph: Graph, node: Any) -> list[Source]:
    """The primary streams that a node depends on, in order."""
    return [part for part in graph.order([node]) if isinstance(part, Source)]


def recovery(graph: Graph, series: str, paths: int, forgotten: float | None = None) -> Recovery | Unknown:
    """A way back from a series to its shocks, or why there is none.

    `forgotten`: the share of an unknown first variance that may be left in what comes out, if not the usual one.
    """
    node, chain = graph.series[series], []
    found = sources_below(graph, node)
    names = dict.fromkeys(source.name for source in found)
    if len(names) > 1 or not found:
        return Unknown(f"{series} has {len(names)} sources of chance; one can be undone")
    if len(found) > 1:
        return Unknown(f"{found[0].name} draws more than one number a step; one can be undone")
    while not isinstance(node, Source):
        random = [i for i, part in enumerate(node.inputs) if found[0] in sources_below(graph, part)]
        if len(random) != 1:
            return Unknown(f"{node.name} reads the same shocks in {len(random)} places")
        if not node.term.undoes:
            return Unknown(f"{node.name} ({node.term.kind or 'hidden output'}) cannot be undone")
        chain.append((node if forgotten is None else _forgetting(node, forgotten), random[0]))
        node = node.inputs[random[0]]
    return Recovery(graph, chain, found[0], paths)


def _forgetting(node: Node, share: float) -> Node:
    """The node, which lets so much of an unknown first variance into what comes out, if it has one."""
    if not hasattr(node.term, "forgotten"):
        return node
    term: Any = copy(node.term)
    term.forgotten = share
    return replace(node, term=term)


class Recovery:
    """Undoes one series of a fixed set of paths, tile after tile from step 0.

    ``source`` is the primary stream whose standardised shocks come out.
    """

    def __init__(self, graph: Graph, chain: list[tuple[Node, int]], source: Source, paths: int):
        self.source = source
        self._chain = chain
        self.nodes = [node for node, _ in chain]
        self._states: list[Any] = [None] * len(chain)
        self._step = 0
        beside = [part for node, i in chain for k, part in enumerate(node.inputs) if k != i]
        self._known = KnownParts(graph, beside) if beside else None
        self.paths = paths

    def tile(self, values: Array) -> Array | Unknown:
        """Standardised shocks (steps, paths) of the next steps' values; NaN where they cannot be known."""
        at = np.arange(self._step, self._step + len(values))
        known = self._known.rows(len(values)) if self._known else {}
        for k, (node, random) in enumerate(self._chain):
            beside = [None if i == random else known[id(part)] for i, part in enumerate(node.inputs)]
            answer = node.term.invert(values, beside, self._states[k], at)
            if isinstance(answer, Unknown):
                return answer
            values, self._states[k] = answer
        self._step += len(values)
        return values


class KnownParts(Run):
    """The deterministic parts beside the random one, which are the same on every path."""

    def __init__(self, graph: Graph, parts: list[Node]):
        super().__init__(graph, 0, 1)
        self.columns = {str(i): part for i, part in enumerate(parts)}
        self._order = graph.order(parts)
        self._parts = parts

    def rows(self, steps: int) -> dict[int, Array]:
        tile = self.tile(steps)
        return {id(part): tile[str(i)] for i, part in enumerate(self._parts)}


def forecast(run: Run, series: str, steps: int) -> Ahead | Unknown:
    """Mean and variance of the next `steps` steps of a series, given where its run stands."""
    at = np.arange(run.step, run.step + steps)
    answers: dict[int, Any] = {}
    node = run.graph.series[series]
    if _shared(run.graph, node):
        return Unknown(f"{series} reads the same shocks in more than one place: its parts' variances do not add")
    for part in run.graph.order([node]):
        own = within(at, part.pace)
        if isinstance(part, Source):
            answers[id(part)] = Ahead(np.zeros((len(own), 1)), np.ones((len(own), 1)))
            continue
        inputs = [answers[id(below)] for below in part.inputs]
        refused = [answer for answer in inputs if isinstance(answer, Unknown)]
        state = run.state_of(part)
        answers[id(part)] = refused[0] if refused else part.term.ahead(own, state, *inputs)
    return answers[id(node)]


def _shared(graph: Graph, node: Node) -> bool:
    """Whether some node below is random and read more than once, or two of its sources are correlated."""
    found = sources_below(graph, node)
    groups = [source.group for source in found if source.group is not None]
    readers: dict[int, int] = {}
    for part in graph.order([node]):
        for below in part.inputs:
            readers[id(below)] = readers.get(id(below), 0) + (1 if sources_below(graph, below) else 0)
    return max(readers.values(), default=0) > 1 or len({id(g) for g in groups}) < len(groups)
