"""Sums over the shocks of two series together: products of their normal scores at several lags."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import across, add_lags
from procgen.checks.shocks import MEMORY_LAGS, ShockLane

NEAR = (-2, -1, 0, 1, 2)  # lags at which two series are compared
FAR = (*(-lag for lag in MEMORY_LAGS[::-1]), 0, *MEMORY_LAGS)  # where what is shared comes at several lags


class CrossSums:
    """Products of the normal scores of two series at several lags.

    ``sums[lag]`` pairs series `a` at step t with series `b` at step t - lag.
    """

    def __init__(self, lags: tuple[int, ...] = NEAR):
        self.lags = lags
        self.sums = {lag: np.zeros(2) for lag in lags}

    def lane(self, paths: int) -> NDArray:
        """What is carried for one range of paths: totals (lags, paths)."""
        return np.zeros((len(self.lags), paths))

    def absorb(self, a: NDArray, b: NDArray, steps: int, ready: int, totals: NDArray) -> None:
        """Add the last `steps` steps of the views of two windows of scores, (steps, paths), NaN where unknown.

        Of these, and of what came before them, only those count that are not before step `ready` of the new ones.
        """
        counts = add_lags(totals[: len(self.lags)], a, b, self.lags, steps, ready)
        for lag, count in zip(self.lags, counts, strict=True):
            self.sums[lag][0] += count

    def beside(self, a: ShockLane, b: ShockLane, steps: int, totals: NDArray) -> None:
        """Add what else is looked at in the last `steps` steps of two series."""

    def finish(self, totals: NDArray) -> None:
        for lag, total in zip(self.lags, across(totals), strict=True):
            self.sums[lag][1] += total

    def merge(self, other: CrossSums) -> None:
        for lag in self.lags:
            self.sums[lag] += other.sums[lag]
