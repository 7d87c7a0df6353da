"""Paired statistics of two ensembles that share shocks: the mean change, its error, and what the pairing saved.

Path p of one is compared with path p of the other. With x and y the values of a series at a step, d = y − x and n
paths, the mean change is the mean of d with standard error sd(d)/√n, as in the paired t test (Student 1908); drawn
independently it would have √((var x + var y)/n), so that the pairing saved 1 − var(d)/(var x + var y) of the variance,
2 cov(x, y)/(var x + var y) (common random numbers: Glasserman & Yao 1992). Sums are merged block by block (Chan, Golub
& LeVeque 1983), about the values of the first path, so that what never varies has no variance at all.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from procgen.spec.records import dataclass


@dataclass(frozen=True)
class Paired:
    """A series at a step, in both ensembles: means, and the change from a to b over the paths that both have.

    `paths` are those on which both have a value at the step; without any, there are no means. `standard_error` is None
    for one path, `correlation` where one of the two does not vary, `saved` where none does.
    """

    series: str
    step: int
    paths: int
    mean_a: float | None
    mean_b: float | None
    change: float | None
    standard_error: float | None
    correlation: float | None
    saved: float | None

    def row(self) -> dict[str, Any]:
        """The figures by name."""
        return dict(vars(self))


DUST = 2.0**-50  # of the size of the values: four units in their last place


class Sums:
    """Means, sums of squares and of products of (x, y, y − x) at some steps, over paths that come block by block."""

    def __init__(self, steps: int):
        self.count = np.zeros(steps)
        self.shift = np.zeros((3, steps))
        self.mean = np.zeros((3, steps))
        self.squares = np.zeros((3, steps))
        self.product = np.zeros(steps)

    def add(self, x: np.ndarray, y: np.ndarray, columns: list[int]) -> None:
        """Take the values of more paths, each (paths, columns), at some of the steps; NaN where one is missing."""
        block = np.stack([x, y, y - x])
        seen = ~np.isnan(block[2])
        count = seen.sum(axis=0)
        fresh = (self.count[columns] == 0) & (count > 0)
        first = block[:, seen.argmax(axis=0), np.arange(len(columns))]
        self.shift[:, columns] = np.where(fresh, first, self.shift[:, columns])
        block = np.where(seen, block - self.shift[:, None, columns], 0.0)
        mean = block.sum(axis=1) / np.maximum(count, 1)
        rest = np.where(seen, block - mean[:, None], 0.0)
        total = self.count[columns] + count
        part = count / np.maximum(total, 1)
        away, weight = mean - self.mean[:, columns], self.count[columns] * part
        self.squares[:, columns] += (rest * rest).sum(axis=1) + away * away * weight
        self.product[columns] += (rest[0] * rest[1]).sum(axis=0) + away[0] * away[1] * weight
        self.mean[:, columns] += away * part
        self.count[columns] = total

    def figures(self, series: str, steps: list[int]) -> list[Paired]:
        """What the sums come to, a row a step."""
        return [self._figure(series, step, i) for i, step in enumerate(steps)]

    def _figure(self, series: str, step: int, i: int) -> Paired:
        n, (mean_a, mean_b, change) = int(self.count[i]), (self.mean + self.shift)[:, i].tolist()
        if n < 1:
            return Paired(series, step, 0, None, None, None, None, None, None)
        if n < 2:
            return Paired(series, step, n, mean_a, mean_b, change, None, None, None)
        x, y, d = self.squares[:, i].tolist()
        if math.sqrt(d / n) <= DUST * (max(abs(mean_a), abs(mean_b)) + math.sqrt((x + y) / n)):
            d = 0.0  # a change that is the same on every path, but for the rounding of y − x
        correlation = float(self.product[i]) / math.sqrt(x * y) if x > 0.0 and y > 0.0 else None
        if correlation is not None:
            correlation = min(max(correlation, -1.0), 1.0)
        saved = 1.0 - d / (x + y) if x + y > 0.0 else None
        error = math.sqrt(d / (n - 1) / n)
        return Paired(series, step, n, mean_a, mean_b, change, error, correlation, saved)
