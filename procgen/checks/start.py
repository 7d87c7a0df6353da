"""Whether a series starts as it goes on: the sizes of its first values beside those of its last, path by path.

Where the law of a value is not known, and has no moments enough for the variance at a step to be judged, the mean of a
bounded function of the deviations can be: in a strictly stationary series it is the same at all steps, whatever it is.
The difference of two such means is bounded, and changes its sign where first and last change places: it is not skewed
where these are far apart.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.judge import FEW_PATHS, Sample
from procgen.checks.verdict import Check
from procgen.checks.words import START

BLOCK = 2  # probes at each end, which are the first and the last steps
_APART = 8  # blocks, at least, that a path must hold


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
