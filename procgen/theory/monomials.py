"""Terms of an expression: products of known factors, linear forms and one exponential, or running sums of them."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import field, replace

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory import wick
from procgen.theory.known import Known
from procgen.theory.linear import At, Linear
from procgen.theory.running import steady
from procgen.theory.sources import Source, Space
from procgen.theory.unknown import Unknown

LARGEST_TABLE = 2048  # running sums of terms that move with the step are added up over all pairs before this step
LONGEST_SUM = 1 << 20  # and of terms whose covariance depends on the lag, over lags, before this one


@dataclass(frozen=True)
class Term:
    """Known factors times linear forms times exp(exponent); or known factors times a running sum of a term."""

    knowns: tuple[Known, ...] = ()
    factors: tuple[Linear, ...] = ()
    exponent: Linear = field(default_factory=Linear)
    summed: Term | None = None

    @property
    def sources(self) -> dict[Source, None]:
        inner = self.summed.sources if self.summed else {}
        for form in (*self.factors, self.exponent):
            inner = inner | form.sources
        return inner

    def coefficient(self, steps: np.ndarray) -> np.ndarray:
        value = np.ones(np.shape(steps))
        for factor in self.knowns:
            value = value * factor(steps)
        return value

    def lag(self, by: int) -> Iterable[tuple[Term, float]]:
        """This term `by` steps ago, as a sum of terms: a running sum gives back what it has summed since."""
        knowns = tuple(k.lag(by) for k in self.knowns)
        if self.summed is None:
            yield Term(knowns, tuple(f.lag(by) for f in self.factors), self.exponent.lag(by)), 1.0
            return
        yield Term(knowns, summed=self.summed), 1.0
        for j in range(by):
            for inner, c in self.summed.lag(j):
                yield replace(inner, knowns=in_order(knowns + inner.knowns)), -c


def in_order(knowns: tuple[Known, ...]) -> tuple[Known, ...]:
    return tuple(sorted(knowns, key=lambda k: repr(k.key)))


def mean(space: Space, term: Term, steps: np.ndarray) -> np.ndarray:
    """E of a term at steps."""
    if term.summed is None:
        return term.coefficient(steps) * wick.mean(space, term.factors, term.exponent, steps)
    top = _last(steps, LONGEST_SUM) + 1
    inner = mean(space, term.summed, np.arange(top, dtype=np.int64))
    inner[0] = 0.0
    return term.coefficient(steps) * np.cumsum(inner)[steps]


def covariance(space: Space, m: Term, n: Term, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """Cov(m(t), n(s)) for steps of one shape."""
    if not space.linked(m.sources, n.sources):
        return np.zeros(t.shape)
    known_part = m.coefficient(t) * n.coefficient(s)
    if m.summed is None and n.summed is None:
        return known_part * wick.joint(space, (m.factors, m.exponent), (n.factors, n.exponent), t, s)[1]
    if _sums_of_steady(space, m) and _sums_of_steady(space, n):
        return known_part * _double_sum(space, m, n, t, s)
    return known_part * _table(space, m, n, _last(t, LARGEST_TABLE) + 1, _last(s, LARGEST_TABLE) + 1)[t, s]


def _sums_of_steady(space: Space, term: Term) -> bool:
    """Whether a term, or what it sums once, has a covariance that depends on the lag alone."""
    inner = term if term.summed is None else term.summed
    forms = (*inner.factors, inner.exponent)
    plain = all(isinstance(key, At) for form in forms for key in form) and all(steady(space, form) for form in forms)
    return plain and inner.summed is None and (inner is term or not inner.knowns)


def _double_sum(space: Space, m: Term, n: Term, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """Running sums of terms with covariance g(lag): sums of F(x) = sum of g(lag) over lags up to x."""
    a, b = m.summed or m, n.summed or n
    late, early = _last(t, LONGEST_SUM) + 1, _last(s, LONGEST_SUM) + 1
    lags = np.arange(-early, late + 1)
    g = wick.joint(space, (a.factors, a.exponent), (b.factors, b.exponent), np.maximum(lags, 0), np.maximum(-lags, 0))[
        1
    ]
    if m.summed is None or n.summed is None:
        # Cov(sum to t, y(s)) takes lags 1 - s .. t - s; Cov(x(t), sum to s) takes t - s .. t - 1.
        low, high = (-s, t - s) if n.summed is None else (t - s - 1, t - 1)
        total = np.concatenate([[0.0], np.cumsum(g)])  # total[k]: the first k lags
        return total[high + early + 1] - total[low + early + 1]
    f = np.cumsum(g)
    total = np.concatenate([[0.0], np.cumsum(f)])

    def between(low: np.ndarray, high: np.ndarray) -> np.ndarray:
        return total[high + early + 1] - total[low + early]

    # For step k <= t the lags are k - s .. k - 1: F(k - 1) - F(k - s - 1), summed over k.
    return np.where((t > 0) & (s > 0), between(0 * t, t - 1) - between(-s, t - s - 1), 0.0)


def _table(space: Space, m: Term, n: Term, rows: int, columns: int) -> np.ndarray:
    """Covariances of two terms without their known factors at all pairs of steps, running sums added up."""
    for axis, term in ((0, m), (1, n)):
        if term.summed is not None:
            a, b = (term.summed, n) if axis == 0 else (m, term.summed)
            t, s = np.arange(rows), np.arange(columns)
            inner = _table(space, a, b, rows, columns)
            inner = inner * (a.coefficient(t)[:, None] if axis == 0 else b.coefficient(s)[None, :])
            inner[(0, slice(None)) if axis == 0 else (slice(None), 0)] = 0.0
            return np.cumsum(inner, axis=axis)
    grid = np.meshgrid(np.arange(rows), np.arange(columns), indexing="ij")
    return wick.joint(space, (m.factors, m.exponent), (n.factors, n.exponent), *grid)[1]


def _last(steps: np.ndarray, limit: int) -> int:
    if np.min(steps, initial=0) < 0:
        raise Unknown("a running sum of products is added up from step 0 on only")
    if np.max(steps, initial=0) >= limit:
        raise Unknown(f"a running sum of products is added up exactly, which is done before step {limit}")
    return int(np.max(steps, initial=0))
