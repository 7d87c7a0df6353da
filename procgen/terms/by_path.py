"""Values of a spec whose parameters vary by path: each path is that of a spec with its values in place.

Where all terms with such values begin and run by rows, one graph has the values of all paths in it. Otherwise paths
begin one by one, each from the graph of its own spec, and then run side by side (`stack`).
"""

from __future__ import annotations

import gc
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from itertools import pairwise
from typing import Any

import numpy as np

from procgen.chance.streams import Stream
from procgen.spec.entries import walk
from procgen.spec.model import Entry, Series, Shared
from procgen.terms import catalogue
from procgen.terms.base import Array, Node, State, Term
from procgen.terms.burnt import burnt_by_nodes
from procgen.terms.combine import Hidden
from procgen.terms.conditional import Conditional
from procgen.terms.graph import Graph, Source
from procgen.terms.rows import Unlike, row_in
from procgen.terms.run import Run
from procgen.terms.stack import Stack
from procgen.terms.varied import Varied

# Numbers that say how far back a filter is drawn: where a shock begins there itself, it must know that of each path.
DEEP = frozenset({"phi", "rate"})
FEW = 16  # steps before step 0 that are drawn for all paths at once


@contextmanager
def uncollected() -> Iterator[None]:
    """Without Python's search for unused cycles, which goes through all graphs again and again while they are made."""
    was = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if was:
            gc.enable()


class PartRun(Run):
    """The run of neighbouring paths that begins from the draws of a whole one, which are made once for all."""

    def __init__(self, graph: Graph, first_path: int, paths: int, reveal: Sequence[str], whole: Run, kept: dict):
        super().__init__(graph, first_path, paths, reveal)
        self._whole, self._kept = whole, kept
        self.burnt: dict[str, tuple[dict[str, Array] | None, State]] = {}  # what began for all paths at once, by node

    def _of_whole(self, rows: Array) -> Array:
        first = self.first_path - self._whole.first_path
        return rows[:, first : first + self.paths]

    def _begin_node(self, node: Node) -> None:
        if node.key not in self.burnt:
            super()._begin_node(node)
            return
        values, _ = self.burnt[node.key]
        for name, rows in (values or {}).items():  # as many as any path is asked for
            own = self._of_whole(rows)[len(rows) - node.head :]
            self._begun[id(node) if name == "" else (id(node), name)] = own
        self._states[node.key] = {}  # the whole has it

    def _normals(self, stream: Stream, first_step: int, steps: int) -> Array:
        if steps > FEW:
            return super()._normals(stream, first_step, steps)
        key = (stream, first_step, steps)
        if key not in self._kept:
            self._kept[key] = self._whole._normals(stream, first_step, steps)
        return self._of_whole(self._kept[key])

    def _draw(self, source: Source, first_step: int, steps: int, values: dict[int, Array]) -> None:
        if steps > FEW or (source.group is not None and source.group.by is not None):
            # burn-ins, whose lengths are each path's own, and what follows the states of each path
            super()._draw(source, first_step, steps, values)
            return
        members = source.group.sources if source.group is not None else (source,)
        key = (source.stream, first_step, steps, "shocks")
        if key not in self._kept:
            drawn: dict[int, Array] = {}
            self._whole._draw(source, first_step, steps, drawn)
            self._kept[key] = [drawn[id(member)] for member in members]
        for member, rows in zip(members, self._kept[key], strict=True):
            values[id(member)] = self._of_whole(rows)


def can_burn_together(stack: Any, nodes: Sequence[Node]) -> bool:
    """Whether the nodes of several paths, which one stack stands for, begin by a burn-in that can run side by side."""
    first = nodes[0]
    lone = len(first.inputs) == 1 and isinstance(first.inputs[0], Source) and first.inputs[0].group is None
    return (
        stack.one is not None
        and isinstance(first.term, Conditional)
        and lone
        and all(node.term.before is None for node in nodes)
    )


def graph_by_rows(varied: Varied, rows: dict[str, Array]) -> Graph | None:
    """The graph with rows in the place of what varies; None where some term must begin path by path."""
    spec = varied.at({name: row.astype(np.float64) for name, row in rows.items()})
    bodies: list[Series | Shared] = [*spec.shared.values(), *spec.series.values()]
    if not all(_takes_rows(entry) for body in bodies for entry, _ in walk(body.of)):
        return None
    try:
        graph = Graph(spec, factors=True)
    except Unlike:
        return None
    # States that a correlation follows are drawn from as far back as each path's own shocks.
    return None if any(group.by is not None for group in graph.groups) else graph


def _takes_rows(entry: Entry) -> bool:
    """Whether the term of an entry begins and runs with the rows that stand in it, and in its shock."""
    shock = entry.shock is not None and any(row_in(below.values) for below, _ in walk((entry.shock,)))
    names = {name for name, value in entry.values.items() if row_in(value)}
    if not names and not shock:
        return True
    kind = catalogue()[entry.kind]
    if names & DEEP and entry.shock is not None and entry.shock.kind != "white_noise":
        return kind.reach_by_path is not Term.reach_by_path and issubclass(catalogue()[entry.shock.kind], Conditional)
    return kind.begins_by_rows and names <= set(kind.by_rows)


