"""Survivors of a thinning where each path has a probability of its own: tables of all paths side by side."""

from __future__ import annotations

import numpy as np

from procgen.chance.kernel import is_compiling
from procgen.chance.tables import GRID, places_of

Array = np.ndarray
_TOGETHER = 256  # paths whose chances are made at once


class Thinnings:
    """`Thinning` of row p for the probability of path p: the same counts.

    most : the largest count that is tabled, a power of two less one
    """

    def __init__(self, alphas: Array, most: int):
        self.most = most
        self.places = np.empty((len(alphas), most + 1, most + 1), np.int64)
        for start in range(0, len(alphas), _TOGETHER):
            self.places[start : start + _TOGETHER] = places_of(_chances(alphas[start : start + _TOGETHER, None], most))

    def moved(self, x: Array, new: Array, stay: Array) -> Array:
        """Rows of counts from x before them: those who stay for uniforms `stay`, and the new ones.

        Rows end before a count that no table is made for.
        """
        out = np.empty_like(new)
        if is_compiling():
            from procgen.chance.compiled_counts import thinned_by_path

            return out[: thinned_by_path(x, new, stay, GRID, self.places, out)]
        for t in range(len(new)):
            if x.max() > self.most:
                return out[:t]
            x = np.add(self._counts(x, stay[t]), new[t], out=out[t])
        return out

    def _counts(self, n: Array, u: Array) -> Array:
        """How many of n stay, for uniforms u, path by path: the places in a row of the table are halved."""
        wide = self.most + 1
        flat, place = self.places.reshape(-1), np.floor(u * GRID).astype(np.int64)
        start = (np.arange(len(n)) * wide + n.astype(np.int64)) * wide
        at, step = start, wide // 2
        while step:
            at = np.where(flat[at + step - 1] <= place, at + step, at)
            step //= 2
        return (at - start).astype(np.float64)


def _chances(alphas: Array, most: int) -> Array:
    """The chance that k of n stay, by path, n and k."""
    chances = np.zeros((len(alphas), most + 1, most + 1))
    chances[:, 0, 0] = 1.0
    for n in range(1, most + 1):  # each of n stays or goes
        row, own = chances[:, n - 1, :n], chances[:, n]
        own[:, :n] = (1.0 - alphas) * row
        own[:, 1 : n + 1] = own[:, 1 : n + 1] + alphas * row
    return chances
