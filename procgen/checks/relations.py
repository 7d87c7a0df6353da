"""Combinations of series that are judged like series: gaps between those that wander together, sums of the steady.

A gap is a stated relation of a vector error correction whose components are series, or what is left of two series that
share a wandering part by `use`. The sum of two steady series, each in its own standard deviations, shows in its memory
which of them leads and by how many steps, where no shocks of both can be compared. The theory of a combination is that
of its series, its values are formed from the data.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import replace
from itertools import chain, combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import BLOCK, scratch
from procgen.checks.pools import Pool, PoolLane
from procgen.checks.probes import SeriesPlan, plan_series
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check
from procgen.checks.words import GAP, TOGETHER
from procgen.spec.records import dataclass
from procgen.terms.base import Node, signed
from procgen.terms.combine import Hidden, Scaled, Sum
from procgen.terms.recover import sources_below
from procgen.terms.vector import VectorErrorCorrection
from procgen.theory import SeriesTheory
from procgen.theory.verdict import GROWS

MOST = 12  # combinations that are looked at
_LEADS = 12  # steps by which one series may lead another
_FELT = 1e-6  # a correlation that is more than rounding


@dataclass
class Relation:
    """One combination: the weight of each series, its plan as if it were a series, and whether it is a gap."""

    weights: dict[str, float]
    plan: SeriesPlan
    gap: bool = True

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
        """The combination from tiles (steps, paths) of all series, in memory that the next one takes again."""
        (name, first), *others = self.weights.items()
        steps, paths = tiles[name].shape
        total, part = scratch(steps, paths, 2), scratch(steps, paths, 3)
        np.multiply(first, tiles[name], out=total)
        for name, weight in others:
            total += np.multiply(weight, tiles[name], out=part)
        return total

    def checks(self, powers: Powers) -> Iterator[Check]:
        """Its averages along paths: level, spread and memory."""
        from procgen.checks.judge_pools import averages

        for row in averages(self.plan, powers):
            note = "; ".join(filter(None, (f"the {'gap' if self.gap else 'sum'} is {self}", row.note)))
            kind = row.kind if self.gap or row.kind == "level" else "dependence"
            end = GAP if self.gap else TOGETHER
            yield replace(row, series=self.name, what=row.what + end, note=note, kind=kind)


def plan_relations(
    graph: Any, theory: Any, steps: int, grains: Mapping[str, float], apart: Iterable[tuple[str, str]] = ()
) -> list[Relation]:
    """The gaps of a spec whose theory is known and steady, and the sums of pairs of steady series that depend.

    `apart`: pairs of series whose shocks cannot be compared. Series that do not wander themselves have no gap.
    """
    found: list[Relation] = []
    gaps = ((weights, True) for weights in _candidates(graph))
    sds: dict[str, float | None] = {}
    sums = ((weights, False) for pair in apart if (weights := _together(theory, *pair, steps, sds)) is not None)
    for weights, gap in chain(gaps, sums):  # of many pairs most are never asked for
        if len(found) == MOST:
            break
        combined = _combined(theory, weights)
        if combined is None or (gap and not _is_gap(theory, weights, combined)):
            continue
        grain = float(np.sqrt(sum((w * grains[name]) ** 2 for name, w in weights.items())))
        plan = plan_series(" ~ ".join(weights), combined, steps, grain, (), blind=True)
        if plan.pool is not None and not plan.pool.coarse:
            found.append(Relation(weights, plan, gap))
    return found


def _combined(theory: Any, weights: Mapping[str, float]) -> SeriesTheory | None:
    """The theory of a combination, where that of its series is known by itself."""
    members = [theory[name] for name in weights]
    if not all(type(x) is SeriesTheory for x in members):
        return None
    total, *others = [x.expression * weight for x, weight in zip(members, weights.values(), strict=True)]
    for part in others:
        total = total + part
    return SeriesTheory(" ~ ".join(weights), total) if total.sources else None


def _is_gap(theory: Any, weights: Mapping[str, float], combined: SeriesTheory) -> bool:
    """Whether series wander and their combination does not."""
    members = [theory[name].stationarity.verdict == GROWS for name in weights]
    return all(members) and combined.stationarity.verdict != GROWS


def _together(theory: Any, a: str, b: str, steps: int, sds: dict[str, float | None]) -> dict[str, float] | None:
    """Weights by which two steady series have a variance of 1 each, where some steps of both depend on each other.

    `sds`: those of series that have been asked for.
    """
    for name in (a, b):
        if name not in sds:
            sds[name] = _steady_sd(theory[name])
    one, other = sds[a], sds[b]
    if one is None or other is None:
        return None
    reach = min(_LEADS, steps - 1)
    at = np.concatenate([np.arange(reach + 1), np.zeros(reach, np.int64)])
    known = theory.cross(a, b).covariance(at, at[::-1])
    if known is None or not np.isfinite(known).all() or np.max(np.abs(known)) <= _FELT * one * other:
        return None
    return {a: 1.0 / one, b: 1.0 / other}


def _steady_sd(series: Any) -> float | None:
    """The standard deviation of a steady series, where it is known by itself."""
    if type(series) is not SeriesTheory or not series.stationarity.covariance_stationary:
        return None
    variance = series.variance(0)
    return None if variance is None or not np.isfinite(variance).all() else float(np.sqrt(float(variance)))


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
        """Add tiles (steps, paths) of all series, which begin at a multiple of 64 steps."""
        relation, pool = self.relation, self.pool
        names, steps = list(relation.weights), len(next(iter(tiles.values())))
        x, y = (np.ascontiguousarray(tiles[name]) for name in (names[0], names[-1]))
        weights = [float(w) for w in relation.weights.values()]
        if len(names) == 2 and pool.absorb_sum(x, y, weights, step):
            begin = max(pool.pool.first - step, 0) // BLOCK * BLOCK  # the combination itself is wanted at the end only
            if begin < steps:
                pool.window_of(relation.values({name: tiles[name][begin:] for name in relation.weights}), step + begin)
            return
        pool.absorb(relation.values(tiles), step)
