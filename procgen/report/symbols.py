"""Numbers that print as the name of the parameter that is drawn in their place, for equations."""

from __future__ import annotations

from typing import Any

from procgen.spec.varying import Varying, fixed
from procgen.terms.graph import Graph
from procgen.terms.varied import median


class Symbol(float):
    """A number that counts as itself and is written as a name."""

    name: str

    def __new__(cls, value: float, name: str) -> Symbol:
        made = super().__new__(cls, value)
        made.name = name
        return made

    def __format__(self, how: str) -> str:
        return self.name

    def __abs__(self) -> Symbol:
        return self

    def __neg__(self) -> Symbol:
        return Symbol(-float(self), f"-{self.name}")

    def __add__(self, other: Any) -> Any:
        return self if other == 0 else float(self) + other

    def __lt__(self, other: Any) -> bool:
        return other != 0 and float(self) < other  # a name has its sign in itself

    def __eq__(self, other: object) -> bool:
        return self is other  # no drawn number is 0 or 1 for good, so none is left out

    def __ne__(self, other: object) -> bool:
        return self is not other

    def __hash__(self) -> int:
        return id(self)


def symbolic(graph: Graph) -> tuple[Graph, list[str]]:
    """A graph with names in place of what is drawn by path, and what each name stands for."""
    varied = graph.varied
    if varied is None or not varied.parameters:
        return graph, []

    def symbol(owner: str, varying: Varying) -> Symbol:
        del owner
        return Symbol(varying.number(median(varying)), named(varying))

    said = [f"{name} ({p.varying.law})" for name, p in varied.parameters.items()]
    return Graph(fixed(varied.spec, symbol)), said


def named(varying: Varying) -> str:
    """The name of a parameter in an equation: as declared, or that of the number it stands for."""
    return varying.name or varying.label.partition(".")[2]
