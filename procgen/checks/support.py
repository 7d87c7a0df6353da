"""Values that a process cannot give: beyond its bounds, off its lattice, or none of the few that it has.

What a series can give follows from its terms (`Term.support`); where that is everything, or moves with the step, there
is nothing to check. A body that is held must not move between its readings, whatever its values are.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.verdict import Check
from procgen.checks.words import number
from procgen.spec.records import dataclass
from procgen.terms.combine import Exp, Product, Scaled, Sum
from procgen.terms.gaps import Missing
from procgen.terms.level import Constant
from procgen.terms.shape import Elementwise
from procgen.terms.support import EVERYTHING, INF, Support, finite, near
from procgen.terms.supports import common_support
from procgen.terms.window import Hold

POSSIBLE, HELD = "possible values", "held values"
_NEAR = {"float32": 2.0**-23}  # of a value's size: what is as near to a possible value is that value
_DOUBLE = 1e-9
_TINY = 1e-6  # a mean from which some e-folds lead below the least number that is stored

Found = list[Any]  # how many, then path, step and value of the first, and of what is held the value before: for JSON


@dataclass(frozen=True)
class Possible:
    """What the values of a series may be, as stored; `every`, `first`: how they are held, if they are."""

    support: Support = EVERYTHING
    near: float = _DOUBLE
    every: int = 1
    first: int = 0

    def outside(self, x: NDArray) -> NDArray | None:
        """Which values cannot be; None when all can. What is not finite is left to other checks."""
        s, near = self.support, self.near
        if s.everything:
            return None
        with np.errstate(invalid="ignore", over="ignore"):
            if s.values is not None:
                wrong = _off(x, np.array(s.values), near)
            else:
                slack_low, slack_high = (near * abs(end) if math.isfinite(end) else 0.0 for end in (s.low, s.high))
                wrong = (x < s.low - slack_low) | (x > s.high + slack_high)
                if s.above:
                    wrong |= x <= s.low
                if s.step:
                    ratio = (x - s.offset) / s.step
                    wrong |= np.abs(ratio - np.rint(ratio)) > near * (1.0 + np.abs(ratio) + abs(s.offset / s.step))
        wrong &= np.isfinite(x)
        return wrong if wrong.any() else None

    def moved(self, x: NDArray, before: NDArray | None, first_step: int) -> NDArray | None:
        """Which values differ from the one before though it is held; None when none does."""
        rows = np.arange(first_step, first_step + len(x))
        inside = (rows - self.first) % self.every != 0
        earlier = np.concatenate([x[:1] if before is None else before, x[:-1]])
        with np.errstate(invalid="ignore"):
            wrong = np.abs(x - earlier) > self.near * np.maximum(np.abs(x), np.abs(earlier))
        wrong &= inside[:, None]
        return wrong if wrong.any() else None


def _off(x: NDArray, values: NDArray, near: float) -> NDArray:
    after = np.minimum(np.searchsorted(values, x), len(values) - 1)
    gap = np.minimum(np.abs(x - values[after]), np.abs(x - values[np.maximum(after - 1, 0)]))
    return gap > near * max(float(np.max(np.abs(values))), 1e-300)


def note(book: dict[str, Found], name: str, wrong: NDArray, x: NDArray, first_path: int, first_step: int) -> None:
    """Add the wrong values of a tile (steps, paths) to what is known of a series."""
    path, step = (int(k) for k in np.argwhere(wrong.T)[0])
    found = [int(np.count_nonzero(wrong)), first_path + path, first_step + step, float(x[step, path])]
    merge(book, {name: found})


def merge(book: dict[str, Found], other: dict[str, Found]) -> None:
    """Add what was found elsewhere; the first is that of the lowest path, and of its earliest step."""
    for name, found in other.items():
        old = book.get(name, [0, *found[1:]])
        book[name] = [old[0] + found[0], *min(old[1:], found[1:])]


def checks(series: str, possible: Possible, outside: Found | None, moved: Found | None) -> Iterator[Check]:
    """Whether every value of a series is one that it can have, and is held as long as stated."""
    if not possible.support.everything:
        allowed, fault = words(possible.support), ""
        if outside is not None:
            fault = _first(outside, ("value", "values"), "that the process cannot give", allowed)
        yield Check.fact(series, POSSIBLE, "all steps", fault, f"all values are {allowed}")
    if possible.every > 1:
        allowed, fault = f"held for {possible.every} steps from step {possible.first % possible.every} on", ""
        if moved is not None:
            fault = _first(moved, ("value differs", "values differ"), "from the one before", allowed)
        yield Check.fact(series, HELD, "all steps", fault, f"all values are {allowed}")


def _first(found: Found, one_or_many: tuple[str, str], what: str, allowed: str) -> str:
    """How many values are wrong, and the first of them."""
    count, path, step, value = found
    return (
        f"{count:,} {one_or_many[count > 1]} {what}, the first at path {path}, step {step}: {number(value, 10)}, "
        f"where values are {allowed}"
    )


def words(support: Support) -> str:
    """A support in plain words, such as `whole numbers from 0`."""
    low, high, step = number(support.low, 6), number(support.high, 6), support.step
    if support.values is not None:
        shown = [number(x, 6) for x in support.values]
        if len(shown) > 6:
            return f"among {len(shown):,} numbers between {low} and {high}"
        return " or ".join(filter(None, [", ".join(shown[:-1]), shown[-1]]))
    ends = f"above {low}" if support.above else "" if support.low == -INF else f"from {low}"
    if support.high < INF:
        ends = f"between {low} and {high}" if support.low > -INF else f"up to {high}"
    if not step:
        return f"{low} or more" if ends.startswith("from") else ends
    many = "whole numbers" if step == 1.0 else f"multiples of {number(step, 6)}"
    if not near(support.offset, step):
        many = f"{number(support.offset, 6)} and multiples of {number(step, 6)} away from it"
    return f"{many} {ends}".strip()


# what the graph says


def possible_of(graph: Any, name: str, declared: Any, vanishes: bool = False) -> Possible:
    """What a series of a graph can give, as its declaration stores it; 0, too, where what is above it `vanishes`."""
    closeness = _NEAR.get(declared.type, _DOUBLE)
    support = stored(common_support(graph, name), declared)
    support = replace(support, above=support.above and not vanishes)
    every, first = held(graph.series[name]) or (1, 0)
    if graph.varied is not None and graph.varied.parameters:
        every, first = 1, 0
    return Possible(support, closeness, every, first)


def vanishes(theory: Any, steps: int) -> bool:
    """Whether a series comes so near to 0 that a number above it may be stored as 0."""
    mean = theory.mean(np.array([0, steps - 1]))
    return mean is not None and float(np.min(np.abs(mean))) < _TINY


def stored(support: Support, declared: Any) -> Support:
    """What is left of a support by rounding to the declared decimals."""
    decimals = 0 if declared.type == "int64" else declared.decimals
    if decimals is None or support.everything:
        return support
    scale = 10.0**decimals

    def rounded(x: float) -> float:
        return float(np.rint(x * scale) / scale) if math.isfinite(x) else x

    if support.values is not None:
        return finite(rounded(x) for x in support.values)
    fits = support.step and near(support.step, 1.0 / scale) and near(support.offset, 1.0 / scale)
    kept = replace(support, low=rounded(support.low), high=rounded(support.high))
    return kept if fits else replace(kept, step=0.0, offset=0.0, above=False)


def held(node: Any) -> tuple[int, int] | None:
    """Length and a first step of the blocks in which a node does not move; None when it may move at every step."""
    term = getattr(node, "term", None)
    if isinstance(term, Hold):
        return int(term.every), int(term.first)
    if isinstance(term, Missing | Exp | Scaled | Elementwise):
        return held(node.inputs[0])
    if isinstance(term, Sum | Product):
        found = {held(part) for part in node.inputs if not isinstance(getattr(part, "term", None), Constant)}
        return found.pop() if len(found) == 1 else None
    return None
