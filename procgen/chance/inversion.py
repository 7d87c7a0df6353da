"""Quantiles of laws of which only the density is known: polynomial pieces, built once, then quick.

After Derflinger, Hörmann & Leydold (2010), ACM TOMACS 20(4). The quantile is taken as a function of (tail area p,
side), p <= 1/2. Each binary octave of p, down to 2**-64, is cut in equal cells; a cell holds the polynomial through
the quantiles at its Chebyshev-Lobatto points, both ends among them, and is cut further where the polynomial misses:
the area beyond a result is p within 1 part in 1e10. Table and results are portable.
"""

from __future__ import annotations

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import cos_turns
from procgen.chance.kernel import is_compiling, machine

ACCURACY = 1e-10
_DEGREE = 6
_OCTAVES = 64
_CUT_BITS = 3  # 8 cells an octave
_CHILDREN = 16
_LEVELS = 8  # of cutting: then a cell is narrower than 1 part in 3e10
_LEAST, _MOST = 2.0 ** -(_OCTAVES + 1), 0.5 - 2.0**-54
_SHIFT = 52 - _CUT_BITS
_FIRST = (1022 - _OCTAVES) << _CUT_BITS  # the leading bits of _LEAST
_FRACTION = (1 << _SHIFT) - 1
_ONE = 0x3FF0000000000000  # the bits of 1.0


