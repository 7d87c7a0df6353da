"""The values that a series of a graph can have, and the type of column that follows from them."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any

from procgen.spec.model import Fault, SpecError
from procgen.terms.base import Node, number
from procgen.terms.combine import Exp, Hidden
from procgen.terms.misfits import gaps_of
from procgen.terms.shape import Logit
from procgen.terms.support import EVERYTHING, Support

LARGEST_EXPONENT = 709.0
BOUNDED = ("uniform", "bernoulli", "empirical")  # laws whose shocks end somewhere
LARGEST = 2.0**53  # up to here every whole number is a float64


def refuse_outside(graph: Any) -> None:
    """SpecError when nothing holds the body of a logit between its levels, or a value is beyond double precision."""
    if graph.varied is not None and graph.varied.parameters:
        return
    for node in graph.order(graph.owned()):
        if not isinstance(node, Node):
            continue
        if isinstance(node.term, Logit) and (fault := _beyond_levels(graph, node)):
            raise SpecError((Fault(node.place, f"{node.name} needs a body between its levels {fault}"),))
        if isinstance(node.term, Exp) and (lowest := support_of(node.inputs[0]).low) > LARGEST_EXPONENT:
            message = (
                f"{node.name} needs a body below {number(LARGEST_EXPONENT)}, whose exponential a float64 can hold, got "
                f"{number(lowest)} or more; subtract a level from it"
            )
            raise SpecError((Fault(node.place, message),))


def _beyond_levels(graph: Any, node: Node) -> str:
    """What is wrong with the body of a logit: a value of it, or a side of it, is not between the levels; or ""."""
    body, low, high = support_of(node.inputs[0]), float(node.term.low), float(node.term.high)
    levels = f"{number(low)} and {number(high)}"
    if body.low == body.high and not low < body.low < high:
        return f"{levels}, got {number(body.low)}; move `low` or `high`"
    if body.low >= high or body.high <= low:
        never = f"never below {number(body.low)}" if body.low >= high else f"never above {number(body.high)}"
        return f"{levels}, got what is {never}; move `low` or `high`"
    values = body.values or [level for level in (low, high) if body.on(level) and body.low <= level <= body.high]
    outside = [x for x in values if not low < x < high]
    if outside:
        return f"{levels}, got what can be {number(outside[0])}; move `low` or `high`"
    if (body.low < low or body.high > high) and _unbounded(graph, node):
        held = "hold it by a sigmoid, or by a clip whose bounds are a little within the levels"
        return f"{levels}, got one that nothing holds there; {held}"
    return ""


def _unbounded(graph: Any, node: Node) -> bool:
    """Whether a shock of some size at all is drawn for a node."""
    laws = [part.law for part in graph.order([node]) if not isinstance(part, Node)]
    return any(law.name not in BOUNDED or getattr(law, "smoothed", False) for law in laws)


def column_type(graph: Any, name: str) -> str:
    """What a series is stored as: what its spec says, else int64 where its values are counts, else float64."""
    declared = graph.spec.series[name]
    return declared.type or ("int64" if counted(graph, name) else "float64")


def counted(graph: Any, name: str) -> bool:
    """Whether a series is stored as int64 of itself: whole numbers, none missing, and no type or decimals stated."""
    declared, node = graph.spec.series[name], graph.series[name]
    if declared.type is not None or declared.decimals is not None or gaps_of(node) is not None:
        return False
    return _whole(node, {}) and is_whole(common_support(graph, name))


def is_whole(support: Support) -> bool:
    """Whether all values are whole numbers, and its bounds, where it has some, are such that float64 has them all."""
    if any(math.isfinite(end) and abs(end) > LARGEST for end in (support.low, support.high)):
        return False
    if support.values is not None:
        return all(value.is_integer() for value in support.values)
    return support.step >= 1.0 and float(support.step).is_integer() and float(support.offset).is_integer()


def _whole(node: Any, known: dict[int, Support]) -> bool:
    """Whether a node gives whole numbers, to the last bit.

    A term that makes them of anything, as counts and roundings do, is believed; one that only passes them on, as sums
    and factors do, must get them: 0.1 times a count, and 10 times that, is on the lattice and not always whole.
    """
    if not is_whole(support_of(node, known)) or not hasattr(node, "term"):
        return False
    if isinstance(node.term, Hidden):
        return True
    inputs = [support_of(part, known) for part in node.inputs]
    return all(
        is_whole(node.term.support(*inputs[:k], EVERYTHING, *inputs[k + 1 :])) or _whole(part, known)
        for k, part in enumerate(node.inputs)
    )


def common_support(graph: Any, name: str) -> Support:
    """The support of a series, if parameters that are drawn by path leave it as it is; else everything."""
    support = support_of(graph.series[name])
    if graph.varied is None or not graph.varied.parameters or support.everything:
        return support
    alike = all(other is not None and support_of(other.series[name]) == support for other in _drawn(graph))
    return support if alike else EVERYTHING


@lru_cache(maxsize=1)  # all series of a spec are asked for one after the other
def _drawn(graph: Any) -> tuple[Any, ...]:
    """The graph with low and with high numbers for its parameters; None for one that cannot be."""
    from procgen.spec.model import SpecError
    from procgen.terms.graph import Graph

    made: list[Any] = []
    for rank in (0.1, 0.9):
        try:
            values = {key: _at(one.varying.law, rank) for key, one in graph.varied.parameters.items()}
            made.append(Graph(graph.varied.at(values)))
        except SpecError:
            made.append(None)
    return tuple(made)


def _at(law: Any, rank: float) -> float:
    import numpy as np

    from procgen.chance import draws
    from procgen.spec.draws import TableDraw

    if isinstance(law, TableDraw):
        return sorted(law.numbers)[int(rank * len(law.numbers))]
    return float(draws.values(law, np.array([rank]))[0])


def support_of(node: Any, known: dict[int, Support] | None = None) -> Support:
    """The values that a node can give."""
    known = {} if known is None else known
    if id(node) not in known:
        if not hasattr(node, "term"):
            known[id(node)] = EVERYTHING  # a primary stream
        elif isinstance(node.term, Hidden):
            known[id(node)] = node.inputs[0].term.support_of(node.term.output)
        else:
            known[id(node)] = node.term.support(*(support_of(part, known) for part in node.inputs))
    return known[id(node)]
