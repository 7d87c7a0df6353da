"""Which series may stay at one value by themselves, so that two of their paths may be equal by chance."""

from __future__ import annotations

from typing import Any

# Kinds that can hold a value where it is, or switch off what moves it.
_HOLDING = frozenset({"clip", "hinge", "min", "max", "flag", "chain", "regimes", "switching_noise"})


def may_stay(theory: Any, graph: Any, name: str) -> bool:
    """Whether some term may hold the values of a series, and no chance is simply added to it that would part them."""
    from procgen.theory.sources import PROCESS

    kinds = {node.term.kind for node in graph.order([graph.series[name]]) if getattr(node, "term", None)}
    if not kinds & _HOLDING:
        return False
    return all(source.kind == PROCESS for source in theory.expression.linear.sources)
