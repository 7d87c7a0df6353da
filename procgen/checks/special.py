"""What is special to whole numbers and to values with a chance of their own: ranks given the past, shares, events.

An event whose chance given the past is p at each step happens Σp times but for a martingale of variance Σp(1 − p): the
number of stays, of jumps, of steps with demand is judged so, whatever the runs are like.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.blocks import across, add_products
from procgen.checks.verdict import Check
from procgen.terms.base import Unknown
from procgen.terms.ranks import Ranking, ranking

FEW = 25.0  # variance of a number of events, at least, that is judged
_SHARES = (0.02, 0.98)  # chances of the least value between which its share is worth a check


def lumpy(theory: Any) -> bool:
    """Whether some values of a series have a chance of their own."""
    return bool(theory.discrete or getattr(theory, "lumpy", False))


def ranked(graph: Any, series: str, theory: Any, grain: float) -> Ranking | Unknown | None:
    """A way to the ranks of a series given its past; why there is none, or None where no term has ranks."""
    if getattr(theory, "mixture", None) is not None:
        return None
    way = ranking(graph, series, theory.discrete, grain)
    if isinstance(way, Ranking) and grain and not way.plain:
        return Unknown(f"values of {series} are rounded after they were changed: what lies behind them is not known")
    return way


def whole_numbers(
    series: str, probe: str, law: Any, x: NDArray, seed: int, grain: float = 0.0
) -> Iterator[Check]:
    """A law of whole numbers (or of few values) at a probe: ranks spread over their steps, and the least.

    law: of the values x, with `spacing`, `cdf` and `ppf`. grain: the distance of neighbouring values as stored, or 0.
    """
    if not math.isfinite(law.spacing):
        note = "values lie on several grids, whose law is not computed"
        yield Check(series, "law", probe, "law", outcome="untestable", note=note)
        return
    reach = max(law.spacing, grain) / 2.0
    below, upto = law.cdf(x - reach), law.cdf(x + reach)
    v = np.random.default_rng(seed).random(len(x))
    note = f"Anderson–Darling, {len(x)} paths, ranks spread over the chance of each value"
    yield Check.of(series, "law", probe, "law", judge.anderson_darling(below + v * (upto - below)), note)
    least = law.spacing * round(float(law.ppf(1e-12)) / law.spacing, 6)
    chance = float(law.cdf(least + law.spacing / 2.0))
    if _SHARES[0] < chance < _SHARES[1]:
        count = int(np.count_nonzero(x < least + law.spacing / 2.0))
        yield Check.of(series, f"share of {least:.6g}", probe, "law", judge.share(count, len(x), chance))


class EventSums:
    """Numbers of the events that a term watches, and what chance says of them; mergeable."""

    def __init__(self, names: Sequence[str]):
        self.names = names
        self.sums = np.zeros((len(names), 5))  # cases, events, sums of chances, of their variances, of third moments

    def lane(self, paths: int) -> NDArray:
        """What is carried for one range of paths: the same sums by path."""
        return np.zeros((*self.sums.shape, paths))

    def absorb(self, seen: Sequence[tuple[NDArray, NDArray]], first_step: int, lane: NDArray) -> None:
        """Add a tile: for each name whether it has happened (steps, paths), and its chance (NaN: none taken)."""
        for sums, (happened, p) in zip(lane, seen, strict=True):
            asked, v = np.where(np.isnan(p), np.nan, 1.0), p * (1.0 - p)
            self.add((asked, asked * happened, p, v, v * (1.0 - 2.0 * p)), first_step, sums)

    def add(self, rows: Sequence[NDArray], first_step: int, sums: NDArray) -> None:
        """Add the five rows of one event, (steps, paths) each."""
        for total, row in zip(sums, rows, strict=True):
            add_products(total, row, None, first_step)

    def finish(self, lane: NDArray) -> None:
        """Close a range of paths."""
        self.sums += across(lane)

    def merge(self, other: EventSums) -> None:
        self.sums += other.sums

    def checks(self, series: str) -> Iterator[Check]:
        """The share of each event, where enough of them can be expected."""
        for name, (n, count, mean, variance, third) in zip(self.names, self.sums.tolist(), strict=True):
            what, kind = f"share: {name}", "memory" if " after " in name else "level"
            if variance < FEW:
                if n:
                    note = f"{mean:.3g} of {n:.0f} are expected, too few to be judged by their number"
                    yield Check(series, what, "all steps", kind, mean / n, count / n, outcome="reported", note=note)
                continue
            z, root = (count - mean) / math.sqrt(variance), math.sqrt(variance)
            finding = judge.unit(z, root / n, theory=mean / n, skew=third / root**3)
            doubt = judge.excess_doubt(n / variance - 6.0, int(n), "cases")
            yield Check.of(series, what, "all steps", kind, judge.with_doubt(finding, doubt))
