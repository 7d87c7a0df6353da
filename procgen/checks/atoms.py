"""Which series may stay at one value by themselves, so that two of their paths may be equal by chance."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np

from procgen.checks.probes import probe_steps
from procgen.terms.graph import Source
from procgen.terms.supports import support_of

# Kinds that can hold a value where it is, or switch off what moves it.
_HOLDING = frozenset({"clip", "hinge", "min", "max", "flag", "chain", "regimes", "switching_noise"})
_RESTING = frozenset({"intermittent", "zero_inflated", "compound_poisson"})  # kinds whose draws show now and then
_OF_FEW = _RESTING | {"chain", "moving_blocks"}  # beside those on a lattice, and those with values of their own
_CHOOSING = frozenset({"regimes", "schedule", "product"})  # kinds of which one part alone may be all that is seen
_FAR = 7.0  # standard deviations that a body without a law may be off its mean


def flattened(theory: Any, name: str, steps: int) -> frozenset[str]:
    """The keys of the nodes of a series whose bodies go where double precision has one value for all of them.

    As exponentials do that are smaller than it can tell, and sigmoids that are nearer to a level.
    """
    from procgen.theory.laws import LOST

    found = set()
    for node in theory.graph.order([theory.graph.series[name]]):
        least, most = node.term.told if hasattr(node, "term") else (-math.inf, math.inf)
        if (least, most) != (-math.inf, math.inf) and _beyond(theory, node.inputs[0], least, most, steps) > LOST:
            found.add(node.key)
    return frozenset(found)


def _beyond(theory: Any, node: Any, least: float, most: float, steps: int) -> float:
    """The chance that a node is beyond two numbers at some probe, by its law where that is known."""
    from procgen.theory.series import SeriesTheory

    body, at = SeriesTheory(node.key, theory.written[id(node)]), np.array(probe_steps(steps))
    mean, variance = body.mean(at), body.variance(at)
    if mean is None or variance is None:
        return 0.0
    with np.errstate(invalid="ignore"):
        reach = _FAR * np.sqrt(np.maximum(variance, 0.0))
        worst = np.argmax(np.maximum(mean + reach - most, least - mean + reach))
        far = bool(np.any((mean - reach < least) | (mean + reach > most)))
    law = body.marginal(int(at[worst])) if far else None
    return float(far) if law is None else float(law.cdf(least) + law.sf(most))


def known_within(theory: Any, name: str, steps: int) -> float:
    """The largest of the known numbers that a series without chance is made of: the rounding of those is in it, too."""
    if theory[name].random:
        return 0.0
    at = np.array(probe_steps(steps))
    nodes = theory.graph.order([theory.graph.series[name]])
    found = [np.max(np.abs(theory.written[id(node)].mean(at))) for node in nodes if id(node) in theory.written]
    return float(max(found, default=0.0))


def may_stay(theory: Any, graph: Any, name: str, flat: frozenset[str] = frozenset()) -> bool:
    """Whether some term may hold the values of a series, and no chance is simply added to it that would part them.

    `flat`: the nodes that are `flattened`.
    """
    from procgen.theory.sources import OPAQUE, PROCESS

    nodes = [node for node in graph.order([graph.series[name]]) if getattr(node, "term", None)]
    kinds = {node.term.kind for node in nodes}
    drawing = {node.term.kind for node in nodes if any(isinstance(part, Source) for part in node.inputs)}
    if drawing and drawing <= _RESTING:
        return True
    if not (kinds & _HOLDING or flat):
        return False
    sources = theory.expression.linear.sources
    made = (PROCESS, OPAQUE)  # of others, in some way
    bent = {inner.key for source in theory.expression.sources if source.kind in made for inner in _inside(source)}
    return all(source.kind in made or source.key in bent for source in sources)


def made_of_few(graph: Any, name: str) -> bool:
    """Whether all that chance brings to a path of a series may be few values, so that another path may be the same."""
    return _made_of_few(graph, graph.series[name])


def _made_of_few(graph: Any, node: Any) -> bool:
    if isinstance(node, Source):
        return node.law.points is not None
    if not any(isinstance(part, Source) for part in graph.order([node])):
        return True
    if node.term.kind in _OF_FEW or node.term.piles or support_of(node).step:
        return True
    parts = [_made_of_few(graph, part) for part in node.inputs]
    return any(parts) if node.term.kind in _CHOOSING else all(parts)


def few_shocks(theory: Any) -> Any | None:
    """The values and chances of the shocks of a series that is linear in one kind of them, where these are few."""
    from procgen.theory.sources import IID

    sources = list(theory.expression.sources)
    one = len(sources) == 1 and sources[0].kind == IID and not theory.expression.terms
    return sources[0].law.points if one else None


def _inside(process: Any) -> Iterator[Any]:
    """The sources that a process is made of."""
    for ingredient in getattr(process.detail, "ingredients", process.detail):
        yield from getattr(ingredient, "sources", ())
