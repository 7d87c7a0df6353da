"""The theory of series whose parameters are drawn by path: what holds given the parameters, averaged over their law.

Total expectation and covariance, E x = E m(k) and Cov(x, y) = E c(k) + Cov(m(k), m′(k)), with the mean m and
covariance c given the parameter k from the theory of the spec with k in place. The average over k is Gauss's rule
for its law, doubled until that changes nothing beyond `TOLERANCE`; for several parameters, which are independent, it
is the product of their rules.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import field, replace
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.spec.entries import walk
from procgen.spec.model import Frozen, Series, Shared, Spec
from procgen.spec.records import dataclass
from procgen.spec.varying import varying_of
from procgen.theory.quadrature import exact, rule
from procgen.theory.unknown import Unknown

ROUNDING = 1e-13
TOLERANCE = 1e-9  # of each number, and a thousandth of it of the largest one asked for at once
FEWEST, MOST_POINTS, MOST_NODES = 4, 128, 2048


Answer = Callable[["list[Node]"], Sequence[NDArray]]


@dataclass(frozen=True)
class Node:
    """One set of values of the parameters: its weight, and the theory given them."""

    weight: float
    values: tuple[float, ...]
    theory: Any
    known: dict[Any, Any] = field(default_factory=dict, compare=False)  # its answers, as they were asked for


class Mixture:
    """The theories of some series given their parameters, at the nodes of rules of rising accuracy."""

    def __init__(self, varied: Any, names: Sequence[str], solve: Callable[[Spec], Any]):
        self._varied, self._solve = varied, solve
        self._part = part(varied.spec, names)
        used = parameters_of(self._part)
        self.parameters = {name: p for name, p in varied.parameters.items() if name in used}
        self._laws = [p.varying.law for p in self.parameters.values()]
        self._nodes: dict[tuple[int, ...], list[Node]] = {}
        self._points = tuple([2 * FEWEST] * len(self._laws))

    @property
    def exact(self) -> bool:
        """Whether every parameter has few values, all of which are nodes."""
        return all(map(exact, self._laws))

    @property
    def fewest(self) -> tuple[int, ...]:
        return tuple([FEWEST] * len(self._laws))

    def nodes(self, points: tuple[int, ...] | None = None) -> list[Node]:
        """The theories at every combination of nodes of rules with so many points, one number a parameter."""
        points = points or self.fewest
        if points not in self._nodes:
            rules = [rule(law, n) for law, n in zip(self._laws, points, strict=True)]
            count = int(np.prod([len(x) for x, _ in rules]))
            if count > MOST_NODES:
                raise Unknown(f"the average over {len(rules)} drawn parameters needs more than {MOST_NODES:,} nodes")
            made = []
            for choice in product(*(range(len(x)) for x, _ in rules)):
                values = {name: float(x[i]) for name, (x, _), i in zip(self.parameters, rules, choice, strict=True)}
                weight = float(np.prod([w[i] for (_, w), i in zip(rules, choice, strict=True)]))
                made.append(Node(weight, tuple(values.values()), self._solve(self._varied.at(values, self._part))))
            self._nodes[points] = made
        return self._nodes[points]

    @property
    def rules(self) -> tuple[list[Node], list[Node]]:
        """The theories at the nodes of two rules, which share only those of parameters of few values."""
        return self.nodes(tuple([2 * points for points in self.fewest])), self.nodes()

    def average(self, answer: Answer) -> NDArray:
        """The average of what `answer` gives at each node; see `settled`."""
        return self.settled(answer)[0]

    def settled(self, answer: Answer, room: float = 0.0, why: str = "it may be infinite") -> tuple[NDArray, list[Node]]:
        """The average, and the nodes that it needs: half as many of any one parameter give it too, but for `room`.

        why: what is said where it does not settle.
        """
        points, known = self._points, {}
        k = 0
        while k < len(points):
            if exact(self._laws[k]):
                k += 1
                continue
            coarser = (*points[:k], points[k] // 2, *points[k + 1 :])
            for each in (points, coarser):
                if each not in known:
                    known[each] = self._average(answer, each)
            (now, size), (less, _) = known[points], known[coarser]
            with np.errstate(invalid="ignore"):
                relative = TOLERANCE * (np.abs(now) + 1e-3 * np.max(np.abs(now), initial=0.0))
                good = np.all(np.abs(now - less) <= relative + ROUNDING * size + room)
            if good:
                k += 1
            elif 2 * points[k] > MOST_POINTS:
                name = [*self.parameters][k]
                raise Unknown(f"the average over {name} does not settle with {MOST_POINTS} nodes: {why}")
            else:
                points, k = (*points[:k], 2 * points[k], *points[k + 1 :]), 0
        self._points = points
        if points not in known:
            known[points] = self._average(answer, points)
        return known[points][0], self.nodes(points)

    def _average(self, answer: Answer, points: tuple[int, ...]) -> tuple[NDArray, float]:
        """The weighted sum of an answer, and the size of what is summed."""
        nodes = self.nodes(points)
        values = answer(nodes)
        return sum_of(nodes, values), float(np.max(sum_of(nodes, [np.abs(v) for v in values]), initial=0.0))


def part(spec: Spec, names: Iterable[str]) -> Spec:
    """A spec of some of its series only, and of what they use."""
    bodies: dict[str, Series | Shared] = {**spec.shared, **spec.series}
    wanted, left = set(), list(names)
    while left:
        owner = left.pop()
        if owner not in wanted:
            wanted.add(owner)
            uses = [entry for entry, _ in walk(bodies[owner].of) if entry.kind == "use"]
            left += [entry.values["name"].partition(".")[0] for entry in uses]
        if not left:  # what the correlations of two of them follow
            kept = spec.correlation.among(lambda name: name.partition(".")[0] in wanted)
            left = [by for f in kept.following if (by := f.by.partition(".")[0]) not in wanted]
    return replace(
        spec,
        series=Frozen({name: one for name, one in spec.series.items() if name in wanted}),
        shared=Frozen({name: one for name, one in spec.shared.items() if name in wanted}),
        correlation=spec.correlation.among(lambda name: name.partition(".")[0] in wanted),
    )


def parameters_of(spec: Spec) -> set[str]:
    """The names of the drawn parameters that stand somewhere in a spec."""
    return {varying.key(owner) for owner, varying in varying_of(spec)}


def sum_of(nodes: Sequence[Node], values: Sequence[NDArray]) -> NDArray:
    """Σ weight · value over the nodes."""
    total = np.zeros(np.shape(values[0]))
    for node, value in zip(nodes, values, strict=True):
        total = total + node.weight * value
    return total
