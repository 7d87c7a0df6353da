"""Which values a term can have at all: between bounds, on a lattice, or one of finitely many; unknown is everything.

A support may be too wide and is never too narrow, whatever its inputs have to do with each other: it follows from
those of its inputs by the arithmetic of intervals (Moore 1966).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import replace

from procgen.spec.records import dataclass

MOST = 1024  # values that are kept one by one when supports are combined
SAME = 1e-9  # of a step: what is as near to a lattice is on it
INF = math.inf


@dataclass(frozen=True)
class Support:
    """Values between `low` and `high`; with a `step`, only `offset` + its multiples; with `values`, only these.

    `above`: whether the low bound itself is left out, as 0 is by an exponential.
    """

    low: float = -INF
    high: float = INF
    step: float = 0.0
    offset: float = 0.0
    above: bool = False
    values: tuple[float, ...] | None = None

    @property
    def everything(self) -> bool:
        return self.low == -INF and self.high == INF and not self.step

    def __add__(self, other: Support) -> Support:
        listed = _pairs(self, other, lambda a, b: a + b)
        if listed is not None:
            return listed
        step, offset = _common(self, other)
        above = self.low == other.low == 0.0 and (self.above or other.above)
        return Support(self.low + other.low, self.high + other.high, step, offset, above)

    def __mul__(self, other: Support) -> Support:
        listed = _pairs(self, other, lambda a, b: a * b)
        if listed is not None:
            return listed
        ends = [_times(a, b) for a in (self.low, self.high) for b in (other.low, other.high)]
        low, high = min(ends), max(ends)
        above = low == 0.0 and self._positive() and other._positive()
        a, b = self.lattice(), other.lattice()
        if a.low == a.high:
            return Support(low, high, abs(a.low) * b.step, a.low * b.offset, above)
        if b.low == b.high:
            return Support(low, high, abs(b.low) * a.step, b.low * a.offset, above)
        step = a.step * b.step if a.on(0.0) and b.on(0.0) else 0.0
        return Support(low, high, step, 0.0, above)

    def __or__(self, other: Support) -> Support:
        """What either can give."""
        if self.values is not None and other.values is not None and len(self.values) + len(other.values) <= MOST:
            return finite((*self.values, *other.values))
        low, high = min(self.low, other.low), max(self.high, other.high)
        above = all(one.above or one.low > low for one in (self, other))
        a, b = self.lattice(), other.lattice()
        step, _ = _common(a, b)
        if not step or not near(a.offset - b.offset, step):
            return Support(low, high, above=above)
        return Support(low, high, step, a.offset, above)

    def mapped(self, rising: Callable[[float], float]) -> Support:
        """Through a function that does not fall; a lattice is lost."""
        if self.values is not None:
            return finite(rising(x) for x in self.values)
        return Support(_end(rising, self.low), _end(rising, self.high))

    def within(self, low: float, high: float) -> Support:
        """What is left between two bounds, when what is beyond one is put on it."""
        if self.values is not None:
            return finite(min(max(x, low), high) for x in self.values)
        kept = replace(self, low=min(max(self.low, low), high), high=max(min(self.high, high), low))
        kept = replace(kept, above=self.above and kept.low == self.low and low < self.low)
        off = any(math.isfinite(end) and not self.on(end) for end in (low, high))
        return replace(kept, step=0.0, offset=0.0) if off else kept

    def on(self, x: float) -> bool:
        """Whether a number is on the lattice."""
        return bool(self.step) and near(x - self.offset, self.step)

    def lattice(self) -> Support:
        """Finitely many values as multiples of something, where they are."""
        if self.values is None:
            return self
        if len(self.values) == 1:
            return Support(self.low, self.high, offset=self.low)
        first, gap = self.values[0], min(b - a for a, b in zip(self.values, self.values[1:], strict=False))
        if all(near(x - first, gap) for x in self.values):
            return Support(self.low, self.high, gap, first)
        return Support(self.low, self.high)

    def _positive(self) -> bool:
        return self.low > 0.0 or (self.low == 0.0 and self.above)


EVERYTHING = Support()
COUNTS = Support(0.0, INF, 1.0)
POSITIVE = Support(0.0, INF, above=True)
BINARY = Support(0.0, 1.0, values=(0.0, 1.0))


def finite(values: Iterable[float]) -> Support:
    """The support of finitely many values."""
    found = tuple(sorted({float(x) + 0.0 for x in values}))
    return Support(found[0], found[-1], values=found)


def added(parts: Iterable[Support]) -> Support:
    """Of a sum."""
    first, *others = parts
    for part in others:
        first = first + part
    return first


def either(parts: Iterable[Support]) -> Support:
    """Of what is one of several."""
    first, *others = parts
    for part in others:
        first = first | part
    return first


def _pairs(a: Support, b: Support, of: Callable[[float, float], float]) -> Support | None:
    if a.values is None or b.values is None or len(a.values) * len(b.values) > MOST:
        return None
    return finite(of(x, y) for x in a.values for y in b.values)


def _common(a: Support, b: Support) -> tuple[float, float]:
    """Step and offset of the lattice of sums: the finer of two, if the other is its multiple."""
    a, b = a.lattice(), b.lattice()
    steps = [one.step for one in (a, b) if one.low != one.high]
    if not steps or 0.0 in steps:
        return 0.0, 0.0
    step = min(steps)
    return (step, a.offset + b.offset) if near(max(steps), step) else (0.0, 0.0)


def near(x: float, step: float) -> bool:
    """Whether x is a multiple of the step, but for rounding."""
    ratio = x / step
    return abs(ratio - round(ratio)) <= SAME * max(1.0, abs(ratio))


def _times(a: float, b: float) -> float:
    return 0.0 if 0.0 in (a, b) else a * b


def _end(rising: Callable[[float], float], x: float) -> float:
    return x if math.isinf(x) else rising(x)
