"""Clustering and leverage of stochastic volatility, by the logarithms of sizes: they have all moments, squares few.

With x = mean + exp(l/2) z and a normal z, y = log(abs(x - mean)) is l/2 and an independent log(abs(z)), of mean
−(γ + ln 2)/2 and variance π²/8; its autocovariances are those of l/4 (Harvey, Ruiz & Shephard 1994). A normal z[t] of
correlation ρ with the shock of l[t + 1] leaves E sign(z[t]) y[t + 1] = η ρ / sqrt(2 π).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import Window, add_lagged
from procgen.checks.limits import clustering
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check
from procgen.spec.records import dataclass

_MEAN, _VARIANCE = -(np.euler_gamma + math.log(2.0)) / 2.0, math.pi**2 / 8.0  # of log(abs(z)), z normal
_LEVERAGE = "leverage: sign times next log size"
_FINE = 1e-6  # share of the standard deviation up to which rounding leaves the smallest sizes as they are


@dataclass
class LogSizes:
    """What theory says of y, the logarithm of the size of a series' deviations from its mean."""

    mean: float
    variance: float
    lags: tuple[int, ...]
    slopes: tuple[float, ...]  # of y on earlier y, by lag
    leverage: float  # E sign(x[t] - mean) y[t + 1]


def plan_log_sizes(theory: Any, variance: float, lags: tuple[int, ...], grain: float) -> LogSizes | None:
    """That of a stochastic volatility with normal shocks, alone but for its mean and unit; None for all else."""
    from procgen.theory.logvariance import Stochastic

    expression = getattr(theory, "expression", None)
    if expression is None or expression.terms:
        return None
    sources = list(expression.space.sources.values())
    if len(sources) != 1 or not isinstance(sources[0].detail, Stochastic):
        return None
    process, apart = sources[0].detail, theory.autocovariance(np.arange(1, 65))
    if not process.law.gaussian or grain > _FINE * math.sqrt(variance) or apart is None or np.any(apart != 0.0):
        return None
    mean = _MEAN + (process.mean_log + math.log(variance / process.variance)) / 2.0
    own = process.log_variance / 4.0
    slopes = tuple(own * process.beta**lag / (own + _VARIANCE) for lag in lags)
    return LogSizes(mean, own + _VARIANCE, lags, slopes, process.eta * process.rho / math.sqrt(2.0 * math.pi))


class LogLane:
    """What is carried for one range of paths: sums by path of y², of its products, of sign times the next y."""

    def __init__(self, lags: tuple[int, ...], paths: int):
        self.sums = np.zeros((2 + len(lags), paths))
        self.rows, self.signs = Window(max(lags), paths), Window(1, paths)
        self.steps = 0


class LogSums:
    """Powers of the averages by path; mergeable."""

    def __init__(self, plan: LogSizes):
        self.plan = plan
        self.powers = Powers(len(plan.lags) + 1)

    def absorb(self, deviations: NDArray, lane: LogLane) -> None:
        """Add a tile (steps, paths) of deviations from the mean."""
        with np.errstate(divide="ignore"):
            y = np.log(np.abs(deviations)) - self.plan.mean
        rows, signs = lane.rows.push(y), lane.signs.push(np.sign(deviations))
        for total, lag in zip(lane.sums, (0, *self.plan.lags), strict=False):
            add_lagged(total, rows, rows, lag, len(y))
        add_lagged(lane.sums[-1], rows, signs, 1, len(y))
        lane.steps += len(y)

    def finish(self, lane: LogLane) -> None:
        """Close a range of paths; one with an unknown value, or none apart from its mean, is left out."""
        plan, sums = self.plan, lane.sums
        last = lane.rows.push(np.empty((0, sums.shape[1])))[::-1]
        newest = np.add.accumulate(last * last, axis=0)
        averages = [
            (total - slope * (sums[0] - newest[lag - 1])) / (lane.steps - lag) / plan.variance
            for total, lag, slope in zip(sums[1:-1], plan.lags, plan.slopes, strict=True)
        ]
        averages.append(sums[-1] / (lane.steps - 1) - plan.leverage)
        rows = np.array(averages).T
        self.powers.absorb(np.where(np.isfinite(rows).all(axis=1, keepdims=True), rows, np.nan))

    def checks(self, series: str) -> Iterator[Check]:
        """The slope of the logarithms at each lag, and the leverage."""
        plan = self.plan
        for k, (lag, slope) in enumerate(zip(plan.lags, plan.slopes, strict=True)):
            yield clustering(series, "slope of log sizes", f"lag {lag}", self.powers, k, slope)
        yield clustering(series, _LEVERAGE, "lag 1", self.powers, len(plan.lags), plan.leverage)
