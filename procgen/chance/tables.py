"""Laws of whole numbers that stay as they are: their chances, and counts by looking a uniform up in a table.

A table holds P(X <= k) on the grid of the uniforms, to the nearest 2**-52: no table could be finer than what it is
asked for. Chances follow from each other by their ratios, outwards from the most likely number.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable
from functools import cached_property, lru_cache
from typing import Any

import numpy as np

from procgen.chance.blocks import CHUNK, Scratch, blockwise
from procgen.chance.counting import negative_binomial, poisson
from procgen.chance.elementary import exp, log, log1p
from procgen.chance.gamma import log_gamma
from procgen.chance.kernel import is_compiling, machine
from procgen.spec.records import dataclass

Array = np.ndarray
GRID = 2.0**52
_SHIFT = 42
_CELLS = 1 << (52 - _SHIFT)
_THINNED = 46  # 64 cells for each number of those who may stay
_TOGETHER = 64  # binomial laws tabled at once
LONGEST = 1_000_000  # chances in a table
_PER_ROOT_12 = 0.2886751345948129
_LEAST = 2.0**-70  # a chance that no uniform sees, far from the likely ones


def uniforms(z: Array) -> Array:
    """The uniforms that standardised ones of the law `uniform` were made of, exactly."""
    return blockwise(_uniforms, z, whole=is_compiling())


def _uniforms(z: Array, out: Array, scratch: Scratch) -> None:
    if is_compiling():
        machine("compiled_counts", "uniforms")(z, _PER_ROOT_12, out)
        return
    place = np.add(np.floor(np.multiply(z, GRID * _PER_ROOT_12, out=out), out=out), 2.0**51, out=out)
    np.minimum(np.maximum(place, 0.0, out=out), GRID - 1.0, out=out)
    np.divide(np.add(out, 0.5, out=out), GRID, out=out)


def places_of(chances: Array) -> Array:
    """P(X <= k) on the grid, of the chances of each k in order; of many laws a row each, which may end in zeros."""
    below = np.add.accumulate(chances, axis=-1)  # one after the other, unlike a sum
    above = np.zeros_like(chances)
    above[..., :-1] = np.add.accumulate(chances[..., :0:-1], axis=-1)[..., ::-1]
    return np.where(below < 0.5, np.rint(below * GRID), GRID - np.rint(above * GRID)).astype(np.int64)


class Table:
    """P(X <= k) for k = first, first + 1 … from the chances of these numbers."""

    def __init__(self, chances: Array, first: int = 0):
        self.first = first
        self.places = places_of(chances)

    @cached_property
    def guide(self) -> Array:
        """For each cell of equal uniforms the number that its first place gives; -1 where its last gives another."""
        cells = np.arange(_CELLS, dtype=np.int64) << _SHIFT
        low = np.searchsorted(self.places, cells, side="right")
        open_ = np.searchsorted(self.places, cells + ((1 << _SHIFT) - 1), side="right") > low
        return np.where(open_, -1.0, low)

    def counts(self, u: Array) -> Array:
        """The least numbers that are enough for uniforms u, as float64: by a guide (Chen & Asau 1974) or a search."""
        return blockwise(self._looked_up, u, whole=is_compiling())

    def few(self, u: Array) -> Array:
        """`counts` of uniforms that are too few for a guide to repay."""
        place = np.floor(u * GRID).astype(np.int64)
        return (np.searchsorted(self.places, place, side="right") + self.first).astype(np.float64)

    def _looked_up(self, u: Array, out: Array, scratch: Scratch) -> None:
        n = len(u)
        if is_compiling():
            at = scratch(0, CHUNK, np.int64)
            machine("compiled_counts", "looked_up")(u, self.guide, self.places, _SHIFT, self.first, at, out)
            return
        place, cell = scratch(0, n, np.int64), scratch(1, n, np.int64)
        np.copyto(place, np.floor(np.multiply(u, GRID, out=out), out=out), casting="unsafe")
        np.right_shift(place, _SHIFT, out=cell)
        np.take(self.guide, cell, out=out, mode="clip")
        at = np.flatnonzero(np.less(out, 0.0, out=scratch(0, n, np.bool_)))
        out[at] = np.searchsorted(self.places, place[at], side="right")
        np.add(out, self.first, out=out)


@dataclass(frozen=True)
class Poisson:
    """Poisson counts: variance and mean are one."""

    mean: float

    @property
    def variance(self) -> float:
        return self.mean

    @property
    def central(self) -> tuple[float, float, float]:
        """E (X - mean)^k for k = 2, 3, 4."""
        return self.mean, self.mean, self.mean + 3.0 * self.mean * self.mean

    @property
    def table(self) -> Table:
        return _of_poisson(self.mean)

    def counts(self, u: Array, mean: Array | None = None) -> Array:
        """Counts of uniforms, with this mean or with others."""
        return self.table.counts(u) if mean is None else poisson(u, mean)

    def distribution(self, mean: float | None = None) -> Any:
        from scipy import stats

        return stats.poisson(self.mean if mean is None else mean)


@dataclass(frozen=True)
class NegativeBinomial:
    """Negative binomial counts: variance mean + mean^2 / size; Poisson counts whose mean is gamma of that shape."""

    mean: float
    size: float

    @property
    def variance(self) -> float:
        return self.mean + self.mean * self.mean / self.size

    @property
    def central(self) -> tuple[float, float, float]:
        """E (X - mean)^k for k = 2, 3, 4."""
        m, each = self.mean, self.mean / self.size
        second = m * (1.0 + each)
        fourth = second * (1.0 + 6.0 * each * (1.0 + each))
        return second, second * (1.0 + 2.0 * each), fourth + 3.0 * second * second

    @property
    def table(self) -> Table:
        return _of_negative_binomial(self.mean, self.size)

    def counts(self, u: Array, mean: Array | None = None) -> Array:
        """Counts of uniforms, with this mean or with others."""
        return self.table.counts(u) if mean is None else negative_binomial(u, mean, self.size)

    def distribution(self, mean: float | None = None) -> Any:
        from scipy import stats

        return stats.nbinom(self.size, self.size / (self.size + (self.mean if mean is None else mean)))


@lru_cache(maxsize=64)
def _of_poisson(m: float) -> Table:
    top = int(np.floor(m))
    middle = exp(top * log(m) - m - log_gamma(top + 1.0))
    return _table(top, float(middle), lambda k: m / k)


@lru_cache(maxsize=64)
def _of_negative_binomial(mean: float, r: float) -> Table:
    q = mean / (mean + r)
    top = int(np.floor(max((r - 1.0) * q / (1.0 - q), 0.0)))
    logs = log_gamma(top + r) - log_gamma(top + 1.0) - log_gamma(r)
    middle = exp(logs - r * log1p(mean / r) - top * log1p(r / mean))
    return _table(top, float(middle), lambda k: (k - 1.0 + r) / k * q)


def _table(top: int, middle: float, ratio: Callable[[float], float]) -> Table:
    """From the chance of a likely number and ratio(k) = p(k) / p(k - 1), both ways until nothing is left."""
    upper, chance, k = [middle], middle, top
    while chance > _LEAST and len(upper) < LONGEST:
        k += 1
        chance = chance * ratio(float(k))
        upper.append(chance)
    lower, chance, k = [], middle, top
    while k > 0 and chance > _LEAST:
        chance = chance / ratio(float(k))
        k -= 1
        lower.append(chance)
    return Table(np.array(lower[::-1] + upper), k)


class Thinning:
    """How many of n are left when each stays with probability alpha: binomial counts of uniforms, for any n.

    All rows lie in one sorted array, row n shifted by n 2**52, so that a look-up takes one search.
    """

    def __init__(self, alpha: float, most: int):
        self.most = most
        row, keys, first, lengths = np.ones(1), [], [], []
        for start in range(0, most + 1, _TOGETHER):
            n = np.arange(start, min(start + _TOGETHER, most + 1), dtype=np.int64)
            chances = np.zeros((len(n), n[-1] + 1))
            for k, own in zip(n.tolist(), chances, strict=True):
                own[: len(row)] = row
                if k:  # each of k stays or goes
                    own[:k] = (1.0 - alpha) * row
                    own[1 : k + 1] = own[1 : k + 1] + alpha * row
                row = own[: k + 1]
            places = places_of(chances)
            seen = (places > 0) & (places < int(GRID))
            first.append(np.count_nonzero(places < 1, axis=1))
            lengths.append(np.count_nonzero(seen, axis=1))
            keys.append((places + (n << 52)[:, None])[seen])
        self.keys = np.concatenate(keys)
        ends = np.add.accumulate(np.concatenate(lengths))
        # for each n the place of its key that is a count of 0
        self.zero = np.concatenate([np.zeros(1, np.int64), ends[:-1]]) - np.concatenate(first)

    def counts(self, n: Array, u: Array) -> Array:
        """How many of n stay, for uniforms u; both of one shape, n whole and at most `most`."""
        n = n.astype(np.int64)
        place = np.searchsorted(self.keys, np.floor(u * GRID).astype(np.int64) + (n << 52), side="right")
        return (place - self.zero[n]).astype(np.float64)

    def moved(self, x: Array, new: Array, stay: Array) -> Array:
        """Rows of counts from x before them: those who stay for uniforms `stay`, and the new ones.

        Rows end before a count that no table is made for.
        """
        out = np.empty_like(new)
        if is_compiling():
            from procgen.chance.compiled_counts import thinned

            return out[: thinned(x, new, stay, GRID, self.keys, self.guide, _THINNED, self.zero, out)]
        if new.shape[1] == 1:
            return self._moved_alone(int(x[0]), new[:, 0].tolist(), stay[:, 0])
        for t in range(len(new)):
            if x.max() > self.most:
                return out[:t]
            x = np.add(self.counts(x, stay[t]), new[t], out=out[t])
        return out

    @cached_property
    def guide(self) -> Array:
        """For each cell of equal uniforms of each n the place of the first key beyond the cell's first uniform."""
        cells = np.arange((self.most + 1) << (52 - _THINNED), dtype=np.int64) << _THINNED
        return np.searchsorted(self.keys, cells, side="right").astype(np.int32)

    @cached_property
    def _lists(self) -> tuple[list[int], list[int]]:
        """The keys, and `zero`."""
        return self.keys.tolist(), self.zero.tolist()

    def _moved_alone(self, x: int, new: list[float], stay: Array) -> Array:
        """`moved` of one path, by whole numbers of Python, which are quicker than arrays of one."""
        keys, zero = self._lists
        out: list[int] = []
        for place, more in zip(np.floor(stay * GRID).astype(np.int64).tolist(), new, strict=True):
            if x > self.most:
                break
            x = bisect_right(keys, place + (x << 52)) - zero[x] + int(more)
            out.append(x)
        return np.array(out, np.float64)[:, None]


@lru_cache(maxsize=16)
def thinning(alpha: float, most: int) -> Thinning:
    """The tables of one probability, made once."""
    return Thinning(alpha, most)
