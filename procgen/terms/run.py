"""Values of a graph, tile after tile of steps, for a range of paths.

A `Run` is a pure function of the graph and the range: how its steps are cut into tiles changes nothing.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from functools import cached_property, partial
from itertools import pairwise
from typing import Any

import numpy as np

from procgen.chance.streams import Stream
from procgen.terms.base import Array, Before, Node, State
from procgen.terms.combine import Hidden
from procgen.terms.graph import Graph, Source
from procgen.terms.hands import at_hand, each
from procgen.terms.mixing import NORMAL, Group


class Run:
    """Draws the paths first_path … first_path + paths − 1 of a graph, from step 0 on.

    Parameters
    ----------
    graph : Graph
    first_path, paths : int
        The range of paths, each drawn as it would be in any other range.
    reveal : sequence of str
        Names `series.label` or `series.label.output` to give beside the series.
    """

    def __init__(self, graph: Graph, first_path: int, paths: int, reveal: Sequence[str] = ()):
        self.graph, self.first_path, self.paths = graph, first_path, paths
        self.step = 0
        self.columns: dict[str, Node] = {**graph.series, **{name: graph.resolve(name) for name in reveal}}
        self._order = graph.order(list(self.columns.values()), drawn=True)
        self._spent = spent(self._order, self.columns.values())
        self._states: dict[str, State] = {}
        self._begun: dict[Any, Any] = {}
        self._joint: dict[int, list[tuple[Array, Array]]] = {}

    def tile(self, steps: int) -> dict[str, Array]:
        """The next `steps` steps of every series: name to float64 (steps, paths)."""
        if not self._states:
            self._begin()
        most = max(LARGEST // (self.graph.pace * self.paths), 1)
        if self.graph.pace > 1 and steps > most:
            parts = [self.tile(min(most, steps - first)) for first in range(0, steps, most)]
            return {name: np.concatenate([part[name] for part in parts]) for name in self.columns}
        at = np.arange(self.step, self.step + steps)
        values = self._tile(at)
        self.step += steps
        shape = (steps, self.paths)
        found = {name: values[id(node)] for name, node in self.columns.items()}
        return {name: rows if rows.shape == shape else np.broadcast_to(rows, shape) for name, rows in found.items()}

    def state(self) -> dict[str, Array]:
        """The carried state after the last tile, flat, by name."""
        return {f"{key}:{name}": rows for key, state in self._states.items() for name, rows in state.items()}

    def state_of(self, node: Node) -> State:
        """The carried state of one node, just before the next step."""
        if not self._states:
            self._begin()
        return self._states[node.key]

    def early(self) -> float:
        """Steps after which the state is likely to be, to the last bit, that of any other past; inf where never."""
        if not self._states:
            self._begin()
        if self.graph.pace > 1:
            return math.inf
        steps = 0.0
        for node in self._order:
            if isinstance(node, Node) and not isinstance(node.term, Hidden):
                steps += node.term.early()
        return steps

    def restore(self, step: int, state: dict[str, Array]) -> None:
        """Go on from a state that `state()` gave after step `step` − 1 of the same paths."""
        self._states = {node.key: {} for node in self._order if isinstance(node, Node)}
        for name, rows in state.items():
            key, _, part = name.rpartition(":")
            self._states[key][part] = rows
        self.step = step

    # forward

    def _tile(self, steps: Array) -> dict[int, Array]:
        """Values of all nodes that are not spent, and their new states; strand by strand where threads share them."""
        values: dict[int, Any] = {}
        ways = self._strands if at_hand() > 1 else [self._order]
        if len(ways) > 1:
            self._advance([node for node in self._order if ahead(node)], steps, {}, values=values)
        found = each(lambda way: self._advance(way, steps, self._spent, values=values)[1], ways)
        for states in found:
            self._states = {**self._states, **states}
        return values

    @cached_property
    def _strands(self) -> list[list[Any]]:
        return strands(self._order)

    def _advance(
        self,
        order: Sequence[Any],
        steps: Array,
        spent: Mapping[int, Sequence[int]],
        pace: int = 1,
        values: dict[int, Any] | None = None,
    ) -> tuple[dict[int, Array], dict[str, State]]:
        """Values at `steps` of what has this pace, and at as many more of what has a faster one; their new states.

        `values` has what is known already. What is `spent` is let go at once: its memory, still in the processor's
        cache, is had by what comes next.
        """
        values = {} if values is None else values
        hidden: dict[int, dict[str, Array]] = {}
        states: dict[str, State] = {}
        for node in order:
            at = within(steps, node.pace // pace)
            if isinstance(node, Source):
                if id(node) not in values:
                    self._draw(node, int(at[0]), len(at), values)
            elif isinstance(node.term, Hidden):
                values[id(node)] = hidden[id(node.inputs[0])][node.term.output]
            else:
                inputs = [values[id(part)] for part in node.inputs]
                out, states[node.key] = node.term.recurse(inputs, self._states.get(node.key, {}), at)
                if isinstance(out, dict):
                    hidden[id(node)] = out
                    out = out[""]
                values[id(node)] = out
                del inputs, out
            for part in spent.get(id(node), ()):
                values.pop(part, None)
                hidden.pop(part, None)
        return values, states

    def _draw(self, source: Source, first_step: int, steps: int, values: dict[int, Array]) -> None:
        """Shocks of a source, and with it of every source whose normals it is mixed with."""
        if source.group is None:
            values[id(source)] = self._alone(source, first_step, steps)
        else:
            states = None if source.group.by is None else values[id(source.group.by)]
            mixed = self._mixed(source.group, first_step, steps, states)
            for member, z in zip(source.group.sources, mixed, strict=True):
                values[id(member)] = z

    def _alone(self, source: Source, first_step: int, steps: int) -> Array:
        """Shocks of a source that is mixed with no other; many are shared among threads by their steps."""
        count = at_hand()
        if count == 1 or steps * self.paths < SHARED:
            u = source.stream.uniforms(self.first_path, self.paths, first_step, steps)
            return source.law.shocks(u, out=u)
        out = np.empty((steps, self.paths))

        def fill(span: tuple[int, int]) -> None:
            rows = out[slice(*span)]
            source.stream.uniforms(self.first_path, self.paths, first_step + span[0], len(rows), out=rows)
            source.law.shocks(rows, out=rows)

        each(fill, [*pairwise([steps * k // count for k in range(count + 1)])])
        return out

    def _mixed(self, group: Group, first_step: int, steps: int, states: Array | None) -> list[Array]:
        def fill(place: int, rows: Array) -> None:
            group.sources[place].stream.uniforms(self.first_path, self.paths, first_step, steps, out=rows)

        return group.shocks(fill, (steps, self.paths), None if states is None else states[len(states) - steps :])

    # before step 0

    def _begin(self) -> None:
        for node in self._order:
            if isinstance(node, Source):
                self._begin_source(node)
            elif isinstance(node.term, Hidden):
                self._begun[id(node)] = self._begun.get((id(node.inputs[0]), node.term.output))
            else:
                self._begin_node(node)
        self._begun.clear()
        self._joint.clear()

    def _begin_source(self, source: Source) -> None:
        if id(source) in self._begun:
            return
        if source.group is None and all(reader.term.burns_in for reader in self._readers(source)):
            self._begun[id(source)] = _Past(self, source)
        elif head := max(s.head for s in (source.group.sources if source.group else (source,))):
            self._draw(source, -head, head, self._begun)

    def _readers(self, source: Source) -> list[Node]:
        return [node for node in self._order if any(part is source for part in node.inputs)]

    def _begin_node(self, node: Node) -> None:
        before = Before(
            head=node.head,
            inputs=tuple(self._rows(part) for part in node.inputs),
            peek=lambda i: self._peek(node.inputs[i]),
            normals=lambda count: self._start_normals(self._source_below(node), 0, count),
            joint=self._joint_rows(node) if node.joint else None,
            heads=node.heads,
        )
        values, state = node.term.begin(before)
        if isinstance(values, dict):
            self._begun.update({(id(node), name): rows for name, rows in values.items()})
            values = values[""]
        self._begun[id(node)] = values
        self._states[node.key] = state

    def _rows(self, part: Any) -> Array:
        rows = self._begun.get(id(part))
        return np.zeros((0, 1)) if rows is None else rows

    def _peek(self, node: Any) -> Array:
        order = self.graph.order([node], drawn=True)
        values, _ = self._advance(order, np.array([0]), spent(order, [node]), node.pace)
        return values[id(node)]

    def _joint_rows(self, node: Node) -> tuple[Array, Array]:
        joint, place, sources = node.joint
        if id(joint) not in self._joint:
            heads = [n.head for n in self._order if isinstance(n, Node) and n.joint and n.joint[0] is joint]
            self._joint[id(joint)] = joint.draw(
                [partial(self._past_normals, source) for source in sources],
                [partial(self._start_normals, source) for source in sources],
                max(heads),
            )
        return self._joint[id(joint)][place]

    def _past_normals(self, source: Source, first: int, count: int) -> Array:
        """A source's own normals at steps −1 − first, −2 − first, …, before any mixing."""
        return self._normals(source.stream, -first - count, count)[::-1]

    def _start_normals(self, source: Source, first: int, count: int) -> Array:
        own = source.stream
        return self._normals(Stream(own.seed, own.name, own.label, "start"), first, count)

    def _normals(self, stream: Stream, first_step: int, steps: int) -> Array:
        if not steps:
            return np.zeros((0, self.paths))
        u = stream.uniforms(self.first_path, self.paths, first_step, steps)
        return NORMAL.shocks(u, out=u)

    def _source_below(self, node: Any) -> Source:
        while not isinstance(node, Source):
            node = node.inputs[-1]
        return node


