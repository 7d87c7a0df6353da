"""Which series may stay at one value by themselves, so that two of their paths may be equal by chance."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

# Kinds that can hold a value where it is, or switch off what moves it.
_HOLDING = frozenset({"clip", "hinge", "min", "max", "flag", "chain", "regimes", "switching_noise"})


def may_stay(theory: Any, graph: Any, name: str) -> bool:
    """Whether some term may hold the values of a series, and no chance is simply added to it that would part them."""
    from procgen.theory.sources import PROCESS

    kinds = {node.term.kind for node in graph.order([graph.series[name]]) if getattr(node, "term", None)}
    if not kinds & _HOLDING:
        return False
    sources = theory.expression.linear.sources
    bent = {inner.key for source in theory.expression.sources if source.kind == PROCESS for inner in _inside(source)}
    return all(source.kind == PROCESS or source.key in bent for source in sources)


def few_shocks(theory: Any) -> Any | None:
    """The values and chances of the shocks of a series that is linear in one kind of them, where these are few."""
    from procgen.theory.sources import IID

    sources = list(theory.expression.sources)
    one = len(sources) == 1 and sources[0].kind == IID and not theory.expression.terms
    return sources[0].law.points if one else None


def _inside(process: Any) -> Iterator[Any]:
    """The sources that a process is made of."""
    for ingredient in process.detail.ingredients:
        yield from getattr(ingredient, "sources", ())
