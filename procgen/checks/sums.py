"""Mergeable sums over paths: moments of the values at probes, and powers of whatever is averaged along a path."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

KEPT = 20_000  # paths whose values at probes are kept for tests of a known law


class Moments:
    """Count, mean and scatter matrix of vectors (paths, size), merged without loss (Chan, Golub & LeVeque 1983)."""

    def __init__(self, size: int):
        self.n = 0
        self.mean = np.zeros(size)
        self.scatter = np.zeros((size, size))

    def absorb(self, rows: NDArray) -> None:
        if not len(rows):
            return
        mean = rows.mean(axis=0)
        centred = rows - mean
        self._add(len(rows), mean, centred.T @ centred)

    def merge(self, other: Moments) -> None:
        if other.n:
            self._add(other.n, other.mean, other.scatter)

    def _add(self, n: int, mean: NDArray, scatter: NDArray) -> None:
        total = self.n + n
        step = mean - self.mean
        self.scatter += scatter + np.outer(step, step) * (self.n * n / total)
        self.mean += step * (n / total)
        self.n = total

    def covariance(self, i: int, j: int) -> float:
        """Sample covariance with n - 1 in the denominator."""
        return float(self.scatter[i, j]) / (self.n - 1)


class Powers:
    """Sums of the first four powers of statistics (paths, size), NaN rows left out, and neighbouring products."""

    def __init__(self, size: int):
        self.n = np.zeros(size, dtype=np.int64)
        self.sums = np.zeros((4, size))
        self.pairs = np.zeros((2, size))  # neighbours: their number, the sum of their products

    def absorb(self, rows: NDArray) -> None:
        known = np.isfinite(rows)
        self.n += known.sum(axis=0)
        rows = np.where(known, rows, 0.0)
        power = rows
        for k in range(4):
            self.sums[k] += power.sum(axis=0)
            power = power * rows
        self.pairs[0] += (known[1:] & known[:-1]).sum(axis=0)
        self.pairs[1] += (rows[1:] * rows[:-1]).sum(axis=0)

    def merge(self, other: Powers) -> None:
        self.n += other.n
        self.sums += other.sums
        self.pairs += other.pairs


@dataclass
class Kept:
    """Values of the first KEPT paths at each of some probes."""

    size: int

    def __post_init__(self) -> None:
        self.rows: list[tuple[int, NDArray]] = []
        self.count = 0

    def absorb(self, first_path: int, rows: NDArray) -> None:
        if self.count < KEPT and self.size:
            rows = rows[: KEPT - self.count]
            self.rows.append((first_path, rows.copy()))
            self.count += len(rows)

    def merge(self, other: Kept) -> None:
        self.rows = sorted(self.rows + other.rows, key=lambda item: item[0])
        self.count += other.count

    def values(self) -> NDArray:
        """(paths, size), paths with a value that is not finite left out."""
        if not self.rows:
            return np.zeros((0, self.size))
        rows = np.concatenate([rows for _, rows in self.rows])
        return rows[np.isfinite(rows).all(axis=1)]
