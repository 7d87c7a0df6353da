"""Sizes of neighbouring values of a garch whose steps are too few to recover its shocks from, or for half of them.

With y = x² / (x² + c) of a deviation x from the mean, from 0 to 1 whatever the tail, the mean of the product of two y
less their mean, so many steps apart, is known by theory (`theory/firstorder.py`). Each path gives one average of it,
and their spread gives the error.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import Window, add_lagged
from procgen.checks.judge import FEW_PATHS
from procgen.checks.limits import clustering
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check
from procgen.spec.records import dataclass
from procgen.terms.conditional import FORGOTTEN
from procgen.theory.firstorder import FirstOrder, Sizes
from procgen.theory.linear import At
from procgen.theory.unknown import Unknown

_WHAT = "covariance of bounded sizes"
LAGS = (1, 2, 5, 10, 20)  # up to a quarter of the steps
_SHORTEST = 8  # steps
_FEW = 5 * FEW_PATHS  # of 200 paths of 20 steps those that show little skewness were seen to depart too often
HIDDEN = 1.5  # times the skewness that is seen: few paths hide some of theirs
_FINE = 0.01  # grain over the root of c up to which rounding leaves sizes as they are


@dataclass
class Neighbours:
    """What theory says of the sizes of one series."""

    theory: Any
    sizes: Sizes
    lags: tuple[int, ...]

    def sums(self) -> NeighbourSums:
        return NeighbourSums(self)


def plan_neighbours(theory: Any, steps: int, grain: float) -> Neighbours | None:
    """That of a garch of order (1,1) alone, but for its mean and unit; None for all else, or if shocks tell more."""
    expression = getattr(theory, "expression", None)
    if expression is None or expression.terms or len(expression.linear) != 1 or expression.law is not None:
        return None
    key, unit = next(iter(expression.linear.items()))
    if not isinstance(key, At) or key.base.phi or not isinstance(key.base.source.detail, FirstOrder):
        return None
    if key.base.source.kind != "garch" or steps < _SHORTEST:
        return None
    process = key.base.source.detail
    beta = 0.0 if process.feedback is None else process.feedback[2]
    if not 0.0 < beta < 1.0 or steps >= 2.0 * (1.0 + math.log(FORGOTTEN) / math.log(beta)):
        return None
    lags = tuple(lag for lag in LAGS if lag <= steps // 4)
    try:
        sizes = process.sizes(lags)
    except Unknown:
        return None
    sizes = replace(sizes, square=sizes.square * unit * unit)
    return Neighbours(theory, sizes, lags) if grain <= _FINE * math.sqrt(sizes.square) else None


class NeighbourLane:
    """What is carried for one range of paths: the last sizes, and sums by path of their products."""

    def __init__(self, lags: tuple[int, ...], paths: int):
        self.sums = np.zeros((len(lags), paths))
        self.unknown = np.zeros(paths, dtype=bool)
        self.rows = Window(max(lags), paths)
        self.steps = 0


class NeighbourSums:
    """Powers of the averages by path; mergeable."""

    def __init__(self, plan: Neighbours):
        self.plan = plan
        self.powers = Powers(len(plan.lags))

    def lane(self, paths: int) -> NeighbourLane:
        return NeighbourLane(self.plan.lags, paths)

    def absorb(self, x: NDArray, first_step: int, lane: NeighbourLane) -> None:
        """Add a tile (steps, paths) of values."""
        mean = np.asarray(self.plan.theory.mean(np.arange(first_step, first_step + len(x))))
        y = self.plan.sizes.of(x - mean[:, None]) - self.plan.sizes.mean
        lane.unknown |= ~np.isfinite(y).all(axis=0)
        rows = lane.rows.push(y)
        for total, lag in zip(lane.sums, self.plan.lags, strict=True):
            add_lagged(total, rows, rows, lag, len(x))
        lane.steps += len(x)

    def finish(self, lane: NeighbourLane) -> None:
        """Close a range of paths; one with an unknown value is left out."""
        if lane.steps <= max(self.plan.lags):
            return
        counts = lane.steps - np.array(self.plan.lags)
        stated = np.array(self.plan.sizes.covariances)
        averages = lane.sums / counts[:, None] - stated[:, None]
        self.powers.absorb(np.where(lane.unknown, np.nan, averages).T)

    def merge(self, other: NeighbourSums) -> None:
        self.powers.merge(other.powers)

    def all_powers(self) -> list[Powers]:
        """Everything that is summed."""
        return [self.powers]

    def checks(self, series: str) -> Iterator[Check]:
        """The covariance of sizes at each lag."""
        for k, (lag, stated) in enumerate(zip(self.plan.lags, self.plan.sizes.covariances, strict=True)):
            yield clustering(series, _WHAT, f"lag {lag}", self.powers, k, stated, _FEW, HIDDEN, stated > 0.0)
