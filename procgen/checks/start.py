"""Whether a series starts as it goes on: the sizes of its first values beside those of its last, path by path.

Where the law of a value is not known, and has no moments enough for the variance at a step to be judged, the mean of a
bounded function of the deviations can be: in a strictly stationary series it is the same at all steps, whatever it is.
The difference of two such means is bounded, and changes its sign where first and last change places: it is not skewed
where these are far apart. A start from one variance in place of the law of variances shows in how far paths are apart.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.judge import FEW_PATHS, Sample
from procgen.checks.verdict import Check
from procgen.checks.words import SCATTER, START

BLOCK = 2  # probes at each end, which are the first and the last steps
_APART = 8  # blocks, at least, that a path must hold
_STRETCH, _SHORTEST = 12, 4  # steps over which squares are averaged
_LATER = 4  # stretches of the end that are set against the first one
_FINE = 0.1  # grain over sd up to which rounding leaves small mean squares as they are


def comparable(plan: Any, steps: int) -> bool:
    """Whether the start of a series (its plan) can be judged so, and is not by its law or by exact moments."""
    known = plan.unknown or 0 in plan.scores or plan.gaussian
    if known or steps < _APART * BLOCK or not plan.theory.stationarity.strict_deviations:
        return False
    return bool(np.isfinite(plan.variance[0]) and plan.drawn[0] > 0)


def differences(deviations: NDArray, variance: float) -> NDArray:
    """(paths,) of deviations (paths, probes): the mean size of the first ones less that of the last, in (−1, 1)."""
    square = np.square(deviations[:, [*range(BLOCK), *range(-BLOCK, 0)]]) / variance
    size = square / (1.0 + square)
    return (size[:, :BLOCK] - size[:, BLOCK:]).mean(axis=1)


def start_checks(series: str, steps: NDArray, sample: Sample) -> Iterator[Check]:
    """The check of these differences, where there are paths enough."""
    if sample.n < FEW_PATHS or not sample.sd > 0.0:
        return
    probe = f"steps {steps[0]}–{steps[BLOCK - 1]} beside {steps[-BLOCK]}–{steps[-1]}"
    yield Check.of(series, START, probe, "spread", judge.sample_mean(sample, 0.0))


class Early:
    """Mean squares of a series over its first steps and over later ones, path by path: as much apart as later on?

    Where the variance of each path moves, its mean square over some steps differs from path to path by more than chance
    alone; of paths that all start with one variance it does not, until that has moved. l²/(1 + l²) of the logarithms l
    of mean squares, in stated variances, has the same mean at all steps of a strictly stationary series.
    """

    def __init__(self, plan: Any, steps: int, paths: int):
        self.at, self.width = stretches(steps)
        self.variance = float(plan.variance[0])
        self.mean = [plan.theory.mean(first + np.arange(self.width)) for first in self.at]
        self.squares = np.zeros((len(self.at), paths))

    def absorb(self, x: NDArray, step: int) -> None:
        """Add the next steps (steps, paths), one by one: cuts between tiles leave no trace."""
        for k, first in enumerate(self.at):
            for t in range(max(first, step), min(first + self.width, step + len(x))):
                self.squares[k] += np.square(x[t - step] - self.mean[k][t - first])

    def differences(self) -> NDArray:
        """(paths,): of the first steps less the mean of the later ones."""
        apart = from_one(self.squares / (self.width * self.variance))
        return apart[0] - apart[1:].mean(axis=0)


def from_one(mean_squares: NDArray) -> NDArray:
    """How far mean squares in stated variances are from 1: l²/(1 + l²) of their logarithms l, from 0 to 1."""
    with np.errstate(divide="ignore"):
        return 1.0 - 1.0 / (1.0 + np.square(np.log(mean_squares)))


def stretches(steps: int) -> tuple[list[int], int]:
    """Where the stretches of steps that are compared begin, the first one and later ones, and how long they are."""
    width = min(_STRETCH, steps // (2 * _APART))
    return [0, *(steps - width - 2 * width * k for k in range(_LATER))], width


def told_apart(plan: Any, steps: int) -> bool:
    """Whether the scatter of the start of a series can be judged: where its size can, and a stretch has some steps."""
    known = comparable(plan, steps) and stretches(steps)[1] >= _SHORTEST
    return known and bool(plan.grain <= _FINE * plan.variance[0] ** 0.5)


def scatter_checks(series: str, steps: int, sample: Sample) -> Iterator[Check]:
    """The check of these differences, where there are paths enough."""
    if sample.n < FEW_PATHS or not sample.sd > 0.0:
        return
    at, width = stretches(steps)
    probe = f"steps 0–{width - 1} beside later ones from {min(at[1:])} on"
    yield Check.of(series, SCATTER, probe, "spread", judge.sample_mean(sample, 0.0))
