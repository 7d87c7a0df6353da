"""The theory of a whole spec: its series, their pairs, and the correlations that lie behind them."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import field
from functools import cached_property
from itertools import combinations, islice
from typing import Any

import numpy as np

from procgen.spec.records import dataclass
from procgen.spec.words import did_you_mean
from procgen.terms.supports import support_of
from procgen.theory.axis import Axis
from procgen.theory.doubles import rounding_of
from procgen.theory.expression import Expression, opaque
from procgen.theory.series import FREQUENCIES, HORIZONS, CrossTheory, SeriesTheory, plain
from procgen.theory.sources import GARCH, Source
from procgen.theory.ties import NormalTie, StateTie, StudentTie, Tie
from procgen.theory.unknown import Unknown

TAIL = 0.01  # the share in which joint tails are told


@dataclass(frozen=True)
class Correlated:
    """One correlated pair: of its primary normals, and of its values where that is exact (else None and why).

    `copula` says what ties it where that is not the normal copula.
    """

    leader: str
    follower: str
    normals: float
    values: float | None
    tolerance: float | None = None
    reason: str | None = None
    copula: str = ""
    tie: Tie | None = None

    def joint_tail(self, share: float = TAIL) -> float:
        """How often the follower's shock is in its lowest `share`, of the times when the leader's is there."""
        return (self.tie or NormalTie(self.normals)).joint_tail(share) / share

    def as_dict(self) -> dict[str, Any]:
        """What `procgen theory --json` prints of it."""
        told = {"leader": self.leader, "follower": self.follower, "normals": self.normals, "values": self.values}
        told |= {"tolerance": self.tolerance} if self.reason is None else {"reason": self.reason}
        if self.tie is None:
            return told
        tails = {"share": TAIL, "chance": self.joint_tail(), "normal": NormalTie(self.normals).joint_tail(TAIL) / TAIL}
        return told | {"copula": self.copula, "joint_tail": tails}


@dataclass
class Theory(Mapping[str, SeriesTheory]):
    """The theory of every series of a spec, and of their pairs."""

    series: dict[str, SeriesTheory]
    names: tuple[str, ...] = ()  # of `correlation`, the leader first
    axis: Axis = field(default_factory=Axis)
    graph: Any = None  # of the terms that it is the theory of
    written: Mapping[int, Expression] = field(default_factory=dict)  # what each of its nodes wrote, by identity

    def __getitem__(self, name: str) -> SeriesTheory:
        if name not in self.series:
            hint = did_you_mean(name, self.series)
            raise KeyError(f"expected one of the series {', '.join(self.series)}, got {name!r}{hint and f'; {hint}'}")
        return self.series[name]

    def __iter__(self):
        return iter(self.series)

    def __len__(self) -> int:
        return len(self.series)

    def __repr__(self) -> str:
        return f"<Theory of {', '.join(self.series)}>"

    def cross(self, first: str, second: str) -> CrossTheory:
        """Covariances between two series."""
        return CrossTheory(self[first], self[second])

    @cached_property
    def correlated(self) -> tuple[Correlated, ...]:
        """Every correlated pair of terms, the one that leads (first in `correlation`) first."""
        known = self.axis.space.sources
        sources = [known.get(f"{name} switching", known[name]) for name in self.names if name in known]
        return tuple(self._correlated(a, b) for a, b in combinations(sources, 2) if self.axis.space.dependent(a, b))

    def _correlated(self, a: Source, b: Source) -> Correlated:
        names = ((a.owner or a).key, (b.owner or b).key)
        normals, tie = self.axis.space.normal_correlation(a, b), self.axis.space.tie(a, b)
        copula = "" if tie is None else str(tie)
        try:
            covariance = self.axis.space.covariance(a, b) if GARCH in (a.kind, b.kind) else None
            value, tolerance = self.axis.space.law_correlation(a, b)
        except Unknown as unknown:
            return Correlated(*names, normals, None, reason=unknown.reason, copula=copula, tie=tie)
        if covariance is not None:
            value = covariance / float(np.sqrt(a.variance * b.variance))
        return Correlated(*names, normals, value, tolerance, None, copula, tie)

    def as_dict(
        self,
        at: Sequence[int],
        lags: int | Sequence[int] = 40,
        frequencies: Sequence[float] = FREQUENCIES,
        horizons: Sequence[int] = HORIZONS,
        pairs: int | None = None,
    ) -> dict[str, Any]:
        """What `procgen theory --json` prints; of series that go together so many pairs at most, all where None."""
        series = {name: theory.as_dict(at, lags, frequencies, horizons) for name, theory in self.series.items()}
        for name, told in series.items():
            told.update(self._missing(name))
            told.update(self._left(name))
            told.update(self._unfelt(name))
            told.update(self._rounded(name))
        found = (self._cross_entry(a, b, at) for a, b in combinations(self.series, 2))
        cross = list(islice(filter(None, found), pairs))
        return {"series": series, "cross": cross, "correlation": [pair.as_dict() for pair in self.correlated]}

    def _missing(self, name: str) -> dict[str, Any]:
        """How many of the values of a series are missing, and how many in a row; nothing where none are."""
        from procgen.terms.misfits import gaps_of

        found = None if self.graph is None else gaps_of(self.graph.series.get(name))
        if found is None:
            return {}
        gap = found.term.gap or 1.0 / (1.0 - found.term.share)
        return {"missing": {"share": found.term.share, "gap": gap}}

    def _unfelt(self, name: str) -> dict[str, Any]:
        """What is stated for a time that is not among the steps; nothing where all is felt."""
        nodes = [] if self.graph is None else self.graph.order([self.graph.series[name]])
        steps = self.graph.spec.time.steps if nodes else 0
        found = [
            f"{node.name} {text}"
            for node in nodes
            if hasattr(node, "term")
            for text in node.term.unfelt(steps * node.pace)
        ]
        return {"unfelt": found} if found else {}

    def _rounded(self, name: str) -> dict[str, Any]:
        """What double precision does to the values of a series; nothing where it does not show."""
        found = None if self.graph is None else rounding_of(self, name, self.graph.spec.time.steps)
        return {} if found is None else {"rounding": {"cell": found.cell, "share": found.share, "text": str(found)}}

    def _left(self, name: str) -> dict[str, Any]:
        """The recorded past that a series leaves from, and what could not be conditioned on it; nothing without one."""
        left = None if self.graph is None else self.graph.left.get(name)
        if left is None:
            return {}
        past = {"values": left.count, "last": left.last, "unconditioned": list(left.unconditioned)}
        return {"past": past | ({"replaced": list(left.replaced)} if left.replaced else {})}

    def _go_together(self, a: str, b: str) -> bool:
        """Whether something random is behind both series, or correlated."""
        left, right = (self.series[name].expression.sources for name in (a, b))
        return self.axis.space.linked(left, right)

    def _cross_entry(self, a: str, b: str, at: Sequence[int]) -> dict[str, Any] | None:
        steps = np.asarray(at, np.int64)
        if not self._go_together(a, b):
            return None
        cross = self.cross(a, b)
        covariance = plain(cross.covariance(steps, steps))
        entry = {"series": [a, b], "steps": steps.tolist(), "covariance": covariance}
        if covariance is None:
            return entry | {"reason": cross.reason()}
        return entry | {"correlation": plain(cross.correlation(steps, steps))}


def theory(spec: Any, graph: Any = None) -> Theory:
    """The exact theory of a checked spec.

    Parameters
    ----------
    spec : Spec, or what `procgen.load` takes: the path of a YAML file, or a mapping in the spec language
    graph : the graph of its terms; built when not given

    Each term writes its moments on one axis; a term without closed moments counts as unknown, with the reason.
    """
    if graph is None:
        from procgen.terms.given import spec_of
        from procgen.terms.graph import build

        spec = spec_of(spec)
        graph = build(spec)
    if graph.varied is not None and graph.varied.parameters and spec is not graph.spec:
        from procgen.theory.mixed import mixed

        return mixed(graph)
    names, matrix = spec.correlation.names, spec.correlation.matrix
    correlation = {
        frozenset((names[i], names[j])): float(matrix[i][j])
        for i in range(len(names))
        for j in range(i)
        if matrix[i][j]
    }
    ties = dict(_ties(graph))
    correlation |= {pair: tie.rho for pair, tie in ties.items() if isinstance(tie, StateTie) and tie.rho}
    axis = Axis(spec.time.steps * graph.pace, correlation)
    axis.space.ties = ties
    memo: dict[int, Expression] = {}
    series = {}
    for name in spec.series:
        series[name] = SeriesTheory(name, _moments(axis, graph.series[name], memo), _recorded(graph, name))
    return Theory(series, tuple(names), axis, graph, memo)


def _recorded(graph: Any, name: str) -> bool:
    """Whether a series leaves from a recorded past: its own, that of a term, or that of a series that it uses."""
    nodes = [node for node in graph.order([graph.series[name]]) if hasattr(node, "term")]
    before = any(node.term.values.get("before") is not None for node in nodes)
    return before or any(node.name.partition(".")[0] in graph.left for node in nodes)


def _ties(graph: Any) -> Iterator[tuple[frozenset[str], Tie]]:
    """What ties the pairs of each group that is not jointly normal."""
    from procgen.terms.recover import sources_below
    from procgen.terms.regimes import chain_of, states_of

    for group in graph.groups:
        if group.gaussian:
            continue
        for (i, a), (j, b) in combinations(enumerate(group.sources), 2):
            rhos = [float(matrix[i, j]) for matrix in group.matrices]
            each = tuple([NormalTie(rho) if group.df is None else StudentTie(group.df, rho) for rho in rhos])
            tie: Tie = each[0]
            if group.by is not None and len(set(rhos)) > 1:
                behind = frozenset(source.name for source in sources_below(graph, group.by))
                tie = StateTie(group.by.name, states_of(group.by), each, chain_of(group.by), behind)
            if not isinstance(tie, NormalTie):  # which is what a pair is that no state moves
                yield frozenset((a.name, b.name)), tie


def _moments(axis: Axis, node: Any, memo: dict[int, Expression]) -> Any:
    if not hasattr(node, "term"):
        return None  # a primary stream: the term that draws from it writes the source
    if id(node) not in memo:
        inputs = [x for part in node.inputs if (x := _moments(axis, part, memo)) is not None]
        support = support_of(node)
        bounded = -np.inf < support.low and support.high < np.inf
        axis.at_work(node.name, node.term.values.get("period"), bounded)
        try:
            with np.errstate(over="ignore", invalid="ignore", under="ignore"):
                memo[id(node)] = node.term.moments(axis, *inputs)
        except ArithmeticError:  # of plain numbers: arrays become infinite
            memo[id(node)] = opaque(axis.space, inputs, f"{node.name}: a number is too large for double precision")
        except (Unknown, NotImplementedError) as unknown:
            reason = str(unknown) or f"{node.term.kind} gives no closed moments"
            memo[id(node)] = opaque(axis.space, inputs, f"{node.name}: {reason}")
    return memo[id(node)]
