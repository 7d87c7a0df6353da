"""Mergeable sums over paths: moments of the values at probes, and powers of whatever is averaged along a path.

All are made so that the sums of a range of paths are those of its left half merged with those of its right half,
bit for bit (see `blocks`).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import GROUP, across, compiled, down, in_one_pass

_TOGETHER = 64  # pairs of places whose products are made at once
KEPT = 20_000  # paths whose values at probes are kept for tests of a known law


class Moments:
    """Count, mean and scatter of vectors (paths, size), merged without loss (Chan, Golub & LeVeque 1983).

    The scatter is kept for the `pairs` of places (i, j), i ≤ j; (i, i) must be among them.
    """

    def __init__(self, size: int, pairs: Sequence[tuple[int, int]] | None = None):
        pairs = [(i, j) for i in range(size) for j in range(i, size)] if pairs is None else pairs
        self.pairs = {pair: k for k, pair in enumerate(pairs)}
        self._i, self._j = (np.array([pair[side] for pair in self.pairs], dtype=np.intp) for side in (0, 1))
        self.n = 0
        self.mean = np.zeros(size)
        self.products = np.zeros(len(self.pairs))

    def absorb(self, rows: NDArray) -> None:
        """Add vectors (paths, size); one with an element that is not finite is left out."""
        groups = len(rows) // GROUP if len(rows) % GROUP == 0 else 1
        if compiled(len(rows)) and len(rows) // groups == GROUP:
            self._compiled(np.ascontiguousarray(rows, float), groups)
            return
        known = np.isfinite(rows).all(axis=1)
        rows = np.where(known[:, None], rows, 0.0).reshape(groups, -1, len(self.mean))
        known = known.reshape(groups, -1)
        n = known.sum(axis=1)
        mean = across(rows.transpose(0, 2, 1)) / np.maximum(n, 1)[:, None]
        centred = np.where(known[:, :, None], rows - mean[:, None, :], 0.0).transpose(2, 0, 1)
        at = range(0, len(self.pairs), _TOGETHER)
        sums = [across(centred[self._i[k : k + _TOGETHER]] * centred[self._j[k : k + _TOGETHER]]) for k in at]
        products = np.concatenate([np.zeros((0, groups)), *sums]).T
        while len(n) > 1:
            if len(n) % 2:
                n, mean, products = (np.concatenate([x, np.zeros_like(x[:1])]) for x in (n, mean, products))
            n, mean, products = self._joined(n[0::2], mean[0::2], products[0::2], n[1::2], mean[1::2], products[1::2])
        self._add(n, mean, products)

    @np.errstate(over="ignore", invalid="ignore")
    def _compiled(self, rows: NDArray, groups: int) -> None:
        places, room = groups.bit_length() + 1, np.empty((GROUP, len(self.mean) + 1))
        n, mean = np.zeros(places, dtype=np.int64), np.zeros((places, len(self.mean)))
        products = np.zeros((places, len(self.pairs)))
        in_one_pass("scattered", rows, self._i, self._j, GROUP, n, mean, products, room)
        self._add(n[:1], mean[:1], products[:1])

    def merge(self, other: Moments) -> None:
        self._add(np.array([other.n]), other.mean[None], other.products[None])

    def _add(self, n: NDArray, mean: NDArray, products: NDArray) -> None:
        total, means, sums = self._joined(np.array([self.n]), self.mean[None], self.products[None], n, mean, products)
        self.n, self.mean, self.products = int(total[0]), means[0], sums[0]

    @np.errstate(over="ignore", invalid="ignore")
    def _joined(
        self, n: NDArray, mean: NDArray, products: NDArray, m: NDArray, others: NDArray, more: NDArray
    ) -> tuple[NDArray, NDArray, NDArray]:
        """Both sides together, row by row."""
        total = n + m
        share = (m / np.maximum(total, 1))[:, None]
        step = np.where((n > 0)[:, None], others - mean, others)
        weight = n[:, None] * share
        products = products + (more + step[:, self._i] * step[:, self._j] * weight)
        means = np.where((n > 0)[:, None], mean + step * share, np.where((m > 0)[:, None], others, mean))
        return total, means, products

    def covariance(self, i: int, j: int) -> float:
        """Sample covariance with n - 1 in the denominator."""
        return float(self.products[self.pairs[min(i, j), max(i, j)]]) / (self.n - 1)

    @property
    def scatter(self) -> dict[tuple[int, int], float]:
        """Sums over the paths of the products of the deviations from the means, by pair of places."""
        return dict(zip(self.pairs, self.products.tolist(), strict=True))


class Powers:
    """Sums of the first four powers of statistics (paths, size), NaN left out, and neighbouring products."""

    def __init__(self, size: int):
        self.n = np.zeros(size, dtype=np.int64)
        self.sums = np.zeros((4, size))
        self.pairs = np.zeros((2, size))  # neighbours: their number, the sum of their products
        self.ends = np.full((2, size), np.nan)  # the first path and the last one
        self.paths = 0

    @np.errstate(over="ignore", invalid="ignore")  # of wide laws powers overflow: they are not judged
    def absorb(self, rows: NDArray) -> None:
        """Add statistics (paths, size) of the paths that follow."""
        if not rows.size:
            return
        part = Powers(len(self.n))
        known = np.isfinite(rows)
        part.n += known.sum(axis=0)
        part.paths = len(rows)
        if compiled(len(rows)):
            rows, room = np.ascontiguousarray(rows, float), np.empty((len(rows).bit_length(), 6, len(self.n)))
            in_one_pass("powers", rows, part.sums, part.pairs, room)
            part.ends = np.where(known[[0, -1]], rows[[0, -1]], np.nan)
            if len(rows).bit_count() > 1:
                part.ends[1] = np.nan
        else:
            values = np.where(known, rows, 0.0)
            powers = np.empty((len(rows), 4, len(self.n)))
            powers[:, 0] = values
            for k in range(3):
                np.multiply(powers[:, k], values, out=powers[:, k + 1])
            part.sums = down(powers)
            part.pairs, part.ends = _neighbours(np.where(known, rows, np.nan))
        self.merge(part)

    @np.errstate(over="ignore", invalid="ignore")
    def merge(self, other: Powers) -> None:
        """Add the sums of the paths that follow."""
        self.n += other.n
        self.sums += other.sums
        self.pairs += other.pairs
        self.pairs += _beside(self.ends[1], other.ends[0])
        if other.paths:
            self.ends = np.array([self.ends[0] if self.paths else other.ends[0], other.ends[1]])
        self.paths += other.paths


def _beside(left: NDArray, right: NDArray) -> NDArray:
    """Number and sum of the products of neighbours."""
    product = left * right
    known = np.isfinite(product)
    return np.array([known.astype(float), np.where(known, product, 0.0)])


def _neighbours(rows: NDArray) -> tuple[NDArray, NDArray]:
    """Pairs within (paths, size), joined by halves, and the outer rows of all that is joined."""
    beside = _beside(rows[:-1], rows[1:])
    pairs, width = np.zeros((2, *rows.shape)), 1
    while pairs.shape[1] > 1:
        if pairs.shape[1] % 2:
            pairs = np.concatenate([pairs, np.zeros((2, 1, rows.shape[1]))], axis=1)
        pairs = pairs[:, 0::2] + pairs[:, 1::2]
        between = beside[:, width - 1 :: 2 * width]  # the last row of the left half of each, and the next one
        pairs[:, : between.shape[1]] += between
        width *= 2
    return pairs[:, 0], np.array([rows[0], rows[-1] if width == len(rows) else np.full(rows.shape[1], np.nan)])


class Kept:
    """Values of the first KEPT paths at each of some probes."""

    def __init__(self, size: int):
        self.rows = np.zeros((0, size))
        self._asked: tuple[Sequence[int], NDArray, NDArray] | None = None  # places, all rows, and what was found

    def absorb(self, rows: NDArray) -> None:
        """Add the values (paths, size) of the paths that follow."""
        if len(self.rows) < KEPT and rows.shape[1]:
            self.rows = np.concatenate([self.rows, rows[: KEPT - len(self.rows)]])

    def merge(self, other: Kept) -> None:
        """Add those of the paths that follow."""
        self.absorb(other.rows)

    def values(self, places: Sequence[int]) -> NDArray:
        """(paths, size), paths left out where a value at one of the places is not finite."""
        if self._asked is None or self._asked[0] != places or self._asked[1] is not self.rows:
            self._asked = places, self.rows, self.rows[np.isfinite(self.rows[:, places]).all(axis=1)]
        return self._asked[2]
