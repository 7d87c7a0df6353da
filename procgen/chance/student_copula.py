"""Shocks tied by a t copula: the ranks of a multivariate t vector, each number from a uniform of its own.

A spherical t vector has numbers of which each, given those before it, is a t variable itself: with v degrees of freedom
and q the sum of the squares of the k before it, sqrt((v + q) / (v + k)) times a t of v + k degrees (Kotz & Nadarajah
2004, sec. 1.11). So nothing is drawn for all of them together, the first has the ranks of its own uniforms, and what
comes after a number moves nothing of it. The factor of a correlation matrix then mixes them as it mixes normals.

Everything here makes values: only portable operations (see `procgen.chance.portable`).
"""

from __future__ import annotations

from collections.abc import Iterable
from functools import lru_cache

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch, blockwise
from procgen.chance.elementary import cos_turns, exp, log1p
from procgen.chance.inversion import interpolation
from procgen.chance.laws import StudentT
from procgen.chance.normal import normal_quantile

_DEGREE = 6
_CELLS = 16  # in an octave of 1 + abs(x)
_LEAST = 2.0**-65  # the smallest tail that is told from those below it


def spherical(df: float, uniforms: Iterable[np.ndarray]) -> list[np.ndarray]:
    """A spherical t vector with df > 2 degrees of freedom, one number for each array of uniforms."""
    numbers: list[np.ndarray] = []
    squares = 0.0
    for k, u in enumerate(uniforms):
        degrees = df + k
        x = np.sqrt(degrees / (degrees - 2.0)) * StudentT(degrees).shocks(u)  # its law, not that with variance 1
        if k:
            x = np.sqrt((df + squares) / degrees) * x
        squares = squares + x * x
        numbers.append(x)
    return numbers


def normals(df: float, x: np.ndarray) -> np.ndarray:
    """Standard normals with the ranks of t variables of df degrees of freedom, elementwise."""
    return blockwise(_ranks(df).normals, x)


class _Ranks:
    """The normal of the rank of a t variable, in pieces: polynomials over cells of each octave of 1 + abs(x)."""

    def __init__(self, df: float):
        def density(z: np.ndarray) -> np.ndarray:
            return exp((df + 1) * -0.5 * log1p(z * z / df))

        areas = Areas(density, float(np.sqrt(df) * exp(76 / df)))
        octaves = 1
        while float(areas.beyond(np.ldexp(np.ones(1), octaves) - 1.0)[0]) > _LEAST:
            octaves = octaves + 1
        self._count = octaves * _CELLS
        octave, part = np.divmod(np.arange(self._count), _CELLS)
        width = np.ldexp(1.0, octave) / _CELLS
        left = np.ldexp(1.0, octave) + part * width - 1.0
        nodes = -cos_turns(np.arange(_DEGREE + 1) / (2 * _DEGREE))
        at = left + width * ((nodes[:, None] + 1.0) * 0.5)
        area = np.minimum(areas.beyond(at.reshape(-1)), 0.5)
        self._pieces = interpolation(nodes, list(-normal_quantile(area).reshape(at.shape)))
        self._end = float(left[-1] + width[-1])

    def normals(self, x: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        n = len(x)
        far = np.minimum(np.abs(x, out=scratch(0, n)), self._end, out=scratch(0, n))
        part, octave = np.frexp(far + 1.0)  # the part is from 1/2 to 1
        place = (part - 0.5) * (2.0 * _CELLS)
        inside = np.floor(place)
        cell = (octave.astype(np.int64) - 1) * _CELLS + inside.astype(np.int64)
        last = cell >= self._count  # the very end
        t = np.where(last, 1.0, 2.0 * (place - inside) - 1.0)
        cell = np.where(last, self._count - 1, cell)
        total = np.take(self._pieces[0], cell)
        for piece in self._pieces[1:]:
            total = total * t + np.take(piece, cell)
        total = np.maximum(total, 0.0) + 0.0
        out[...] = np.where(x < 0.0, -total, total)


@lru_cache(maxsize=64)
def _ranks(df: float) -> _Ranks:
    return _Ranks(df)
