"""Shocks of two series that nothing ties: their sizes at one step, and what follows at longer lags.

Independent shocks are independent in size, too: cluster scores of one step, multiplied, have mean 0 and the products of
their moments. At lags beyond those that are looked at one by one, a score is multiplied with the sum of ten earlier
ones of the other series, which given that series is normal.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.blocks import across, add_lagged
from procgen.checks.shocks import ShockLane
from procgen.checks.together import NEAR, CrossSums
from procgen.checks.verdict import Check

FIRST, LAST = 3, 12  # lags that are looked at together; scores are held for as long
_COUNT = LAST - FIRST + 1
SIZES, _LATER, _EARLIER = KEYS = ("sizes", "later", "earlier")
_SIZE_SKEW, _SIZE_EXCESS = 0.408163, (15 / 7) ** 2 - 3  # of a product of two cluster scores: (E s³)², (E s⁴)² − 3
_SUM_EXCESS = 40.2  # of n products with sums of ten: 3·2(100 + 2·285)/100, where the sums overlap


class UntiedSums(CrossSums):
    """The sums of a pair of independent series; `wide`: also those of longer lags."""

    def __init__(self, wide: bool):
        super().__init__(NEAR)
        self.keys = KEYS if wide else KEYS[:1]
        self.sums |= {key: np.zeros(2) for key in self.keys}  # type: ignore[misc]

    def lane(self, paths: int) -> NDArray:
        return np.zeros((len(self.lags) + len(self.keys), paths))

    def beside(self, a: ShockLane, b: ShockLane, steps: int, totals: NDArray) -> None:
        pairs = [(a.sizes, b.sizes)]
        if len(self.keys) > 1:
            pairs += [(a.view, b.earlier()), (b.view, a.earlier())]
        for key, total, (one, other) in zip(self.keys, totals[len(self.lags) :], pairs, strict=True):
            self.sums[key][0] += add_lagged(total, one, other, 0, steps)  # type: ignore[index]

    def finish(self, totals: NDArray) -> None:
        super().finish(totals[: len(self.lags)])
        for key, total in zip(self.keys, across(totals[len(self.lags) :]), strict=True):
            self.sums[key][1] += total  # type: ignore[index]

    def merge(self, other: CrossSums) -> None:
        super().merge(other)
        for key in self.keys:
            self.sums[key] += other.sums[key]  # type: ignore[index]


def untied_checks(pair: str, sums: UntiedSums) -> Iterator[Check]:
    """Beside the correlations at each lag: sizes, and longer lags both ways."""
    for key in sums.keys:
        n, total = sums.sums[key].tolist()  # type: ignore[index]
        if n and key == SIZES:
            yield Check.of(pair, "shocks: correlation of sizes", "same step", "dependence", size_finding(n, total))
        elif n:
            probe = f"lags {'+' if key == _LATER else '−'}{FIRST} to {LAST}"
            yield Check.of(pair, "shocks: correlation at longer lags", probe, "dependence", lags_finding(n, total))


def size_finding(n: float, total: float) -> judge.Finding:
    """A sum of n products of the cluster scores of two series."""
    root = math.sqrt(n)
    plain = judge.unit(total / root, 1 / root, skew=_SIZE_SKEW / root, excess=_SIZE_EXCESS / n)
    return judge.with_doubt(plain, judge.excess_doubt(_SIZE_EXCESS, int(n), "pairs of shocks"))


def lags_finding(n: float, total: float) -> judge.Finding:
    """A sum of n products of scores with sums of ten of the other series: the estimate is the sum of correlations."""
    error = math.sqrt(_COUNT / n)
    plain = judge.unit(total / math.sqrt(_COUNT * n), error, excess=_SUM_EXCESS / n)
    return judge.with_doubt(plain, judge.excess_doubt(_SUM_EXCESS, int(n), "pairs of shocks"))
