"""Prediction errors whose law is not known: of a linear series with shocks that are not normal.

The Kalman filter's one-step errors are then still of mean 0, of the stated variance, and uncorrelated (they are
linear projections), whatever the law. Each path gives one average of each; their spread over paths gives the error.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import Window, add_lagged, add_products
from procgen.checks.judge import FEW_PATHS, Sample, sample_mean
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check

LAGS = (1, 2, 3, 5)
_WHAT = (("mean", "level"), ("variance", "spread"), *[("autocorrelation", "memory")] * len(LAGS))


class ErrorLane:
    """What is carried for one range of paths: sums by path, the last rows, and which of them held errors."""

    def __init__(self, paths: int):
        self.sums = np.zeros((len(_WHAT), paths))
        self.counts = np.zeros(len(_WHAT))
        self.beside = np.zeros(paths - 1)  # products with the left neighbour
        self.rows, self.known = Window(max(LAGS), paths), Window(max(LAGS), 1)
        self.length = np.zeros(paths, dtype=np.int64)


class ErrorSums:
    """Powers of the averages by path; mergeable."""

    def __init__(self) -> None:
        self.powers = Powers(len(_WHAT))
        self.beside = Powers(1)

    def lane(self, paths: int) -> ErrorLane:
        return ErrorLane(paths)

    def absorb(self, z: NDArray, lane: ErrorLane) -> None:
        """Add a tile (steps, paths) of standardised errors; rows that theory calls constant are NaN throughout."""
        finite = np.isfinite(z)
        known = finite.any(axis=1)
        lane.length += np.count_nonzero(finite, axis=0)
        add_products(lane.sums[0], z)
        add_products(lane.sums[1], z, z)
        lane.counts[:2] += np.count_nonzero(known)
        rows, flags = lane.rows.push(z), lane.known.push(known[:, None])
        for k, lag in enumerate(LAGS, start=2):
            add_lagged(lane.sums[k], rows, rows, lag, len(z))
            count = min(len(z), len(flags) - lag)
            if count > 0:
                lane.counts[k] += float((flags[-count:] * flags[len(flags) - lag - count : len(flags) - lag]).sum())
        if len(lane.beside):
            add_products(lane.beside, z[:, 1:], z[:, :-1])

    def finish(self, lane: ErrorLane) -> None:
        """Close a range of paths; one with an error too few is left out."""
        if lane.counts[0]:
            whole = lane.length == lane.counts[0]
            sums = np.where(whole, lane.sums, np.nan)
            sums[1] -= lane.counts[1]
            self.powers.absorb((sums / np.maximum(lane.counts, 1)[:, None]).T)
            beside = np.where(whole[1:] & whole[:-1], lane.beside, np.nan)
            self.beside.absorb(beside[::2, None] / lane.counts[0])  # disjoint pairs

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
