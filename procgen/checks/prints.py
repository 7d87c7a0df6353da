"""Fingerprints of paths: sums over the bits of their values, by which paths that are copies of each other are found."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

_AT_ONCE = 1 << 14  # values of a fingerprint: what is computed on the way stays in the cache
_SHORT = 1024  # steps of a tile whose weights are kept


def fingerprint(x: NDArray, first_step: int) -> NDArray[np.uint64]:
    """A 64-bit sum (paths,) over the bits of a tile (steps, paths): equal for equal paths, and it adds over tiles."""
    bits = np.ascontiguousarray(x, dtype=np.float64).view(np.uint64)
    factors = weights(first_step, len(x))
    total = np.zeros(x.shape[1], dtype=np.uint64)
    count = max(_AT_ONCE // x.shape[1], 1)
    for start in range(0, len(x), count):
        part = bits[start : start + count]
        mixed = part ^ (part >> np.uint64(32))
        mixed *= factors[start : start + count, None]
        total += mixed.sum(axis=0, dtype=np.uint64)
    return total


def weights(first_step: int, steps: int) -> NDArray[np.uint64]:
    """An odd number for each step, the same for all series."""
    return _kept_weights(first_step, steps) if steps <= _SHORT else _made_weights(first_step, steps)


def _made_weights(first_step: int, steps: int) -> NDArray[np.uint64]:
    step = np.arange(first_step, first_step + steps, dtype=np.uint64)
    x = step * np.uint64(0x9E3779B97F4A7C15) + np.uint64(0x632BE59BD9B4E019)
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return (x ^ (x >> np.uint64(31))) | np.uint64(1)


_kept_weights = lru_cache(256)(_made_weights)  # each range of paths, and each series, has tiles of the same steps


def equal(prints: NDArray, paths: NDArray) -> tuple[int, int, int]:
    """How many paths repeat an earlier one, and the first such pair."""
    order = np.argsort(prints, kind="stable")
    same = prints[order][1:] == prints[order][:-1]
    if not same.any():
        return 0, -1, -1
    at = np.flatnonzero(same)
    second = at[np.argmin(paths[order[at + 1]])] + 1
    return int(same.sum()), int(paths[order[second - 1]]), int(paths[order[second]])
