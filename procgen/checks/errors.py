"""Prediction errors whose law is not known: of a linear series with shocks that are not normal.

The Kalman filter's one-step errors are then still of mean 0, of the stated variance, and uncorrelated (they are
linear projections), whatever the law. Each path gives one average of each; their spread over paths gives the error.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from procgen.checks.judge import FEW_PATHS, Sample, sample_mean
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check

LAGS = (1, 2, 3, 5)
_WHAT = (("mean", "level"), ("variance", "spread"), *[("autocorrelation", "memory")] * len(LAGS))


@dataclass
class ErrorLane:
    """What is carried for one range of paths: sums by path, and the last rows."""

    sums: NDArray  # (2 + lags, paths)
    counts: NDArray  # (2 + lags,)
    beside: NDArray  # products of disjoint pairs of neighbours, (paths // 2,)
    rows: NDArray

    @classmethod
    def start(cls, paths: int) -> ErrorLane:
        return cls(np.zeros((len(_WHAT), paths)), np.zeros(len(_WHAT)), np.zeros(paths // 2), np.zeros((0, paths)))


class ErrorSums:
    """Powers of the averages by path; mergeable."""

    def __init__(self) -> None:
        self.powers = Powers(len(_WHAT))
        self.beside = Powers(1)

    def absorb(self, z: NDArray, lane: ErrorLane) -> None:
        """Add a tile (steps, paths) of standardised errors; rows that theory calls constant are NaN throughout."""
        z = z[~np.isnan(z).all(axis=1)]
        if not len(z):
            return
        past = len(lane.rows)
        rows = np.concatenate([lane.rows, z])
        lane.sums[0] += z.sum(axis=0)
        lane.sums[1] += np.einsum("tp,tp->p", z, z) - len(z)
        lane.counts[:2] += len(z)
        for k, lag in enumerate(LAGS, start=2):
            first = max(past, lag)
            if first < len(rows):
                lane.sums[k] += np.einsum("tp,tp->p", rows[first:], rows[first - lag : len(rows) - lag])
                lane.counts[k] += len(rows) - first
        pairs = 2 * len(lane.beside)
        lane.beside += np.einsum("tp,tp->p", z[:, 0:pairs:2], z[:, 1:pairs:2])
        lane.rows = rows[max(0, len(rows) - max(LAGS)) :].copy()

    def finish(self, lane: ErrorLane) -> None:
        """Close a range of paths."""
        if lane.counts[0]:
            self.powers.absorb((lane.sums / np.maximum(lane.counts, 1)[:, None]).T)
            self.beside.absorb(lane.beside[:, None] / lane.counts[0])

    def merge(self, other: ErrorSums) -> None:
        self.powers.merge(other.powers)
        self.beside.merge(other.beside)

    def checks(self, series: str, highest: float) -> Iterator[Check]:
        """Mean, variance and whiteness of the errors, and independence of neighbouring paths."""
        for k, (what, kind) in enumerate(_WHAT):
            probe = f"lag {LAGS[k - 2]}" if k > 1 else "all steps"
            yield _check(series, what, probe, kind, self.powers, k, float(k == 1), highest)
        yield _check(series, "neighbouring paths", "pairs", "dependence", self.beside, 0, 0.0, highest)


def _check(
    series: str, what: str, probe: str, kind: str, powers: Powers, k: int, theory: float, highest: float
) -> Check:
    what = f"prediction errors: {what}"
    n = int(powers.n[k])
    order = 1 if kind == "level" else 2
    if n < FEW_PATHS:
        note = f"only {n} paths, and the law of the errors is not known"
        return Check(series, what, probe, kind, theory, outcome="reported", note=note)
    sample = Sample.from_powers(n, powers.sums[:, k].tolist())
    if not highest > 3 * order or sample.sd == 0.0:
        note = f"moments are known to exist only below order {highest:g}: no central limit theorem reaches far enough"
        return Check(series, what, probe, kind, theory, theory + sample.mean, outcome="untestable", note=note)
    return Check.of(series, what, probe, kind, sample_mean(sample, theory))
