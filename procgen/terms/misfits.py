"""What does not fit together in a graph: shocks of steps of different length, and what reads missing values."""

from __future__ import annotations

from typing import Any

from procgen.spec.model import Fault, SpecError
from procgen.terms.base import Node
from procgen.terms.combine import Hidden, Scaled


def refuse_uneven(graph: Any) -> None:
    """SpecError when shocks are correlated that have not the same number of steps."""
    for group in graph.groups:
        if len({source.pace for source in group.sources}) > 1:
            names = " and ".join(source.name for source in group.sources)
            message = f"{names} have steps of different length; correlate what runs at the same pace"
            raise SpecError((Fault(next(iter(graph.spec.series.values())).place, message),))


def gaps_of(node: Any) -> Node | None:
    """The term that leaves values of a node out, or None."""
    while isinstance(node, Node) and isinstance(node.term, Scaled):
        node = node.inputs[0]
    return node if isinstance(node, Node) and node.term.gaps else None


def refuse_gaps(graph: Any) -> None:
    """SpecError when anything but a factor reads missing values, or a column cannot hold them."""
    for name, series in graph.spec.series.items():
        if series.type == "int64" and gaps_of(graph.series[name]) is not None:
            message = f"an int64 cannot say that a value of {name} is missing"
            raise SpecError((Fault(series.place, f"{message}; write decimals: 0 in place of type: int64"),))
    for node in graph.order(graph.owned()):
        if isinstance(node, Node) and not isinstance(node.term, Scaled | Hidden):
            for part in node.inputs:
                if gaps_of(part) is not None:
                    message = (
                        f"{node.name} reads {part.name}, whose values are missing at some steps; expected `missing` "
                        f"around the whole body of a series; put {node.term.kind} inside it"
                    )
                    raise SpecError((Fault(node.place, message),))
