"""From a checked spec to a graph of configured terms: what feeds what, how far back each must reach.

Nodes are listed so that inputs come before what reads them. Primary streams are `Source` nodes; those whose
normals are correlated form a `Group`, mixed in the order of the spec's `correlation`.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np

from procgen.chance.streams import Stream
from procgen.spec.model import Entry, Fault, Place, Spec, SpecError
from procgen.spec.records import dataclass
from procgen.terms import catalogue
from procgen.terms.base import Node, Term
from procgen.terms.combine import Hidden, Scaled, Sum
from procgen.terms.labels import entry_named, labelled
from procgen.terms.misfits import gaps_of, refuse_gaps, refuse_uneven
from procgen.terms.mixing import Group, followed, groups_of
from procgen.terms.noise import WhiteNoise
from procgen.terms.open_start import OPEN, OpenStart
from procgen.terms.start import JointStart
from procgen.terms.varied import Varied


@dataclass(eq=False)
class Source:
    """A primary stream of shocks of one law, at its address; `head` and `heads` as for a node."""

    name: str
    stream: Stream
    law: Any
    head: int = 0
    heads: np.ndarray | None = None
    group: Group | None = None
    pace: int = 1

    inputs = ()


class Graph:
    """The nodes of a spec. `series` maps each output column to its node."""

    def __init__(self, spec: Spec, factors: bool = False):
        """`factors`: every entry gets a node for its factor, also of 1, so that specs that differ in it are alike."""
        from procgen.terms.past import leaving

        (spec, self.left), self._factors = leaving(spec), factors  # `left`: what series leave from, by name
        self.spec = spec
        self.varied: Varied | None = None  # set by `build`
        self.sources: list[Source] = []
        self.groups: list[Group] = []
        self.filters: dict[int, Node] = {}
        self._entries: dict[int, Node] = {}
        self._owners: dict[str, Node] = {}
        self._hidden: dict[tuple[int, str], Node] = {}
        self._count = 0
        self._paces: dict[int, int] = {}
        bodies = [*(one.of for one in spec.series.values()), *(one.of for one in spec.shared.values())]
        for body in bodies:
            self._paces.update(_paced(body, 1))
        self.series = {name: self._owner(name) for name in spec.series}
        for name in spec.shared:
            self._owner(name)
        self._correlate()
        refuse_uneven(self)
        refuse_gaps(self)
        self._plan()

    def resolve(self, name: str) -> Node:
        """The node that a name points to: a shared body, a series, series.label or series.label.output.

        Raises KeyError with a sentence where there is none.
        """
        owner, *rest = name.split(".")
        if owner not in self.spec.series and owner not in self.spec.shared:
            raise KeyError(f"expected a series or shared body, got {owner!r} in {name!r}")
        if not rest:
            return self._owner(owner)
        entry = self._entry_named(owner, rest[0], name)
        if self._paces[id(entry)] > 1:
            raise KeyError(f"{name} has {self._paces[id(entry)]} steps in one of the spec; name what is made of it")
        node = self._entry(entry, owner)
        if len(rest) == 1:
            return node
        while isinstance(node.term, Scaled):
            node = node.inputs[0]
        return self._hidden_of(node, ".".join(rest[1:]), name)

    def source_of(self, name: str) -> Source:
        """The primary stream behind `series.label`."""
        owner, label = name.split(".")
        node = self._entry(self._entry_named(owner, label, name), owner)
        while not isinstance(node, Source):
            node = node.inputs[0]
        return node

    def order(self, wanted: list[Any] | None = None, drawn: bool = False) -> list[Any]:
        """The nodes and sources that the wanted ones need, inputs first; `drawn`: also the states of correlations."""
        done: dict[int, Any] = {}

        def visit(node: Any) -> None:
            if id(node) not in done:
                for part in (*node.inputs, *followed(node)) if drawn else node.inputs:
                    visit(part)
                done[id(node)] = node

        for node in list(self.series.values()) if wanted is None else wanted:
            visit(node)
        return list(done.values())

    def terms(self) -> Iterator[tuple[str, Node]]:
        """Every term of every series and shared body, as (`series.label`, node), in spec order.

        The label is "" where several terms would share it, which no name then points to.
        """
        owners: dict[str, Any] = {**self.spec.shared, **self.spec.series}
        for owner, body in owners.items():
            for label, entry in labelled(body.of):
                node = self._entry(entry, owner)
                while isinstance(node.term, Scaled):
                    node = node.inputs[0]
                if node.pace > 1:
                    continue
                yield f"{owner}.{label}", node

    def owned(self) -> list[Node]:
        """The nodes of every series and shared body."""
        return [*self._owners.values()]

    @property
    def depth(self) -> int:
        """The most steps before step 0 that anything must be drawn from; bounds the paths drawn at a time."""
        return max((node.head for node in self.order(self.owned())), default=0)

    @property
    def pace(self) -> int:
        """The most steps that anything has in one step of the spec."""
        return max(self._paces.values(), default=1)

    @property
    def portable(self) -> tuple[bool, str]:
        """Whether every value is the same bits on every machine, and why not."""
        for node in self.order():
            part = node.law if isinstance(node, Source) else node.term
            if not part.portable:
                return False, f"{node.name}: {getattr(part, 'why_not_portable', '') or 'not portable'}"
        return True, ""

    # building

    def _owner(self, name: str) -> Node:
        if name not in self._owners:
            body = self.spec.series.get(name) or self.spec.shared[name]
            self._owners[name] = self._body(body.of, name, body.place)
        return self._owners[name]

    def _stream(self, owner: str) -> str:
        return self.spec.series[owner].stream if owner in self.spec.series else owner

    def _body(self, entries: tuple[Entry, ...], owner: str, place: Place) -> Node:
        nodes = [self._entry(entry, owner) for entry in entries]
        return nodes[0] if len(nodes) == 1 else self._node(Sum({}), owner, nodes, place, nodes[0].pace)

    def _entry(self, entry: Entry, owner: str) -> Node:
        if id(entry) not in self._entries:
            node = self._unscaled(entry, owner)
            if self._factors or entry.times != 1.0:
                node = self._node(Scaled(entry.times), node.name, [node], entry.place, node.pace)
            self._entries[id(entry)] = node
        return self._entries[id(entry)]

    def _unscaled(self, entry: Entry, owner: str) -> Node:
        pace = self._paces[id(entry)]
        if entry.kind == "use":
            return self._used(entry, pace)
        kind = OpenStart if entry.kind == OPEN else catalogue()[entry.kind]
        term = kind(entry.values)
        name = f"{owner}.{entry.label or entry.kind}"
        inputs: list[Any] = []
        for body in entry.bodies.values():
            if kind.separate:
                inputs += [self._entry(part, owner) for part in body]
            else:
                inputs.append(self._body(body, owner, entry.place))
        if kind.takes_shock:
            noise = self._shock(entry, term, owner)
            term.shock_scale = noise.term.scale()
            inputs.append(noise)
        inputs += [self._source(draw, owner, entry.label, name, pace) for draw in term.draws()]
        node = self._node(term, name, inputs, entry.place, pace)
        misfit = term.misfit(inputs) or self._too_long(term, pace)
        if misfit:
            raise SpecError((Fault(entry.place, misfit),))
        if kind.takes_shock:
            self.filters[id(inputs[-1])] = node
        return node

    def _used(self, entry: Entry, pace: int) -> Node:
        if pace > 1:
            message = "what is used runs at the steps of the spec; write its terms here, or share the whole aggregate"
            raise SpecError((Fault(entry.place, message),))
        try:
            return self.resolve(entry.values["name"])
        except KeyError as error:
            raise SpecError((Fault(entry.place, error.args[0]),)) from None

    def _too_long(self, term: Term, pace: int) -> str | None:
        steps = self.spec.time.steps * pace
        if term.longest is None or steps <= term.longest:
            return None
        return f"expected at most {term.longest:,} steps with {term.kind}, got {steps:,}; {term.fewer}"

    def _shock(self, entry: Entry, term: Term, owner: str) -> Node:
        if entry.shock is not None:
            return self._unscaled(entry.shock, owner)
        noise = WhiteNoise({"sd": term.shock_sd(), "law": entry.values["law"]})
        name = f"{owner}.{entry.label}"
        pace = self._paces[id(entry)]
        sources = [self._source(draw, owner, entry.label, name, pace) for draw in noise.draws()]
        return self._node(noise, name, sources, entry.place, pace)

    def _source(self, draw: Any, owner: str, label: str, name: str, pace: int) -> Source:
        source = Source(name, Stream(self.spec.seed, self._stream(owner), label, draw.role), draw.law, pace=pace)
        self.sources.append(source)
        return source

    def _node(self, term: Term, name: str, inputs: list[Any], place: Place, pace: int = 1) -> Node:
        term.address, term.arity = name, len(inputs)
        self._count += 1
        return Node(f"{name}#{self._count}", name, term, tuple(inputs), place=place, pace=pace)

    def _entry_named(self, owner: str, label: str, name: str) -> Entry:
        body = self.spec.series.get(owner) or self.spec.shared[owner]
        return entry_named(body.of, owner, label, name)

    def _hidden_of(self, node: Node, output: str, name: str) -> Node:
        while output not in node.term.outputs and node.term.takes_shock:
            node = node.inputs[-1]  # a filter's shock answers to the filter's name
        if output not in node.term.outputs:
            known = ", ".join(node.term.outputs) or "none"
            raise KeyError(f"expected a hidden output of {node.name} ({known}), got {output!r} in {name!r}")
        if (id(node), output) not in self._hidden:
            self._hidden[id(node), output] = self._node(Hidden(output), name, [node], node.place)
        return self._hidden[id(node), output]

    # chance and the past

    def _correlate(self) -> None:
        for group in groups_of(self):
            self.groups.append(group)
            for source in group.sources:
                source.group = group

    def gappy(self, name: str) -> bool:
        """Whether what a name points to has missing values."""
        return gaps_of(self.resolve(name)) is not None

    def _plan(self) -> None:
        """Decide which terms start jointly, and how far back everything must be drawn."""
        wanted = self.owned()
        # A filter that starts jointly reads no shocks before step 0; any other one, like a walk, does.
        filters = {id(node) for node in self.filters.values() if _stationary(node) is not None}
        self._heads(wanted, passed=filters)
        for sources in self._together():
            self._start_together(sources)
        self._heads(wanted, passed=set())
        self._refuse_missing_past(wanted)

    def _together(self) -> list[tuple[Source, ...]]:
        lone = [(source,) for source in self.sources if source.group is None]
        return [*lone, *(group.sources for group in self.groups)]

    def _start_together(self, sources: tuple[Source, ...]) -> None:
        noises = {id(n.inputs[0]): n for n in self.order(self.owned()) if _is_noise(n)}
        nodes, members, chosen = [], [], []
        for i, source in enumerate(sources):
            noise = noises.get(id(source))
            if noise is None:
                continue
            node = self.filters.get(id(noise), noise)
            past = _stationary(node)
            if past is None:
                node = noise
            if past is None and noise.head == 0:
                continue
            gaussian = isinstance(noise.term, WhiteNoise) and source.law.gaussian
            nodes.append((node, gaussian, source))
            members.append(past if past is not None else noise.term.as_member())
            chosen.append(i)
        if not any(m is not None and m.phi for m in members) or not all(exact for _, exact, _ in nodes):
            return
        if sources[0].group is not None and not sources[0].group.gaussian:
            return  # each alone is Gaussian, but not their past together
        matrix = sources[0].group.matrix if sources[0].group else np.ones((1, 1))
        joint = JointStart(members, matrix[np.ix_(chosen, chosen)])
        for i, (node, _, _) in enumerate(nodes):
            node.joint = (joint, i, tuple(source for _, _, source in nodes))

    def _heads(self, wanted: list[Node], passed: set[int]) -> None:
        order = self.order(wanted, drawn=True)
        fewest = {id(node): 0 for node in order}  # what is read of a node on every path
        for node in order:
            node.head, node.heads = 0, None
        for node in reversed(order):
            for state in followed(node):
                state.head = max(state.head, node.head)
            if isinstance(node, Source) or id(node) in passed or node.joint is not None:
                continue
            try:
                needs = node.term.reach(node.head)
            except ValueError as error:
                raise SpecError((Fault(node.place, _too_slow(node, error)),)) from None
            own = node.term.reach_by_path(node.head) or needs
            for part, need, rows in zip(node.inputs, needs, own, strict=False):
                part.head = max(part.head, need)
                if np.ndim(rows) or part.heads is not None:
                    part.heads = np.maximum(fewest[id(part)] if part.heads is None else part.heads, rows)
                fewest[id(part)] = max(fewest[id(part)], 0 if np.ndim(rows) else need)

    def _refuse_missing_past(self, wanted: list[Node]) -> None:
        faults = []
        for node in self.order(wanted, drawn=True):
            if isinstance(node, Source):
                continue
            known = node.term.past()
            if known is not None and node.head > known:
                faults.append(
                    Fault(
                        node.place,
                        f"something reads {node.name} {node.head} steps before step 0, and "
                        + (node.term.no_past or f"`before` gives {known}; give {node.head} values there, or lag less"),
                    )
                )
        if faults:
            raise SpecError(tuple(faults))


def build(spec: Spec) -> Graph:
    """The graph of a checked spec; where parameters vary by path, with their medians, and `varied` has them all."""
    from procgen.terms.past import refuse_varying
    from procgen.terms.supports import refuse_outside

    varied = Varied(spec)
    refuse_varying(varied.spec)
    graph = Graph(varied.typical if varied.parameters else varied.spec)
    graph.varied = varied
    refuse_outside(graph)
    return graph


def _too_slow(node: Node, error: ValueError) -> str:
    return (
        f"{node.name} begins with a burn-in, because its shocks are not Gaussian, and {error}; give `before`, a "
        "normal law, or smaller coefficients"
    )


def _stationary(node: Node) -> Any:
    """The node's term as a member of a joint start, if it is a filter in its stationary law."""
    return node.term.stationary() if hasattr(node.term, "stationary") else None


def _is_noise(node: Any) -> bool:
    return isinstance(node, Node) and node.term.noise


def _paced(entries: tuple[Entry, ...], pace: int) -> Iterator[tuple[int, int]]:
    """Each entry's id, and how many steps it has in one of the spec."""
    for entry in entries:
        yield id(entry), pace
        finer = getattr(catalogue().get(entry.kind), "finer", "")
        within = pace * int(entry.values[finer]) if finer else pace
        if entry.shock is not None:
            yield from _paced((entry.shock,), pace)
        for body in entry.bodies.values():
            yield from _paced(body, within)
