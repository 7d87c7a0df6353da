"""Ranks given the past against the value before: a memory that is off moves them with it, whatever the law.

If g is normal and independent of the past, and the weight w is a function of the past alone, the sum of w·g until the
sum of w² reaches a fixed t is exactly normal with variance t: exp(iuS + u²V/2) is a martingale (Dubins & Schwarz 1965
for what is continuous). The weight of the last term is cut so that t is met; where a path ends before that, what is
left is filled with a normal number of its own. So few and short paths are judged by an exact law, too.

Of a path whose first value has no rank, as where a filter's past is not known, ranks are given less than its values:
they are independent of each other and not of that value, which stays in those that follow. It is left out.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.blocks import across
from procgen.checks.recover import dither
from procgen.checks.verdict import Check
from procgen.checks.words import LED

CLIP = 3.0  # sd beyond which the value before weighs no more
SHARE = 0.95  # of the sum of squared weights that is expected: so much is waited for


def led(plan: Any, way: Any) -> bool:
    """Whether a series (its plan, and its way to its shocks) is judged so: ranks of values whose moments are known."""
    if getattr(way, "ranked", None) is None or plan.unknown or len(plan.steps) < 2:
        return False
    return bool(np.isfinite(plan.mean).all() and np.isfinite(plan.variance).all())


class LedLane:
    """What is carried for one range of paths: the last weight, the sums of squared weights and of products, by path.

    `whole`: the paths whose ranks are given all values before.
    """

    def __init__(self, paths: int, first_path: int):
        self.first_path = first_path
        self.weight, self.squares, self.total = np.zeros((3, paths))
        self.whole = np.zeros(paths, dtype=bool)


class LedSums:
    """Products of scores g and weights w, stopped where the sum of squared weights is as stated; mergeable."""

    def __init__(self, theory: Any, steps: int, salt: str):
        self.theory, self.salt, self.steps = theory, salt, steps
        self.wanted = SHARE * (steps - 1)
        self.sums = np.zeros(2)  # paths, products

    def lane(self, paths: int, first_path: int = 0) -> LedLane:
        return LedLane(paths, first_path)

    def absorb(self, x: NDArray, g: NDArray, first_step: int, lane: LedLane) -> None:
        """Add a tile of values, (steps, paths), and the normal scores of the last steps of it."""
        at = np.arange(first_step, first_step + len(x))
        mean, variance = self.theory.mean(at)[:, None], self.theory.variance(at)[:, None]
        with np.errstate(divide="ignore", invalid="ignore"):
            scaled = np.clip((x - mean) / np.sqrt(variance), -CLIP, CLIP)
        weights = np.concatenate([lane.weight[None], np.where(np.isfinite(scaled), scaled, 0.0)])
        lane.weight = weights[-1]
        scores = np.full(x.shape, np.nan)
        scores[len(x) - len(g) :] = g
        known = np.isfinite(scores)
        if first_step == 0:
            lane.whole = known[0].copy()
        used = np.where(known, weights[:-1], 0.0)
        squares = np.minimum(np.add.accumulate(np.concatenate([lane.squares[None], used * used])), self.wanted)
        products = np.copysign(np.sqrt(np.diff(squares, axis=0)), used) * np.where(known, scores, 0.0)
        lane.squares = squares[-1]
        lane.total = np.add.accumulate(np.concatenate([lane.total[None], products]))[-1]

    def finish(self, lane: LedLane) -> None:
        """Close a range of paths; what a path lacks is filled."""
        from scipy.special import ndtri

        paths = len(lane.total)
        fill = ndtri(dither(lane.first_path, paths, self.steps, 1, self.salt)[0] + 0.5)
        whole = lane.total + np.sqrt(np.maximum(self.wanted - lane.squares, 0.0)) * fill
        self.sums += across(np.array([lane.whole.astype(float), np.where(lane.whole, whole, 0.0)]))

    def merge(self, other: LedSums) -> None:
        self.sums += other.sums

    def checks(self, series: str) -> Iterator[Check]:
        n = float(self.sums[0]) * self.wanted
        if n > 0.0:
            finding = judge.unit(float(self.sums[1]) / math.sqrt(n), 1.0 / math.sqrt(n))
            yield Check.of(series, LED, "all steps", "memory", finding)
