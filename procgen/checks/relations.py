"""Gaps between series that wander together: combinations of them that theory calls steady, judged like series.

A gap is a stated relation of a vector error correction whose components are series, or what is left of two series that
share a wandering part by `use`. Its theory is that of the combination, its values are formed from the data.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.pools import Pool, PoolLane
from procgen.checks.probes import SeriesPlan, plan_series
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check
from procgen.checks.words import GAP
from procgen.terms.base import Node, signed
from procgen.terms.combine import Hidden, Scaled, Sum
from procgen.terms.recover import sources_below
from procgen.terms.vector import VectorErrorCorrection
from procgen.theory import SeriesTheory
from procgen.theory.verdict import GROWS

MOST = 12  # gaps that are looked at


@dataclass
class Relation:
    """One gap: the weight of each series, and its plan as if it were a series."""

    weights: dict[str, float]
    plan: SeriesPlan

    @property
    def pool(self) -> Pool:
        assert self.plan.pool is not None
        return self.plan.pool

    @property
    def name(self) -> str:
        return " ~ ".join(self.weights)

    def __str__(self) -> str:
        """Such as `a − 0.5 b`."""
        return " ".join(signed(w, name) for name, w in self.weights.items()).removeprefix("+ ")

    def values(self, tiles: Mapping[str, NDArray]) -> NDArray:
        """The gap from tiles (steps, paths) of all series."""
        total: Any = 0.0
        for name, weight in self.weights.items():
            total = total + weight * tiles[name]
        return total

    def checks(self, powers: Powers) -> Iterator[Check]:
        """Its averages along paths: level, spread and memory."""
        from procgen.checks.judge_pools import averages

        for row in averages(self.plan, powers):
            note = "; ".join(filter(None, (f"the gap is {self}", row.note)))
            yield replace(row, series=self.name, what=row.what + GAP, note=note)


def plan_relations(graph: Any, theory: Any, steps: int, grains: Mapping[str, float]) -> list[Relation]:
    """The gaps of a spec whose theory is known and steady; series that do not wander themselves have none."""
    found: list[Relation] = []
    for weights in _candidates(graph):
        if len(found) == MOST:
            break
        combined = _combined(theory, weights)
        if combined is None:
            continue
        grain = float(np.sqrt(sum((w * grains[name]) ** 2 for name, w in weights.items())))
        plan = plan_series(" ~ ".join(weights), combined, steps, grain, (), blind=True)
        if plan.pool is not None and not plan.pool.coarse:
            found.append(Relation(weights, plan))
    return found


def _combined(theory: Any, weights: Mapping[str, float]) -> SeriesTheory | None:
    """The theory of a combination, where its series wander and it does not."""
    members = [theory[name] for name in weights]
    if not all(type(x) is SeriesTheory and x.stationarity.verdict == GROWS for x in members):
        return None
    total, *others = [x.expression * weight for x, weight in zip(members, weights.values(), strict=True)]
    for part in others:
        total = total + part
    gap = SeriesTheory(" ~ ".join(weights), total)
    return gap if gap.expression.sources and gap.stationarity.verdict != GROWS else None


def _candidates(graph: Any) -> Iterator[dict[str, float]]:
    """Weights by series: of stated relations, and of pairs with a part in common."""
    parts = {name: list(_parts(node)) for name, node in graph.series.items()}
    parts = {name: [part for part in of if sources_below(graph, part[0])] for name, of in parts.items()}
    yield from _stated(parts)
    for (a, of_a), (b, of_b) in combinations(parts.items(), 2):
        for node, factor in of_a:
            shared = [times for other, times in of_b if other is node and times]
            if shared and factor:
                yield {a: 1.0, b: -factor / shared[0]}


def _stated(parts: Mapping[str, list[tuple[Node, float]]]) -> Iterator[dict[str, float]]:
    """Relations of error corrections, all of whose components are series but for a known part and a factor."""
    systems: dict[int, tuple[Any, dict[str, tuple[str, float]]]] = {}
    for name, of in parts.items():
        if len(of) == 1 and isinstance(of[0][0].term, Hidden):
            node, factor = of[0]
            system, output = node.inputs[0], node.term.output
            if isinstance(getattr(system, "term", None), VectorErrorCorrection) and factor:
                systems.setdefault(id(system), (system.term, {}))[1].setdefault(output, (name, factor))
    for term, series in systems.values():
        for row in term.relations:
            members = [(component, w) for component, w in zip(term.names, row, strict=True) if w]
            if all(component in series for component, _ in members):
                yield {series[component][0]: w / series[component][1] for component, w in members}


def _parts(node: Any, factor: float = 1.0) -> Iterator[tuple[Any, float]]:
    """What a node adds up, each with its factor."""
    term = getattr(node, "term", None)
    if isinstance(term, Sum):
        for part in node.inputs:
            yield from _parts(part, factor)
    elif isinstance(term, Scaled):
        yield from _parts(node.inputs[0], factor * term.factor)
    else:
        yield node, factor


class RelationLane:
    """The sums of one relation over one range of paths."""

    def __init__(self, relation: Relation, paths: int):
        self.relation, self.pool = relation, PoolLane(relation.pool, paths)

    def absorb(self, tiles: Mapping[str, NDArray], step: int) -> None:
        self.pool.absorb(self.relation.values(tiles), step)
