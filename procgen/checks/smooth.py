"""Whether chance keeps the values of a series off every grid, so that values on one tell of what was done to them.

Rounded numbers, counts, flags and states lie on a grid, and so do their sums, products, differences and largest ones:
all of them may fit in float16 as they are. Of a series that may be such, nothing is said about its precision. The
answer is no wherever a yes is not certain.
"""

from __future__ import annotations

from collections.abc import Container
from typing import Any


def smooth(graph: Any, name: str, steps: int, flat: Container[str] = ()) -> bool:
    """Whether no value of a series has a chance of its own, and none lies on a grid, by its terms; for `steps` steps.

    `flat`: the keys of nodes that double precision gives one value where they have many (`atoms.flattened`). A lag of
    more than half of the steps may show little but what a walk was before it began.
    """
    root = graph.series[name]
    lags = sum(node.term.by for node in graph.order([root]) if _kind(node) == "lag")
    return 2 * lags <= steps and _off_grids(graph, root, flat)


def _kind(node: Any) -> str | None:
    """The kind of a node; None of a source."""
    return node.term.kind if hasattr(node, "term") else None


def _way(node: Any) -> str:
    """How the term of a node keeps its values off every grid; what a graph puts between terms is a filter."""
    return node.term.smooth if node.term.kind else "filter"


def _off_grids(graph: Any, node: Any, flat: Container[str]) -> bool:
    kind = _kind(node)
    if kind is None:
        return node.law.points is None
    if not _way(node) or node.key in flat or not _sources(graph, node):
        return False
    if hasattr(node.term, "output"):  # a hidden one, such as the number of jumps
        return False
    if 0.0 in (getattr(node.term, "exponent", 1.0), getattr(node.term, "factor", 1.0)):
        return False
    if kind == "sum":
        return _sum(graph, node, flat)
    if kind == "difference" and not _filtered(graph, node):
        return False
    moving = [part for part in node.inputs if _sources(graph, part)]
    still = [part for part in node.inputs if not _sources(graph, part)]
    if kind == "product":
        return not any(_meets_zero(part) for part in still) and _apart(graph, moving) and _all(graph, moving, flat)
    return not still and _all(graph, moving, flat)


def _sum(graph: Any, node: Any, flat: Container[str]) -> bool:
    """Parts that have no shock in common need but one that is off grids; filters of the same shocks, all of them."""
    moving = [part for part in node.inputs if _sources(graph, part)]
    if _apart(graph, moving):
        return any(_off_grids(graph, part, flat) for part in moving)
    return _filtered(graph, node) and _all(graph, moving, flat)


def _all(graph: Any, nodes: list[Any], flat: Container[str]) -> bool:
    return all(_off_grids(graph, node, flat) for node in nodes)


def _sources(graph: Any, node: Any) -> set[int]:
    """The streams that chance enters a node by."""
    return {id(part) for part in graph.order([node]) if _kind(part) is None}


def _apart(graph: Any, nodes: list[Any]) -> bool:
    """Whether no two nodes read the same stream."""
    each = [_sources(graph, node) for node in nodes]
    return sum(map(len, each)) == len(set().union(*each))


def _filtered(graph: Any, node: Any) -> bool:
    """Whether all that chance moves in a node is made by filters."""
    return all(_way(part) == "filter" for part in graph.order([node]) if _kind(part) and _sources(graph, part))


def _meets_zero(node: Any) -> bool:
    """Whether a part without chance may be 0, as far as its terms say."""
    from procgen.terms.supports import support_of

    found = support_of(node)
    return bool(found.low <= 0.0 <= found.high)
