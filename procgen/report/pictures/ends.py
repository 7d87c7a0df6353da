"""The least and the greatest value that a series can have, where its terms say so: no band reaches beyond them."""

from __future__ import annotations

import math
from typing import Any

Ends = tuple[float, float]

FREE: Ends = (-math.inf, math.inf)
POSITIVE: Ends = (0.0, math.inf)
_POSITIVE = ("poisson", "negative_binomial", "inar", "intermittent", "chain", "abs", "hinge", "exp")
_OUTPUTS = ("variance", "regime", "occurs", "jumps", "intensity")  # hidden ones that are no less than 0


def ends(node: Any) -> Ends:
    """Ends of the values of a node of a graph; infinite where there are none, or none are known."""
    term = getattr(node, "term", None)
    if term is None:
        return FREE
    inside = [ends(inner) for inner in node.inputs]
    if not term.kind:
        if term.values.get("output") in _OUTPUTS:
            return POSITIVE
        return _times(term.values.get("factor"), inside[0]) if inside else FREE
    if term.kind in _POSITIVE:
        return POSITIVE
    if term.kind == "flag":
        return 0.0, 1.0
    if term.kind == "constant" and isinstance(term.level, int | float):
        return float(term.level), float(term.level)
    if term.kind == "compound_poisson" and not term.law.gaussian:
        least = term.mean + term.sd * float(term.law.distribution().ppf(0.0))
        return POSITIVE if least >= 0.0 else FREE
    if term.kind == "zero_inflated" and inside:
        return min(0.0, inside[0][0]), max(0.0, inside[0][1])
    if term.kind == "sum" and inside:
        return sum(low for low, _ in inside), sum(high for _, high in inside)
    return FREE


def _times(factor: Any, inner: Ends) -> Ends:
    if not isinstance(factor, int | float) or not factor:
        return FREE
    low, high = sorted(factor * end for end in inner)
    return low, high
