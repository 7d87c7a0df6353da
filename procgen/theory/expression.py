"""Random series as polynomials of linear forms and their exponentials, with known coefficients.

An expression is a known mean, one linear form, and a sum of *terms*: number x known factors x linear forms x
exp(linear form), or the running sum of such a term. Sums, products, delays and running sums stay in this shape;
what does not (an exponential of something that is not linear, a product with a running sum of products) becomes an
opaque source, whose moments are unknown for a reason, but whose stationarity is not.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import field, replace
from itertools import count
from typing import Any

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory import known, monomials
from procgen.theory.known import Known
from procgen.theory.linear import At, Base, Linear, Sum
from procgen.theory.monomials import Term, in_order
from procgen.theory.sources import IID, OPAQUE, Source, Space, roots
from procgen.theory.unknown import Unknown

MOST_TERMS = 512
Branches = Callable[[], "Sequence[tuple[Expression | None, Expression]]"]
_serial = count()


@dataclass(frozen=True)
class Expression:
    """A random series: `mean` + `linear` + sum of `terms` with their numbers.

    `hidden` gives the hidden outputs that the last term offers, by name.
    """

    space: Space
    mean_path: Known
    linear: Linear = field(default_factory=Linear)
    terms: Mapping[Term, float] = field(default_factory=dict)
    outputs: Mapping[str, Callable[[], Expression]] = field(default_factory=dict)
    law: Callable[[int], Any] | None = None  # the law at a step, where what it is made of does not tell
    lumpy: bool = False  # whether some of its values have a chance of their own, as 0 of a demand that is intermittent
    branches: Branches | None = None  # where it is one of several series

    # algebra

    def __add__(self, other: Expression) -> Expression:
        terms = _collect([*self.terms.items(), *other.terms.items()])
        if len(terms) > MOST_TERMS:
            return opaque(self.space, (self, other), f"a sum of more than {MOST_TERMS} products")
        lumpy = (self.lumpy or other.lumpy) and all(x.lumpy or not x.sources for x in (self, other))
        law = None
        for x, rest in ((self, other), (other, self)):
            if x.law is not None and not rest.sources:
                law = _moved(x.law, 1.0, rest.mean_path)
        path, linear = self.mean_path + other.mean_path, self.linear + other.linear
        branches = self._branching(lambda branch: branch + other) or other._branching(lambda branch: self + branch)
        return Expression(self.space, path, linear, terms, law=law, lumpy=lumpy, branches=branches)

    def __mul__(self, factor: float) -> Expression:
        return Expression(
            self.space,
            self.mean_path.scaled(factor),
            self.linear.scaled(factor),
            {term: factor * c for term, c in self.terms.items()} if factor else {},
            self.outputs,
            law=None if self.law is None or not factor else _moved(self.law, factor),
            lumpy=self.lumpy,
            branches=self._branching(lambda branch: branch * factor),
        )

    __rmul__ = __mul__

    def lag(self, by: int) -> Expression:
        """The series `by` steps ago."""
        if not by:
            return self
        terms = [(t, c * k) for term, c in self.terms.items() for t, k in term.lag(by)]
        path, linear = self.mean_path.lag(by), self.linear.lag(by)
        return Expression(self.space, path, linear, _collect(terms), lumpy=self.lumpy, branches=self._earlier(by))

    def difference(self, lag: int = 1, order: int = 1) -> Expression:
        """(1 - B^lag)^order of the series."""
        linear = Expression(self.space, known.constant(0.0), self.linear.difference(lag, order))
        rest = Expression(self.space, self.mean_path, Linear(), self.terms)
        for _ in range(order):
            rest = rest + rest.lag(lag) * -1.0
        return linear + rest

    def integrate(self, start: float = 0.0, every: int = 1) -> Expression:
        """y(t) = y(t - every) + x(t), `start` at the `every` steps up to step 0, followed backwards below them."""
        if every > 1:
            return self._integrate_seasons(start, every)
        terms = [(Term(summed=term), c) for term, c in self.terms.items()]
        linear, name = self.linear.integrate(), self.space.name
        for key in linear:
            if isinstance(key, Sum):
                self.space.origins.setdefault(key, name)
        return Expression(self.space, self.mean_path.integrate(start, name), linear, _collect(terms), lumpy=self.lumpy)

    def _integrate_seasons(self, start: float, every: int) -> Expression:
        if self.terms or self.mean_path.value != 0.0:
            raise Unknown("a seasonal sum of what has a mean, or is not linear, has no closed moments")
        linear = self.linear.integrate_seasons(every)
        self.space.origins.update(dict.fromkeys(linear, self.space.name))
        return Expression(self.space, known.constant(start), linear)

    def exp(self) -> Expression:
        """The exponential of the series: of each branch, or of what is linear; else opaque."""
        if self.branches:
            return chosen([(flag, branch.exp()) for flag, branch in self.branches()])
        if self.terms:
            return opaque(self.space, (self,), "moments of an exponential of products are not worked out")
        level = self.mean_path.exp()
        if not self.linear:
            return Expression(self.space, level)
        if level.value is not None:
            return Expression(self.space, known.constant(0.0), terms={Term(exponent=self.linear): level.value})
        return Expression(self.space, known.constant(0.0), terms={Term((level,), exponent=self.linear): 1.0})

    def _branching(self, change: Callable[[Expression], Expression]) -> Branches | None:
        if (branches := self.branches) is None:
            return None
        return lambda: [(flag, change(branch)) for flag, branch in branches()]

    def _earlier(self, by: int) -> Branches | None:
        if (branches := self.branches) is None:
            return None
        return lambda: [(flag if flag is None else flag.lag(by), branch.lag(by)) for flag, branch in branches()]

    def hidden(self, name: str) -> Expression:
        """A hidden output of the term, such as the variance of a garch."""
        if name in self.outputs:
            return self.outputs[name]()
        return opaque(self.space, (self,), f"the hidden output {name!r} has no closed moments")

    # moments

    @property
    def parts(self) -> list[tuple[Term, float]]:
        """All random parts as terms, the linear form first."""
        first = [(Term(factors=(self.linear,)), 1.0)] if self.linear else []
        return first + list(self.terms.items())

    def mean(self, steps: np.ndarray) -> np.ndarray:
        """E x at int64 steps."""
        steps = np.asarray(steps, np.int64)
        if self.lost:
            raise Unknown(self.lost)
        for source in self.sources:
            if source.kind == IID and source.law.moment(1) is None:
                raise Unknown(f"{source.key} has a law without a mean")
        total = self.mean_path(steps)
        for term, c in self.terms.items():
            total = total + c * monomials.mean(self.space, term, steps)
        return total

    def covariance(self, other: Expression, t: np.ndarray, s: np.ndarray) -> np.ndarray:
        """Cov(x(t), y(s)) for int64 steps of one shape."""
        total = np.zeros(t.shape)
        for m, c in self.parts:
            for n, k in other.parts:
                total = total + (c * k) * monomials.covariance(self.space, m, n, t, s)
        return total

    @property
    def lost(self) -> str:
        """Why its mean is not what the mean path says, but not known; empty where it is."""
        return next((source.reason for source in self.linear.sources if not source.centred), "")

    @property
    def sources(self) -> dict[Source, None]:
        found = dict(self.linear.sources)
        for term in self.terms:
            found |= term.sources
        return found


def _moved(law: Callable[[int], Any], factor: float, path: Known | None = None) -> Callable[[int], Any]:
    """The laws of a series times a factor, or beside a known path."""

    def moved(step: int) -> Any:
        from procgen.theory.laws import Affine

        return Affine(law(step), 0.0 if path is None else float(path(np.array([step]))[0]), factor)

    return moved


def product(space: Space, expressions: Sequence[Expression]) -> Expression:
    """The product of series, expanded into terms."""
    whole: list[tuple[Term, float]] = [(Term(), 1.0)]
    for expression in expressions:
        parts = list(expression.parts)
        level = expression.mean_path
        if level.value is None:
            parts.append((Term((level,)), 1.0))
        elif level.value:
            parts.append((Term(), level.value))
        if len(parts) * len(whole) > MOST_TERMS:
            return opaque(space, expressions, f"a product that expands to more than {MOST_TERMS} parts")
        try:
            whole = [(_times(a, b), c * k) for a, c in whole for b, k in parts]
        except Unknown as unknown:
            return opaque(space, expressions, unknown.reason)
    branching = next((i for i, x in enumerate(expressions) if x.branches is not None), None)
    branches = None
    if branching is not None:
        others = [x for i, x in enumerate(expressions) if i != branching]
        branches = expressions[branching]._branching(lambda branch: product(space, [*others, branch]))
    return replace(_sorted_out(space, whole), lumpy=any(x.lumpy for x in expressions), branches=branches)


def opaque(
    space: Space,
    ingredients: Sequence[Expression],
    reason: str,
    mean: Known | None = None,
    highest: float | None = None,
) -> Expression:
    """A series whose covariances are unknown for a reason; its mean too unless it is given.

    `highest` is the order below which its moments exist, where that is known; all of what has bounds do.
    """
    behind = {source for x in ingredients for source in x.sources}
    depends = frozenset(root for s in behind for root in roots(s))
    source = Source(
        f"opaque {next(_serial)}", OPAQUE, np.nan, detail=tuple(ingredients), depends=depends, reason=reason,
        centred=mean is not None, highest=np.inf if space.bounded else highest,
    )  # fmt: skip
    lumpy = any(x.lumpy for x in ingredients)
    return Expression(space, mean or known.constant(0.0), Linear({At(Base(source), 0): 1.0}), lumpy=lumpy)


def chosen(branches: Sequence[tuple[Expression | None, Expression]]) -> Expression:
    """What is each of the branches where its flag is 1, and the first, whose flag is None, elsewhere.

    A function of a series' values alone is that function of each branch, and so a choice again.
    """
    first = total = branches[0][1]
    if lost := next((branch.lost for _, branch in branches if branch.lost), ""):
        return opaque(first.space, [x for pair in branches for x in pair if x is not None], lost)
    for flag, branch in branches[1:]:
        if flag is not None:  # what all branches have in common is not multiplied
            total = total + product(first.space, [flag, branch + first * -1.0])
    return replace(total, branches=lambda: branches)


def _times(a: Term, b: Term) -> Term:
    knowns = in_order(a.knowns + b.knowns)
    if a.summed or b.summed:
        one, other = (a, b) if a.summed else (b, a)
        if other.summed or other.factors or other.exponent:
            raise Unknown("a running sum of products, multiplied again, has no closed moments")
        return Term(knowns, summed=one.summed)
    return Term(knowns, tuple(sorted(a.factors + b.factors, key=hash)), a.exponent + b.exponent)


def _sorted_out(space: Space, parts: Iterable[tuple[Term, float]]) -> Expression:
    """Parts back to their places: what is known to the mean, what is linear to the form."""
    mean, linear, rest = known.constant(0.0), Linear(), []
    for term, c in parts:
        if term.summed or term.exponent or len(term.factors) > 1 or (term.factors and term.knowns):
            rest.append((term, c))
        elif term.factors:
            linear = linear + term.factors[0].scaled(c)
        else:
            level = known.constant(c)
            for factor in term.knowns:
                level = level * factor
            mean = mean + level
    return Expression(space, mean, linear, _collect(rest))


def _collect(parts: Iterable[tuple[Term, float]]) -> dict[Term, float]:
    total: dict[Term, float] = {}
    for term, c in parts:
        total[term] = total.get(term, 0.0) + c
    return {term: c for term, c in total.items() if c}
