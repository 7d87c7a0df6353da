"""The slope of a series with a long memory: how its spectrum rises towards 0, against the stated rise.

Coefficients at the lowest frequencies, of block averages over the whole length, are divided by their stated spread.
Where the memory parameter is d + δ, their squares are about 1 − 2 δ log j, but for a factor: the weights log j less
their mean turn them into an estimate of δ that knows no factor, as the score of the local Whittle likelihood does
(Künsch 1987; Robinson 1995, Ann. Statist. 23, 1630–1661). For a Gaussian series the estimate is a quadratic form in
normals, whose law is exact (see `judge.quadratic`).
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge
from procgen.checks.blocks import across
from procgen.checks.judge import Sample
from procgen.checks.verdict import Check
from procgen.spec.records import dataclass

LONGEST = 1 << 13  # steps, the last ones of a series
BLOCKS = 512  # averages of as many steps each
FREQUENCIES = 64
FEWEST = 64  # blocks


@dataclass
class Slow:
    """Coefficients of averages over `count` blocks of `size` steps from step `first` on."""

    d: float  # the memory parameter that is stated
    first: int
    size: int
    count: int
    mean: NDArray  # of the steps
    waves: NDArray  # (2 · frequencies, count): cosines and sines, each divided by its stated spread
    weights: NDArray  # of the squared coefficients
    eigenvalues: NDArray  # of the weighted sum of squares as a quadratic form in independent normals

    @property
    def probe(self) -> str:
        steps = self.size * self.count
        return f"periods of {steps // (len(self.waves) // 2)}–{steps} steps"

    def estimate(self, blocks: NDArray) -> NDArray:
        """The estimate of δ for each path, from its block averages less their mean, (count, paths)."""
        z = np.zeros((len(self.waves), blocks.shape[1]))
        for wave, block in zip(self.waves.T, blocks, strict=True):  # no product of matrices: paths must not share bits
            z += wave[:, None] * block
        return across((self.weights[:, None] * z * z).T)

    def check(self, name: str, sample: Sample) -> Iterator[Check]:
        """The slope over all paths; `sample` are the estimates of δ."""
        if sample.n:
            finding = judge.quadratic(self.d + sample.mean, self.eigenvalues, sample.n, self.d)
            yield Check.of(name, "long-memory slope", self.probe, "memory", finding)


def plan_slow(theory: Any, steps: int, noise: float) -> Slow | None:
    """How the long memory of a Gaussian stationary series is looked at; None where there is none to be seen.

    `noise` is the variance that rounding adds.
    """
    d = long_memory(theory)
    if not d or not theory.gaussian or not theory.stationarity.covariance_stationary:
        return None
    size = max(1, min(steps, LONGEST) // BLOCKS)
    count = min(steps, LONGEST) // size
    if count < FEWEST:
        return None
    first = steps - size * count
    gamma = _of_blocks(theory, size, count)
    if gamma is None:
        return None
    gamma[0] += noise / size
    at = np.arange(count)
    j = np.arange(1, min(FREQUENCIES, count // 4) + 1)
    turns = 2.0 * np.pi * j[:, None] * (at + 0.5) / count
    waves = np.concatenate([np.cos(turns), np.sin(turns)])
    joint = waves @ gamma[np.abs(at[:, None] - at)] @ waves.T
    spread = np.sqrt(np.diag(joint))
    waves, joint = waves / spread[:, None], joint / np.outer(spread, spread)
    slope = np.log(j) - np.mean(np.log(j))
    weights = np.tile(-slope / (4.0 * float(slope @ slope)), 2)
    values, vectors = np.linalg.eigh(0.5 * (joint + joint.T))
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    eigenvalues = np.linalg.eigvalsh(root.T @ (weights[:, None] * root))
    return Slow(d, first, size, count, theory.mean(np.arange(first, steps)), waves, weights, eigenvalues)


def long_memory(theory: Any) -> float:
    """The memory parameter d of what remembers longest in a series; 0 where all forget at a geometric rate."""
    expression = getattr(theory, "expression", None)
    found = [getattr(source.detail, "long_memory", 0.0) for source in getattr(expression, "sources", ())]
    return max(found, key=abs, default=0.0)


def _of_blocks(theory: Any, size: int, count: int) -> NDArray | None:
    """Autocovariances of averages over blocks that follow each other, at 0 to count - 1 blocks."""
    gamma = theory.autocovariance(np.arange(size * count))
    if gamma is None:
        return None
    apart = np.arange(1 - size, size)
    lags = np.abs(size * np.arange(count)[:, None] + apart)
    share = (size - np.abs(apart)) / size**2
    return np.where(lags < len(gamma), gamma[np.minimum(lags, len(gamma) - 1)], 0.0) @ share


class SlowLane:
    """The block sums of one range of paths."""

    def __init__(self, slow: Slow, paths: int):
        self.slow, self.sums = slow, np.zeros((slow.count, paths))

    def absorb(self, x: NDArray, step: int) -> None:
        """Add a tile (steps, paths)."""
        slow, start = self.slow, max(self.slow.first - step, 0)
        if start >= len(x):
            return
        at = step + start - slow.first
        rows = x[start:] - slow.mean[at : at + len(x) - start, None]
        if slow.size == 1:
            self.sums[at : at + len(rows)] = rows
            return
        for k, row in enumerate(rows, start=at):  # one by one, so that a cut into tiles does not show
            self.sums[k // slow.size] += row

    def averages(self) -> NDArray:
        """The estimate of each path, (paths,)."""
        return self.slow.estimate(self.sums / self.slow.size)
