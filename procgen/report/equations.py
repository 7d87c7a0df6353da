"""The equations of a spec with their numbers, series by series."""

from __future__ import annotations

from textwrap import wrap
from typing import Any

from procgen.report.symbols import symbolic
from procgen.spec.entries import walk
from procgen.spec.model import Spec
from procgen.terms.base import number
from procgen.terms.combine import Scaled, Sum
from procgen.terms.graph import Graph, Source, build


def equations(spec: Spec, width: int, graph: Graph | None = None) -> list[str]:
    """Every shared body and series with what it is the sum of, and the equation of each term; of a graph if there."""
    graph, drawn = symbolic(graph or build(spec))
    lines = []
    for owner in [*spec.shared, *spec.series]:
        lines += ["", *_Body(graph, owner).lines(width)]
    if drawn:
        text = f"drawn by path: {', '.join(drawn)}; numbers that follow from them are written at their medians"
        lines += ["", *wrap(text, width, subsequent_indent="  ")]
    return lines


class _Body:
    """The terms of one shared body or series."""

    def __init__(self, graph: Graph, owner: str):
        self.graph, self.owner = graph, owner
        self.root = graph.resolve(owner)

    def lines(self, width: int) -> list[str]:
        own = [(self._label(node), self._equations(node)) for node in self._own()]
        rows = [(label if i == 0 else "", text) for label, texts in own for i, text in enumerate(texts)]
        pad = max((len(label) for label, _ in rows), default=0) + 2
        lines = wrap(f"{self.owner}[t] = {self._whole()}", width, subsequent_indent="  ")
        for label, text in rows:
            lines += wrap(text, width, initial_indent=f"  {label:{pad}}", subsequent_indent=" " * (pad + 4))
        return lines

    def _own(self) -> list[Any]:
        """The terms that belong to this body, in the order of the spec; sums and factors show where they are used."""
        order = [n for n in self.graph.order([self.root]) if not isinstance(n, Source)]
        shocks = {id(n.inputs[-1]) for n in order if n.term.takes_shock}
        spec = self.graph.spec
        body = spec.series[self.owner].of if self.owner in spec.series else spec.shared[self.owner].of
        place = {f"{self.owner}.{entry.label}": at for at, (entry, _) in reversed([*enumerate(walk(body))])}
        found = [
            n
            for n in order
            if n.name.partition(".")[0] == self.owner
            and n.term.kind
            and not (isinstance(n.term, Sum) and n.name == self.owner)
            and id(n) not in shocks
        ]
        return sorted(found, key=lambda n: place.get(n.name, len(place)))

    def _equations(self, node: Any) -> list[str]:
        names = [self._called(part) for part in node.inputs]
        found = [node.term.equation(*names)]
        if node.term.takes_shock:
            noise = node.inputs[-1]
            text = noise.term.equation(*(self._called(part) for part in noise.inputs))
            found.append(text if text.startswith("a[t]") else f"a = e,  {text}")
        return found

    def _whole(self) -> str:
        """The body as a sum of its labelled parts."""
        implicit = isinstance(self.root.term, Sum) and self.root.name == self.owner
        parts = self.root.inputs if implicit else [self.root]
        return " + ".join(f"{self._called(part)}[t]" for part in parts).replace("+ −", "− ")

    def _called(self, node: Any) -> str:
        """What a node is called in the equations of this body."""
        if isinstance(node, Source):
            return "z"
        if isinstance(node.term, Scaled):
            factor = number(node.term.factor)
            return f"{'−' if factor == '−1' else factor + ' '}{self._called(node.inputs[0])}"
        if isinstance(node.term, Sum) and node.name == self.owner and node is not self.root:
            return f"({' + '.join(self._called(part) for part in node.inputs)})".replace("+ −", "− ")
        return self._label(node)

    def _label(self, node: Any) -> str:
        return node.name.removeprefix(f"{self.owner}.")
