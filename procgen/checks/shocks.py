"""Sums over the recovered shocks of one series: one pass, mergeable, memory free of the number of steps and paths.

Tiles are (steps, paths). A :class:`ShockLane` carries what the next tile of the same paths needs.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from procgen.checks.scores import BINS, Scores, bin_counts, cluster_scores

MEMORY_LAGS = (1, 2, 3, 4, 5, 6, 8, 12)
CLUSTER_LAGS = (1, 2, 3, 5)
PROFILE = 65_536  # longest profile over steps; longer series share its entries


@dataclass
class ShockLane:
    """What is carried from tile to tile for one range of paths."""

    scores: NDArray  # the last rows of the normal scores, (at most the longest lag, paths)
    clusters: NDArray  # of the cluster scores, as many
    total: NDArray  # per path: sum of scores
    square: NDArray  # per path: sum of squared scores
    length: int = 0

    @classmethod
    def start(cls, paths: int) -> ShockLane:
        return cls(np.zeros((0, paths)), np.zeros((0, paths)), np.zeros(paths), np.zeros(paths))

    def only(self, usable: NDArray) -> ShockLane:
        """The lane of some of the paths."""
        return ShockLane(
            self.scores[:, usable], self.clusters[:, usable], self.total[usable], self.square[usable], self.length
        )

    def put_back(self, part: ShockLane, usable: NDArray) -> None:
        """Take over what `only` gave; the other paths are broken, and are left out of the sums by path."""
        for name in ("scores", "clusters"):
            rows = np.full((len(getattr(part, name)), len(usable)), np.nan)
            rows[:, usable] = getattr(part, name)
            setattr(self, name, rows)
        self.total[usable], self.square[usable], self.length = part.total, part.square, part.length
        self.total[~usable] = np.nan


@dataclass
class ShockSums:
    """Everything that the tests of recovered shocks read.

    Parameters
    ----------
    scores : Scores
        Of the law of the shocks.
    steps : int
        Steps of the whole series, for the profile along steps.
    lags : sequence of int
        Lags at which the memory of the scores is summed.
    period : int, optional
        Steps after which the series' season repeats.
    """

    scores: Scores
    steps: int
    lags: tuple[int, ...] = MEMORY_LAGS
    period: int | None = None
    n: int = 0
    sums: NDArray = field(default_factory=lambda: np.zeros(2))  # sums of z and z²
    counts: NDArray = field(default_factory=lambda: np.zeros(BINS, dtype=np.int64))
    chains: Counter[int] = field(default_factory=Counter)  # length of a path's run of shocks -> paths
    rows: Counter[int] = field(default_factory=Counter)  # paths side by side in a tile -> steps
    neighbours: float = 0.0
    paths: NDArray = field(default_factory=lambda: np.zeros(5))  # number, sums of level², spread², level, spread
    unusable: int = 0
    outside: int = 0  # shocks where the law has none

    def __post_init__(self) -> None:
        self.width = -(-self.steps // PROFILE)
        bins = -(-self.steps // self.width)
        self.profile = np.zeros((3, bins))  # count, sum, sum of squares of the scores by step
        self.memory = np.zeros((2, len(self.lags)))  # pairs, sum of products
        self.cluster = np.zeros((2, len(CLUSTER_LAGS)))
        self.asymmetry = np.zeros(2)

    def absorb(self, z: NDArray, first_step: int, lane: ShockLane) -> NDArray:
        """Add the shocks of a tile; returns their normal scores, NaN where there is no shock."""
        known = np.isfinite(z)
        usable = known.any(axis=0)
        first = int(np.argmax(known[:, usable].all(axis=1))) if usable.any() else len(z)
        g = np.full(z.shape, np.nan)
        if not usable.any() or not known[first:, usable].all():
            usable = known[first:].all(axis=0)
            self.unusable += int(np.count_nonzero(~usable & known.any(axis=0)))
        if usable.all():
            g[first:] = self._add(z[first:], first_step + first, lane)
            return g
        part = lane.only(usable)
        g[first:, usable] = self._add(z[first:][:, usable], first_step + first, part)
        lane.put_back(part, usable)
        return g

    def _add(self, z: NDArray, first_step: int, lane: ShockLane) -> NDArray:
        from scipy.special import ndtr

        if z.size == 0:
            return z
        z = np.ascontiguousarray(z)
        self.outside += self.scores.outside(z)
        g = self.scores.normal_scores(z)
        u = ndtr(g)
        self.n += z.size
        self.sums += z.sum(), np.einsum("tp,tp->", z, z)
        self.counts += bin_counts(u)
        self._along(g, cluster_scores(u), lane)
        self._across(g, first_step)
        lane.total += g.sum(axis=0)
        lane.square += np.einsum("tp,tp->p", g, g)
        lane.length += len(g)
        return g

    def _along(self, g: NDArray, clusters: NDArray, lane: ShockLane) -> None:
        """Products with earlier steps of the same path."""
        past = len(lane.scores)
        rows = np.concatenate([lane.scores, g]) if past else g
        clusters = np.concatenate([lane.clusters, clusters]) if past else clusters
        for i, lag in enumerate(self.lags):
            self.memory[:, i] += _products(rows, rows, lag, past)
        for i, lag in enumerate(CLUSTER_LAGS):
            self.cluster[:, i] += _products(clusters, clusters, lag, past)
        self.asymmetry += _products(clusters, rows, 1, past)
        keep = max(0, len(rows) - max(self.lags))
        lane.scores, lane.clusters = rows[keep:].copy(), clusters[keep:].copy()

    def _across(self, g: NDArray, first_step: int) -> None:
        """Profile by step, and products with the neighbouring path."""
        at = (first_step + np.arange(len(g))) // self.width
        for row, values in enumerate((np.full(len(g), float(g.shape[1])), g.sum(axis=1), np.einsum("tp,tp->t", g, g))):
            np.add.at(self.profile[row], at, values)
        if g.shape[1] > 1:
            self.neighbours += float(np.einsum("tp,tp->", g[:, 1:], g[:, :-1]))
            self.rows[g.shape[1]] += len(g)

    def finish(self, lane: ShockLane) -> None:
        """Close a range of paths whose last step has been absorbed."""
        from scipy.special import chdtr, ndtri

        if not lane.length:
            return
        n = lane.length
        usable = np.isfinite(lane.total)
        count = int(np.count_nonzero(usable))
        self.chains[n] += count
        level = lane.total[usable] / np.sqrt(n)
        spread = ndtri(np.clip(chdtr(n, lane.square[usable]), 1e-300, 1 - 1e-16))
        self.paths += count, float(level @ level), float(spread @ spread), float(level.sum()), float(spread.sum())

    def merge(self, other: ShockSums) -> None:
        """Add the sums of other paths."""
        self.n += other.n
        self.neighbours += other.neighbours
        self.unusable += other.unusable
        self.outside += other.outside
        self.chains.update(other.chains)
        self.rows.update(other.rows)
        for name in ("sums", "counts", "paths", "profile", "memory", "cluster", "asymmetry"):
            getattr(self, name)[...] += getattr(other, name)


def _products(later: NDArray, earlier: NDArray, lag: int, past: int) -> tuple[float, float]:
    """(pairs, sum) of later[t] * earlier[t - lag] over the rows behind the `past` ones carried over."""
    start = max(past, lag)
    if start >= len(later):
        return 0.0, 0.0
    a, b = later[start:], earlier[start - lag : len(earlier) - lag]
    return float(a.size), float(np.einsum("i,i->", a.ravel(), b.ravel()))


class CrossSums:
    """Products of the normal scores of two series at several lags.

    ``sums[lag]`` pairs series `a` at step t with series `b` at step t - lag.
    """

    def __init__(self, lags: tuple[int, ...] = (-2, -1, 0, 1, 2)):
        self.lags = lags
        self.sums = {lag: np.zeros(2) for lag in lags}

    def absorb(self, a: NDArray, b: NDArray, carry: tuple[NDArray, NDArray] | None) -> tuple[NDArray, NDArray]:
        """Add a tile of both, (steps, paths), NaN where unknown; returns what to carry to the next tile."""
        reach = max(abs(lag) for lag in self.lags)
        past = 0
        if carry is not None:
            past = len(carry[0])
            a, b = np.concatenate([carry[0], a]), np.concatenate([carry[1], b])
        whole = np.isfinite(a).all() and np.isfinite(b).all()
        for lag in self.lags:
            later, earlier = (a, b) if lag >= 0 else (b, a)
            if whole:
                self.sums[lag] += _products(later, earlier, abs(lag), past)
            else:
                self.sums[lag] += _known_products(later, earlier, abs(lag), past)
        keep = max(0, len(a) - reach)
        return a[keep:].copy(), b[keep:].copy()

    def merge(self, other: CrossSums) -> None:
        for lag in self.lags:
            self.sums[lag] += other.sums[lag]


def _known_products(later: NDArray, earlier: NDArray, lag: int, past: int) -> tuple[float, float]:
    start = max(past, lag)
    if start >= len(later):
        return 0.0, 0.0
    product = later[start:] * earlier[start - lag : len(earlier) - lag]
    known = np.isfinite(product)
    return float(np.count_nonzero(known)), float(product[known].sum())
