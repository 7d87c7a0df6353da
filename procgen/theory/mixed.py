"""Theories of specs whose parameters are drawn by path, and of pairs of their series."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.spec.model import Spec
from procgen.theory.mixedseries import MixedSeries
from procgen.theory.series import CrossTheory, SeriesTheory, _steps
from procgen.theory.unknown import Unknown
from procgen.theory.varied import Mixture, Node, parameters_of, part, sum_of
from procgen.theory.whole import Theory, theory


class MixedTheory(Theory):
    """The theory of a spec with parameters drawn by path; `series` that have none are as they are."""

    def __init__(self, typical: Theory, varied: Any):
        super().__init__(dict(typical.series), typical.names, typical.axis, typical.graph, typical.written)
        self._typical, self._varied = typical, varied
        self._used = {name: parameters_of(part(varied.spec, (name,))) for name in typical.series}
        self._mixtures: dict[tuple[str, ...], Mixture] = {}
        for name, used in self._used.items():
            if used:
                self.series[name] = MixedSeries(name, typical.series[name], self._mixture(name))

    def _mixture(self, *names: str) -> Mixture:
        if names not in self._mixtures:
            self._mixtures[names] = Mixture(self._varied, names, _given)
        return self._mixtures[names]

    def cross(self, first: str, second: str) -> CrossTheory:
        if not self._used[first] and not self._used[second]:
            return super().cross(first, second)
        if not self._go_together(first, second):
            return Independent(self[first], self[second])
        joint = self._typical.cross(first, second).gaussian
        return MixedCross(self[first], self[second], self._mixture(first, second), joint)

    def _go_together(self, a: str, b: str) -> bool:
        return bool(self._used[a] & self._used[b]) or self._typical._go_together(a, b)


def mixed(graph: Any) -> Theory:
    """The theory of a spec with parameters drawn by path, from the graph that `build` made of it."""
    return MixedTheory(theory(graph.spec, graph), graph.varied)


def _given(spec: Spec) -> Theory:
    """The theory of a spec with its parameters in place."""
    from procgen.terms.graph import Graph

    return theory(spec, Graph(spec))


class Independent(CrossTheory):
    """Two series that have neither chance nor drawn parameters in common."""

    @property
    def gaussian(self) -> bool:
        return self.first.gaussian and self.second.gaussian

    def covariance(self, t, s):
        return np.zeros(np.broadcast_shapes(_steps(t).shape, _steps(s).shape))


class MixedCross(CrossTheory):
    """Exact covariances between two series that have parameters drawn by path."""

    def __init__(self, first: SeriesTheory, second: SeriesTheory, mixture: Mixture, joint: bool):
        super().__init__(first, second)
        self.mixture, self._joint = mixture, joint

    @property
    def gaussian(self) -> bool:
        return self.first.gaussian and self.second.gaussian and self._joint

    def covariance(self, t, s):
        t, s = np.broadcast_arrays(_steps(t), _steps(s))
        try:
            value = self.mixture.average(lambda nodes: self._given(nodes, t, s))
            self._reason = None
            return value
        except Unknown as unknown:
            self._reason = unknown.reason
            return None

    def _given(self, nodes: list[Node], t: NDArray, s: NDArray) -> list[NDArray]:
        means, within = [], []
        for node in nodes:
            x, y = node.theory[self.first.name].mean(t), node.theory[self.second.name].mean(s)
            cross = node.theory.cross(self.first.name, self.second.name)
            c = cross.covariance(t, s)
            if x is None or y is None or c is None:
                raise Unknown(cross.reason() or "a mean is not known given the parameters")
            means.append((x, y))
            within.append(c)
        a, b = (sum_of(nodes, [pair[i] for pair in means]) for i in (0, 1))
        return [c + (x - a) * (y - b) for c, (x, y) in zip(within, means, strict=True)]
