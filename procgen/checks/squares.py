"""Clustering of values whose shocks cannot be recovered: how far the square of a value follows the squares before it.

With q = (x − mean)² − variance, E q[t] q[t − k] is the autocovariance of squares, and its share of E q² is the slope of
the squares on earlier ones (McLeod & Li 1983 test whether it is 0). What is left beside the stated slope,
q[t] q[t − k] − slope q[t − k]², has mean 0; each path gives one average of it, and their spread gives the error.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import Window, add_products
from procgen.checks.judge import FEW_PATHS, Sample, sample_mean
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check

LAGS = (1, 4)
_ORDER = 4  # a square times a square
_FEW = 5 * FEW_PATHS  # skewed sums of 200 paths by 100 steps were seen to hide all of their skewness
HIDDEN = 4.0  # times the skewness that is seen: products of squares hide most of theirs until they meet their tail


@dataclass
class Squares:
    """What theory says of the squares of one series' deviations from their mean."""

    theory: Any
    variance: float  # of the values
    spread: float  # variance of their squares
    slopes: tuple[float, ...]  # by lag
    highest: float  # order below which moments exist


def plan_squares(theory: Any, steps: int) -> Squares | None:
    """The squares of a series with the same covariances at all steps, where they are known; else None."""
    highest = float(theory.highest_moment or 0.0)
    if theory.gaussian or theory.discrete or steps <= 4 * max(LAGS) or not highest > _ORDER:
        return None
    if not theory.stationarity.covariance_stationary:
        return None
    variance = theory.variance(np.array([0]))
    squares = theory.autocovariance_of_squares(np.array([0, *LAGS]), 0)
    if variance is None or squares is None or not np.isfinite(squares).all() or not squares[0] > 0:
        return None
    slopes = tuple(float(each / squares[0]) for each in squares[1:])
    return Squares(theory, float(variance[0]), float(squares[0]), slopes, highest)


class SquareLane:
    """What is carried for one range of paths: sums by path, pairs, and the last rows."""

    def __init__(self, paths: int):
        self.sums = np.zeros((len(LAGS), paths))
        self.counts = np.zeros(len(LAGS))
        self.unknown = np.zeros(paths, dtype=bool)
        self.rows = Window(max(LAGS), paths)


class SquareSums:
    """Powers of the averages by path; mergeable."""

    def __init__(self, plan: Squares):
        self.plan = plan
        self.powers = Powers(len(LAGS))

    def lane(self, paths: int) -> SquareLane:
        return SquareLane(paths)

    def absorb(self, x: NDArray, first_step: int, lane: SquareLane) -> None:
        """Add a tile (steps, paths) of values."""
        mean = np.asarray(self.plan.theory.mean(np.arange(first_step, first_step + len(x))))
        q = (x - mean[:, None]) ** 2 - self.plan.variance
        lane.unknown |= ~np.isfinite(q).all(axis=0)
        rows = lane.rows.push(q)
        for k, lag in enumerate(LAGS):
            count = min(len(x), len(rows) - lag)
            if count > 0:
                later, earlier = rows[len(rows) - count :], rows[len(rows) - lag - count : len(rows) - lag]
                add_products(lane.sums[k], later - self.plan.slopes[k] * earlier, earlier, len(x) - count)
                lane.counts[k] += count

    def finish(self, lane: SquareLane) -> None:
        """Close a range of paths; one with an unknown value is left out."""
        if lane.counts.all():
            sums = np.where(lane.unknown, np.nan, lane.sums)
            self.powers.absorb((sums / lane.counts[:, None]).T / self.plan.spread)

    def merge(self, other: SquareSums) -> None:
        self.powers.merge(other.powers)

    def checks(self, series: str) -> Iterator[Check]:
        """The slope of the squares at each lag."""
        for k, lag in enumerate(LAGS):
            yield self._check(series, k, f"lag {lag}")

    def _check(self, series: str, k: int, probe: str) -> Check:
        what, kind, theory, n = "slope of squares", "clustering", self.plan.slopes[k], int(self.powers.n[k])
        sample = Sample.from_powers(n, self.powers.sums[:, k].tolist()) if n else Sample(0, 0.0, 0.0, 0.0, 0.0)
        if not self.plan.highest > 3 * _ORDER:
            note = f"moments exist only below order {self.plan.highest:g}: no central limit theorem reaches far enough"
            return Check(series, what, probe, kind, theory, theory + sample.mean, outcome="untestable", note=note)
        if n < _FEW or sample.sd == 0.0:
            note = f"only {n} paths: reported, not judged"
            return Check(series, what, probe, kind, theory, theory + sample.mean, outcome="reported", note=note)
        return Check.of(series, what, probe, kind, sample_mean(sample, theory, times=HIDDEN))
