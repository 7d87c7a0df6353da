"""Clustering of values whose shocks cannot be recovered: how far the square of a value follows the squares before it.

With q = (x − mean)² − variance, E q[t] q[t − k] is the autocovariance of squares, and its share of E q² is the slope of
the squares on earlier ones (McLeod & Li 1983 test whether it is 0). What is left beside the stated slope,
q[t] q[t − k] − slope q[t − k]², has mean 0; each path gives one average of it, and their spread gives the error. Stays
in a regime of its own spread show at lags as long as they last.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import Window, add_lagged, scratch
from procgen.checks.judge import FEW_PATHS
from procgen.checks.limits import clustering, sample_of
from procgen.checks.log_sizes import LogLane, LogSizes, LogSums, plan_log_sizes
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check
from procgen.spec.records import dataclass

LAGS = (1, 2, 4, 8, 16, 32)  # up to a quarter of the steps
_ORDER = 4  # a square times a square
_FEW = 5 * FEW_PATHS  # skewed sums of 200 paths by 100 steps were seen to hide all of their skewness
_WIDER = 1.05  # times the spread of averages where stays in regimes last longer (tests/studies/power.py)
_MANY = 200  # steps over which the average of a path has met more of its tail


def hidden(steps: int) -> float:
    """Times the skewness that is seen: products of squares hide most of theirs until they meet their tail."""
    return 2.0 if steps >= _MANY else 4.0


@dataclass
class Squares:
    """What theory says of the squares of one series' deviations from their mean."""

    theory: Any
    variance: float  # of the values
    spread: float  # variance of their squares
    lags: tuple[int, ...]
    slopes: tuple[float, ...]  # by lag
    highest: float  # order below which moments exist
    steps: int
    logs: LogSizes | None = None  # a sharper look, where theory knows what it shows

    def sums(self) -> SquareSums:
        return SquareSums(self)


def plan_squares(theory: Any, steps: int, grain: float = 0.0) -> Squares | None:
    """The squares of a series with the same covariances at all steps, where they are known; else None."""
    highest = float(theory.highest_moment or 0.0)
    if theory.gaussian or theory.discrete or steps < 8 or not highest > _ORDER:
        return None
    if not theory.stationarity.covariance_stationary:
        return None
    variance = theory.variance(np.array([0]))
    lags = tuple(lag for lag in LAGS if lag <= steps // 4)
    squares = theory.autocovariance_of_squares(np.array([0, *lags]), 0)
    if variance is None or squares is None or not np.isfinite(squares).all() or not squares[0] > 0:
        return None
    slopes = tuple(float(each / squares[0]) for each in squares[1:])
    logs = plan_log_sizes(theory, float(variance[0]), lags, grain)
    return Squares(theory, float(variance[0]), float(squares[0]), lags, slopes, highest, steps, logs)


class SquareLane:
    """What is carried for one range of paths: sums by path of q² and of its products, and the last rows."""

    def __init__(self, lags: tuple[int, ...], paths: int, logs: bool = False):
        self.sums = np.zeros((1 + len(lags), paths))
        self.unknown = np.zeros(paths, dtype=bool)
        self.rows = Window(max(lags), paths)
        self.steps = 0
        self.logs = LogLane(lags, paths) if logs else None


class SquareSums:
    """Powers of the averages by path; mergeable."""

    def __init__(self, plan: Squares):
        self.plan = plan
        self.powers = Powers(len(plan.lags))
        self.logs = LogSums(plan.logs) if plan.logs else None

    def lane(self, paths: int) -> SquareLane:
        return SquareLane(self.plan.lags, paths, self.logs is not None)

    def absorb(self, x: NDArray, first_step: int, lane: SquareLane) -> None:
        """Add a tile (steps, paths) of values."""
        mean = np.asarray(self.plan.theory.mean(np.arange(first_step, first_step + len(x))))
        q = np.subtract(x, mean[:, None], out=scratch(len(x), x.shape[1], 1))
        if self.logs is not None and lane.logs is not None:
            self.logs.absorb(q, lane.logs)
        np.multiply(q, q, out=q)
        q -= self.plan.variance
        lane.unknown |= ~np.isfinite(q).all(axis=0)
        rows = lane.rows.push(q)
        for total, lag in zip(lane.sums, (0, *self.plan.lags), strict=True):
            add_lagged(total, rows, rows, lag, len(x))
        lane.steps += len(x)

    def finish(self, lane: SquareLane) -> None:
        """Close a range of paths; one with an unknown value is left out."""
        if lane.steps <= max(self.plan.lags):
            return
        sums = np.where(lane.unknown, np.nan, lane.sums)
        last = lane.rows.push(np.empty((0, sums.shape[1])))[::-1]
        newest = np.add.accumulate(last * last, axis=0)
        averages = [
            (total - slope * (sums[0] - newest[lag - 1])) / (lane.steps - lag)  # all squares but the last ones
            for total, lag, slope in zip(sums[1:], self.plan.lags, self.plan.slopes, strict=True)
        ]
        self.powers.absorb(np.array(averages).T / self.plan.spread)
        if self.logs is not None and lane.logs is not None:
            self.logs.finish(lane.logs)

    def merge(self, other: SquareSums) -> None:
        for mine, theirs in zip(self.all_powers(), other.all_powers(), strict=True):
            mine.merge(theirs)

    def all_powers(self) -> list[Powers]:
        """Everything that is summed."""
        return [self.powers, *([self.logs.powers] if self.logs else [])]

    def checks(self, series: str) -> Iterator[Check]:
        """The slope of the squares at each lag."""
        for k, lag in enumerate(self.plan.lags):
            yield self._check(series, k, f"lag {lag}")
        if self.logs is not None:
            yield from self.logs.checks(series)

    def _check(self, series: str, k: int, probe: str) -> Check:
        what, theory, times = "slope of squares", self.plan.slopes[k], hidden(self.plan.steps)
        if not self.plan.highest > 3 * _ORDER:
            estimate = theory + sample_of(self.powers, k).mean
            note = f"moments exist only below order {self.plan.highest:g}: no central limit theorem reaches far enough"
            return Check(series, what, probe, "clustering", theory, estimate, outcome="untestable", note=note)
        return clustering(series, what, probe, self.powers, k, theory, _FEW, times, wider=_WIDER)