class Inverse:
    """The quantile function of a continuous law on the whole line, from the areas above and below its points.

    below: None for a law that is symmetric about 0; else the areas of the mirrored law. Tail areas under 2**-65,
    which no uniform has, give the quantile at 2**-65.
    """

    def __init__(self, above: Areas, below: Areas | None = None) -> None:
        self._pieces, self._child = _table(above)
        self._mirrored = below is None
        self._below = 0  # where the cells of the lower side begin
        if below is not None:
            pieces, child = _table(below)
            self._below = len(self._child)
            self._pieces = np.concatenate([self._pieces, -pieces], axis=1)
            self._child = np.concatenate([self._child, np.where(child > 0, child + self._below, 0)])
        self._even = not self._child.any()

    def quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        """Quantiles of tail areas p on the sides where side < 0 (lower) or not (upper); float64 vectors."""
        n = len(p)
        near, t, cell = scratch(0, n), scratch(1, n), scratch(0, n, np.int64)
        np.minimum(np.maximum(p, _LEAST, out=near), _MOST, out=near)
        if is_compiling():
            self._compiled(near, side, t, cell, out)
            return
        lower = np.less(side, 0.0, out=scratch(0, n, np.bool_))
        bits, fraction = near.view(np.int64), t.view(np.int64)
        np.subtract(np.right_shift(bits, _SHIFT, out=cell), _FIRST, out=cell)
        np.left_shift(np.bitwise_and(bits, _FRACTION, out=fraction), _CUT_BITS, out=fraction)
        np.bitwise_or(fraction, _ONE, out=fraction)
        np.subtract(np.multiply(t, 2.0, out=t), 3.0, out=t)  # exact, from -1 to 1 over the cell
        if self._below:
            np.add(cell, np.multiply(lower, self._below, out=scratch(1, n, np.int64)), out=cell)
        if not self._even:
            self._descend(cell, t)
        coefficient = near
        np.take(self._pieces[0], cell, out=out, mode="clip")
        for piece in self._pieces[1:]:
            np.multiply(out, t, out=out)
            np.add(out, np.take(piece, cell, out=coefficient, mode="clip"), out=out)
        if self._mirrored:
            np.add(np.maximum(out, 0.0, out=out), 0.0, out=out)  # 0, not -0
            np.negative(out, out=out, where=lower)

    def _compiled(self, near: np.ndarray, side: np.ndarray, t: np.ndarray, cell: np.ndarray, out: np.ndarray) -> None:
        """The same bits for areas that lie in the table."""
        machine("compiled_inversion", "cells")(near.view(np.int64), side, self._below, t, cell)
        if not self._even:
            self._descend(cell, t)
        machine("compiled_inversion", "polynomials")(self._pieces, cell, t, out)
        if self._mirrored:
            machine("compiled_inversion", "mirrored")(side, out)

    def _descend(self, cell: np.ndarray, t: np.ndarray) -> None:
        """Go on to the cells that cells were cut into, in place."""
        at = np.flatnonzero(self._child[cell])
        while at.size:
            place = (t[at] + 1) * (_CHILDREN // 2)
            child = np.minimum(np.floor(place), _CHILDREN - 1)
            t[at] = 2 * (place - child) - 1
            cell[at] = self._child[cell[at]] + child.astype(np.int64)
            at = at[self._child[cell[at]] > 0]


def _table(areas: Areas) -> tuple[np.ndarray, np.ndarray]:
    """Coefficients (degree + 1, cells), highest power first, and the first child of each cell (0: none)."""
    octave, part = np.divmod(np.arange(_OCTAVES << _CUT_BITS), 1 << _CUT_BITS)
    width = np.ldexp(_LEAST, octave - _CUT_BITS)
    left = np.ldexp(_LEAST, octave) + part * width
    pieces, children, count = [], [], 0
    for level in range(_LEVELS + 1):
        if level < _LEVELS:
            piece, good = _fit(areas, left, width)
        else:
            piece, good = _line(areas, left, width), np.ones(len(left), np.bool_)
        bad = np.flatnonzero(~good)
        child = np.zeros(len(left), np.int64)
        count += len(left)
        child[bad] = count + np.arange(len(bad)) * _CHILDREN
        pieces.append(piece)
        children.append(child)
        if not len(bad):
            break
        width = np.repeat(width[bad] / _CHILDREN, _CHILDREN)
        left = np.repeat(left[bad], _CHILDREN) + np.tile(np.arange(_CHILDREN), len(bad)) * width
    return np.concatenate(pieces, axis=1), np.concatenate(children)


def _fit(areas: Areas, left: np.ndarray, width: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """The polynomial of each cell, and whether it is accurate enough between its points."""
    nodes = -cos_turns(np.arange(_DEGREE + 1) / (2 * _DEGREE))
    tests = -cos_turns((np.arange(_DEGREE) + 0.5) / (2 * _DEGREE))
    points = areas.point((left + width * ((nodes[:, None] + 1) * 0.5)).reshape(-1))
    pieces = interpolation(nodes, list(points.reshape(len(nodes), -1)))
    t = tests[:, None]
    x = pieces[0] + 0.0 * t
    for piece in pieces[1:]:
        x = x * t + piece
    p = left + width * ((t + 1) * 0.5)
    missed = np.abs(areas.beyond(x.reshape(-1)).reshape(p.shape) - p)
    return np.array(pieces), np.asarray((missed <= ACCURACY * p).all(axis=0))


def _line(areas: Areas, left: np.ndarray, width: np.ndarray) -> np.ndarray:
    """Straight pieces: for cells narrower than the accuracy, where anything between the ends is good enough."""
    low, high = areas.point(left), areas.point(left + width)
    piece = np.zeros((_DEGREE + 1, len(left)))
    piece[-1], piece[-2] = (low + high) * 0.5, (high - low) * 0.5
    return piece


def interpolation(nodes: np.ndarray, values: list[np.ndarray]) -> list[np.ndarray]:
    """Coefficients, highest power first, of the polynomials through values at nodes: Newton's divided differences."""
    count = len(nodes)
    differences = list(values)
    for order in range(1, count):
        for i in range(count - 1, order - 1, -1):
            differences[i] = (differences[i] - differences[i - 1]) / (nodes[i] - nodes[i - order])
    pieces = [differences[-1]]
    for i in range(count - 2, -1, -1):  # times (t - nodes[i]), plus the next difference
        shifted = [*pieces, differences[i]]
        for k, piece in enumerate(pieces):
            shifted[k + 1] = shifted[k + 1] - nodes[i] * piece
        pieces = shifted
    return pieces
