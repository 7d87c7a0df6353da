"""Whether values are missing in neighbouring paths, or in two series, as if one knew of the other.

Given what came before, a value of each is missing with a stated chance p. What happens less p, of one times of the
other, adds up to nothing but for a martingale of variance Σ p(1 − p) p′(1 − p′), whatever the shares and lengths are.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.blocks import GROUP
from procgen.checks.special import FEW, EventSums
from procgen.checks.verdict import Check

Seen = tuple[NDArray, NDArray]  # of a tile: which values are missing, and the chance that each had to be


class MaskSums(EventSums):
    """Products of what is missing beyond its chance, of two series or of neighbouring paths of one; mergeable."""

    def __init__(self) -> None:
        super().__init__(("together",))
        self.sums = np.zeros((1, 6))  # cases, products, sums of their sds, variances, third moments, fourth cumulants

    def join(self, a: Seen, b: Seen, first_step: int, lane: NDArray, asked: NDArray | None = None) -> None:
        """Add a tile (steps, paths) of both; `asked` is 1 where the two are compared, else 0."""
        ones = np.ones(a[0].shape) if asked is None else np.broadcast_to(asked, a[0].shape)
        gone, sd, v, third, fourth = (x * y * ones for x, y in zip(_moments(*a), _moments(*b), strict=True))
        self.add((ones, gone, sd, v, third, fourth - 3.0 * v * v), first_step, lane[0])

    def checks(self, series: str) -> Iterator[Check]:
        """One row; its estimate is a correlation, given what came before."""
        n, total, scale, variance, third, fourth = self.sums[0].tolist()
        within = " ~ " not in series
        what = "missing values: neighbouring paths" if within else "missing values: correlation between series"
        if variance < FEW:
            if n:
                note = "too few values can be missing together by chance for their number to be judged"
                yield Check(series, what, "all steps", "dependence", outcome="reported", note=note)
            return
        root = math.sqrt(variance)
        skew, excess = third / root**3, fourth / variance**2
        finding = judge.unit(total / root, root / scale, skew=skew, excess=excess)
        doubt = judge.excess_doubt(n * abs(excess - 1.5 * skew * skew), int(n), "cases")
        yield Check.of(series, what, "all steps", "dependence", judge.with_doubt(finding, doubt))


def _moments(gone: NDArray, p: NDArray) -> tuple[NDArray, ...]:
    """What happened beyond its chance; the standard deviation, variance, third and fourth moment of that."""
    v = p * (1.0 - p)
    return gone - p, np.sqrt(v), v, v * (1.0 - 2.0 * p), v * (1.0 - 3.0 * v)


def beside(seen: Seen) -> tuple[Seen, Seen, NDArray]:
    """Each path of a tile, its left neighbour, and whether both are of one lane group, which is never cut."""
    asked = np.ones(seen[0].shape[1])
    asked[::GROUP] = 0.0
    gone, p = (np.roll(each, 1, axis=1) for each in seen)
    return seen, (gone, p), asked


def key(a: str, b: str) -> str:
    """The name under which what is missing of two series, or of one's neighbours, is counted among the events."""
    return f"{a} ~ {b}: missing"


def pairs(gaps: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Each series with itself, and any two whose values are not left out by the same term."""
    judged = {name: term for name, term in gaps.items() if not term.drawn}
    both = [pair for pair in combinations(judged, 2) if judged[pair[0]] is not judged[pair[1]]]
    return [*((name, name) for name in judged), *both]


def sums(gaps: Mapping[str, Any]) -> dict[str, MaskSums]:
    return {key(*pair): MaskSums() for pair in pairs(gaps)}


def join(gaps: Mapping[str, Any], sums: Mapping[str, Any], seen: Mapping[str, Seen], step: int, lanes: Any) -> None:
    """Add the newest tile of all series with gaps, which begins at a step."""
    for a, b in pairs(gaps):
        place = key(a, b)
        if a == b:
            left, right, asked = beside(seen[a])
            sums[place].join(left, right, step, lanes[place], asked)
        else:
            sums[place].join(seen[a], seen[b], step, lanes[place])


def checks(gaps: Mapping[str, Any], sums: Mapping[str, Any], series: str) -> Iterator[Check]:
    """Of the neighbours of a series, and of it with the series before it."""
    for a, b in pairs(gaps):
        if b == series:
            yield from sums[key(a, b)].checks(series if a == b else f"{a} ~ {b}")