class ByPath:
    """A `Run` of a spec whose parameters vary by path; what it answers, and when, is the same."""

    def __init__(self, graph: Graph, first_path: int, paths: int, reveal: Sequence[str] = ()):
        self._varied, self._first, self._reveal = varied_of(graph), first_path, tuple(reveal)
        self._rows = self._varied.rows(first_path, paths)
        self._graphs: dict[tuple[float, ...], Graph] = {}
        self._drawn: dict[Any, Any] = {}  # what lies before step 0, of all paths
        changes = np.any(np.diff(np.array([*self._rows.values()]), axis=1) != 0.0, axis=0)
        self._edges = [0, *(np.flatnonzero(changes) + 1).tolist(), paths]
        self._runs: list[PartRun] = []
        self._nodes: list[tuple[Node, list[Node]]] = []
        together = graph_by_rows(self._varied, self._rows) if len(self._edges) > 2 else None
        self.together = together is not None
        if together is not None:
            self._whole = Run(together, first_path, paths, reveal)
            return
        self._whole = Run(self._make(0), first_path, paths, reveal)
        with uncollected():
            self._runs = [self._run(start, end) for start, end in pairwise(self._edges)]
            self._nodes = self._stack()

    def _make(self, place: int) -> Graph:
        values = {name: float(row[place]) for name, row in self._rows.items()}
        return Graph(self._varied.at(values), factors=True)

    def _run(self, start: int, end: int) -> PartRun:
        values = tuple([float(row[start]) for row in self._rows.values()])
        if values not in self._graphs:
            self._graphs[values] = self._make(start)
        return PartRun(
            self._graphs[values], self._first + start, end - start, self._reveal, self._whole, self._drawn
        )

    def _stack(self) -> list[tuple[Node, list[Node]]]:
        """Put stacks in the place of the terms of the whole run; its nodes, each with those of the runs."""
        widths, orders, found = np.diff(self._edges).tolist(), [run._order for run in self._runs], []
        for place, node in enumerate(self._whole._order):
            if isinstance(node, Node) and not isinstance(node.term, Hidden):
                nodes = [order[place] for order in orders]
                node.term = Stack([each.term for each in nodes], widths)
                found.append((node, nodes))
        return found

    def _begin(self) -> None:
        burning = [(node, nodes) for node, nodes in self._nodes if can_burn_together(node.term, nodes)]
        burnt = {node.key: self._burnt(node, nodes) for node, nodes in burning}
        for run in self._runs:
            run.burnt = burnt
            run._begin()
        for node, nodes in self._nodes:
            if node.key in burnt:
                self._whole._states[node.key] = burnt[node.key][1]
                continue
            states = [run.state_of(own) for run, own in zip(self._runs, nodes, strict=True)]
            self._whole._states[node.key] = node.term.gathered(states)

    def _burnt(self, node: Node, nodes: list[Node]) -> tuple[dict[str, Array] | None, State]:
        """What a node is after the burn-ins of all paths, side by side."""
        source = node.inputs[0]

        def draw(first_step: int, steps: int) -> Array:
            drawn: dict[int, Array] = {}
            self._whole._draw(source, first_step, steps, drawn)
            return drawn[id(source)]

        return burnt_by_nodes(node.term, nodes, draw)

    def tile(self, steps: int) -> dict[str, Array]:
        """The next `steps` steps of every series: name to float64 (steps, paths)."""
        if self._runs and not self._whole._states:
            with uncollected():
                self._begin()
        self._runs, self._drawn, self._graphs, self._nodes = [], {}, {}, []
        return self._whole.tile(steps)

    def state(self) -> dict[str, Array]:
        """The carried state after the last tile, flat, by name."""
        return self._whole.state()

    def restore(self, step: int, state: dict[str, Array]) -> None:
        """Go on from a state that `state()` gave after step `step` − 1 of the same paths."""
        self._whole.restore(step, state)


def deepest(graph: Graph) -> int:
    """The most steps before step 0 that any path is drawn from, looked for at the ends of the draws."""
    varied = graph.varied
    if varied is None or not varied.parameters:
        return max(graph.depth, graph.pace if graph.pace > 1 else 0)
    trials = [p.varying.law.trials() for p in varied.parameters.values()]
    ends = [{name: t[i] for name, t in zip(varied.parameters, trials, strict=True)} for i in (0, -1)]
    return max(graph.depth, graph.pace, *(Graph(varied.at(values)).depth for values in ends))


def varied_of(graph: Graph) -> Varied:
    """What varies by path in a graph that `build` made."""
    assert graph.varied is not None
    return graph.varied


def run(graph: Graph, first_path: int, paths: int, reveal: Sequence[str] = ()) -> Run | ByPath:
    """What draws the paths first_path … first_path + paths − 1 of a graph, from step 0 on."""
    kind = ByPath if graph.varied is not None and graph.varied.parameters else Run
    return kind(graph, first_path, paths, reveal)