SHARED = 1 << 14  # shocks that repay to be drawn by several threads
LARGEST = 1 << 18  # values that a term with finer steps has at once


def spent(order: Sequence[Any], wanted: Iterable[Any]) -> dict[int, list[int]]:
    """For each node, by its id, whose values nobody reads after it."""
    last: dict[int, int] = {}
    for node in order:
        read = (node.group.by,) if isinstance(node, Source) and node.group else getattr(node, "inputs", ())
        last.update((id(part), id(node)) for part in read)
    kept = {id(node) for node in wanted}
    found: dict[int, list[int]] = {}
    for part, node in last.items():
        if part not in kept:
            found.setdefault(node, []).append(part)
    return found


def ahead(node: Any) -> bool:
    """Whether a source is drawn before all strands: together with others, by what follows nothing."""
    return isinstance(node, Source) and node.group is not None and node.group.by is None


def strands(order: Sequence[Any]) -> list[list[Any]]:
    """The nodes of an order in parts of which none reads what is in another, each in order.

    Shocks of sources that go together are there before any part is begun, and join none.
    """
    belongs: dict[int, int] = {}

    def root(key: int) -> int:
        while belongs.setdefault(key, key) != key:
            key = belongs[key]
        return key

    for node in order:
        if isinstance(node, Source):
            read = (*node.group.sources, node.group.by) if node.group is not None and node.group.by is not None else ()
        else:
            read = node.inputs
        for part in read:
            belongs[root(id(part))] = root(id(node))
    found: dict[int, list[Any]] = {}
    for node in order:
        found.setdefault(root(id(node)), []).append(node)
    return [*found.values()]


def within(steps: Array, times: int) -> Array:
    """The finer steps, so many to one, that these steps in a row are made of."""
    return steps if times == 1 else np.arange(steps[0] * times, (steps[-1] + 1) * times)


class _Past:
    """The rows of a source before step 0, drawn slice by slice as a burn-in asks for them."""

    def __init__(self, run: Run, source: Source):
        self._run, self._source = run, source

    def __len__(self) -> int:
        return self._source.head

    def __getitem__(self, rows: slice) -> Array:
        first, end, _ = rows.indices(len(self))
        drawn: dict[int, Array] = {}
        self._run._draw(self._source, first - len(self), end - first, drawn)
        return drawn[id(self._source)]
