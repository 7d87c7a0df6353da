"""The sources of randomness, and what is known of two of them at the same step.

Distinct steps of distinct sources are uncorrelated for every kind: independent shocks, conditionally heteroskedastic
shocks (whose sign is new at each step), and the martingale differences e^2 - h behind squares.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import field
from typing import Any

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.chains import Switching
from procgen.theory.copula import is_symmetric
from procgen.theory.ties import NormalTie, StateTie, Tie
from procgen.theory.unknown import Unknown

IID, GARCH, SQUARES, OPAQUE, PROCESS = "independent", "garch", "squares", "opaque", "process"


@dataclass(frozen=True, eq=False)
class Source:
    """White noise at an address; one object each.

    `variance` is inf where there is none. `path` gives the variance at steps >= 0 for a source that leaves from a
    given past, until step `settles` (inf: for ever). An opaque source stands for what has no closed form, a process
    for what has a memory of its own (`theory.processes`): `depends` are the sources behind them.
    """

    key: str
    kind: str
    variance: float
    law: Any = None
    path: Callable[[np.ndarray], np.ndarray] | None = None
    settles: float = 0.0
    owner: Source | None = None  # the garch whose squares a SQUARES source drives; the shocks of a switching noise
    detail: Any = None  # the Garch behind a garch or squares source; the ingredients of an opaque one; the Process
    depends: frozenset[Source] = frozenset()
    reason: str = ""
    unit: float = 1.0  # of independent shocks: what a shock of the law is multiplied by
    highest: float | None = None  # of an opaque source: the order below which its moments exist, if that is known
    centred: bool = True  # False for an opaque source whose mean is not known either

    @property
    def gaussian(self) -> bool:
        return self.detail.gaussian if self.kind == PROCESS else self.kind == IID and bool(self.law.gaussian)

    @property
    def called(self) -> str:
        """What people know it as: the term that it belongs to."""
        return self.detail.name if self.kind == PROCESS else (self.owner or self).key

    @property
    def power_tailed(self) -> bool:
        """Whether its tails are known to be power laws."""
        if self.kind in (GARCH, SQUARES):
            return self.detail.power_tailed
        return self.kind == IID and bool(np.isfinite(self.law.highest_moment))

    @property
    def symmetric(self) -> bool:
        """Whether flipping all signs leaves its law as it is."""
        signed = getattr(self.detail, "leverage", False)  # the variance of a garch-like source follows signs
        return self.kind in (IID, GARCH) and not signed and is_symmetric(self.law)


@dataclass
class Space:
    """All sources of a spec, their correlations, and what was found to be dependent."""

    correlations: Mapping[frozenset[str], float] = field(default_factory=dict)
    horizon: int = 4096  # the steps over which the shape of a known function counts
    name: str = "the series"  # the term that is at work, for reasons
    bounded: bool = False  # whether all its values lie between two numbers
    sources: dict[str, Source] = field(default_factory=dict)
    origins: dict[Any, str] = field(default_factory=dict)  # where a running sum was written, by its key
    systems: dict[Any, Any] = field(default_factory=dict)  # state spaces that were asked, by their forms
    last: Any = None  # the forms that were asked last
    sums: dict[Any, Any] = field(default_factory=dict)  # covariances of running sums, see `running`
    ties: Mapping[frozenset[str], Tie] = field(default_factory=dict)  # of those that are not jointly normal

    def add(self, source: Source) -> Source:
        if source.key in self.sources:
            raise ValueError(f"expected one source an address, got {source.key!r} twice; give one a name with `as:`")
        self.sources[source.key] = source
        return source

    def normal_correlation(self, a: Source, b: Source) -> float:
        """Correlation of the primary normals behind two sources."""
        a, b = a.owner or a, b.owner or b
        return self.correlations.get(frozenset((a.key, b.key)), 0.0) if a is not b else 1.0

    def dependent(self, a: Source, b: Source) -> bool:
        if a is b:
            return True
        left, right = roots(a), roots(b)
        return any(self.normal_correlation(x, y) != 0.0 for x in left for y in right) or self.tied((a,), (b,))

    def tie(self, a: Source, b: Source) -> Tie | None:
        """What ties the shocks of two sources, where they are not jointly normal."""
        return self.ties.get(frozenset(((a.owner or a).key, (b.owner or b).key)))

    def tied(self, left: Iterable[Source], right: Iterable[Source]) -> bool:
        """Whether a primary source behind the ones is tied to one behind the others, in another way than by normals."""
        if not self.ties:
            return False
        return any(self.tie(x, y) is not None for a in left for b in right for x in roots(a) for y in roots(b))

    def gaussian(self, sources: Iterable[Source]) -> bool:
        """Whether sources are jointly Gaussian: each is, and no two are tied in another way."""
        listed = list(sources)
        if not all(source.gaussian for source in listed):
            return False
        return not self.tied(listed, listed)

    def components(self, sources: Iterable[Source]) -> list[list[Source]]:
        """Sources grouped so that distinct groups are independent, in order of first appearance."""
        groups: list[list[Source]] = []
        for source in sources:
            linked = [g for g in groups if any(self.dependent(source, other) for other in g)]
            merged = [s for g in linked for s in g] + [source]
            groups = [g for g in groups if g not in linked] + [merged]
        for group in list(groups) if self.ties and len(groups) > 1 else []:
            behind = self._behind(group)
            driven = [g for g in groups if g is not group and any(x.key in behind for s in g for x in roots(s))]
            if driven:
                group += [s for g in driven for s in g]
                groups = [g for g in groups if g not in driven]
        return groups

    def _behind(self, group: Iterable[Source]) -> frozenset[str]:
        """The chains that the correlations within a group follow: alone, none of its sources depends on them."""
        primary = list(dict.fromkeys(root for source in group for root in roots(source)))
        ties = [self.tie(a, b) for i, a in enumerate(primary) for b in primary[:i]]
        return frozenset().union(*(tie.behind for tie in ties if isinstance(tie, StateTie)))

    def linked(self, left: Iterable[Source], right: Iterable[Source]) -> bool:
        """Whether something of the ones depends on something of the others, be it only together with a third."""
        ours, theirs = dict.fromkeys(left), dict.fromkeys(right)
        if any(self.dependent(a, b) for a in ours for b in theirs):
            return True
        if not self.ties:
            return False
        return any(any(s in ours for s in g) and any(s in theirs for s in g) for g in self.components(ours | theirs))

    def covariance(self, a: Source, b: Source) -> float:
        """E a(t) b(t) for sources with constant variance; Unknown, with the reason, where it has no closed form."""
        if a is b:
            if a.kind == OPAQUE:
                raise Unknown(a.reason)
            if a.kind == PROCESS:
                raise Unknown(f"{a.detail.name} has a memory of its own")
            if not np.isfinite(a.variance):
                raise Unknown(f"infinite variance of {_named(a)}")
            return a.variance
        if not self.dependent(a, b):
            return 0.0
        for one in (a, b):
            if one.kind == OPAQUE:
                raise Unknown(one.reason)
            if one.kind == PROCESS:
                raise Unknown(f"the covariance of {a.key} and {b.key} is not known in closed form")
        if SQUARES in (a.kind, b.kind):
            return self._with_squares(a, b)
        if GARCH in (a.kind, b.kind) and not (_mean_spread(a) and _mean_spread(b)):
            raise Unknown(
                f"{a.key} and {b.key} are correlated and conditionally heteroskedastic: their covariance is "
                "the correlation times the mean product of their conditional standard deviations, which is not known"
            )
        return _mean_spread(a) * _mean_spread(b) * self.law_correlation(a, b)[0]

    def law_correlation(self, a: Source, b: Source) -> tuple[float, float]:
        """Correlation of the values of two independent-in-time sources, and a bound on its numerical error."""
        for one in (a, b):
            if one.law.needs_spread:
                raise Unknown(f"infinite variance of {_named(one)}")
        tie = self.tie(a, b) or NormalTie(self.normal_correlation(a, b))
        return tie.law_correlation(a.law, b.law)

    def _with_squares(self, a: Source, b: Source) -> float:
        if a.owner and b.owner:
            raise Unknown(f"squares of the correlated {a.owner.key} and {b.owner.key} have no closed covariance")
        garch, other = (a.owner, b) if a.owner else (b.owner, a)
        assert garch is not None
        if garch.symmetric and other.symmetric:
            return 0.0  # flipping every sign leaves the squares and turns the other one round
        raise Unknown(f"{garch.key} is skewed: its squares and {other.key} have no closed covariance")


def roots(source: Source) -> Iterable[Source]:
    """The primary sources behind a source."""
    return source.depends or (source.owner or source,)


def _mean_spread(source: Source) -> float:
    """Mean of the conditional standard deviation where it moves by itself; 0 where it is not known."""
    if isinstance(source.detail, Switching):
        return source.detail.mean_spread
    return float(np.sqrt(source.variance)) if source.kind == IID else 0.0


def _named(source: Source) -> str:
    return source.owner.key + " squared" if source.owner else source.key
