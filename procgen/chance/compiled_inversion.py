"""The quantile of `inversion`, compiled: the cells of many areas, and then their polynomials.

Imported only where kernels are compiled (numba, the extra `speed`). The same operations in the same order as the plain
form, so that the bits are the same.
"""

from __future__ import annotations

from procgen.chance import inversion

_SHIFT, _FIRST, _FRACTION = inversion._SHIFT, inversion._FIRST, inversion._FRACTION
_STEP = 1.0 / (1 << inversion._SHIFT)


def cells(bits, side, below, t, cell):
    """The cell of each area, given by its bits, and the place in it from -1 to 1, exactly."""
    for i in range(bits.shape[0]):
        t[i] = 2.0 * (float(bits[i] & _FRACTION) * _STEP) - 1.0
        cell[i] = (bits[i] >> _SHIFT) - _FIRST + (below if side[i] < 0.0 else 0)


def polynomials(pieces, cell, t, out):
    """The polynomial of each cell at its place; pieces (7, cells), highest power first."""
    for i in range(cell.shape[0]):
        k, x = cell[i], t[i]
        y = pieces[0, k] * x + pieces[1, k]
        y = (y * x + pieces[2, k]) * x + pieces[3, k]
        y = (y * x + pieces[4, k]) * x + pieces[5, k]
        out[i] = y * x + pieces[6, k]


def mirrored(side, out):
    """Sizes as numbers of both signs; 0, not -0."""
    for i in range(out.shape[0]):
        size = max(out[i], 0.0) + 0.0
        out[i] = -size if side[i] < 0.0 else size
