"""From normal scores to uniforms by a table: much faster than the exact function, and as good for counting."""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import scratch
from procgen.checks.scores import BINS

_REACH, _CELLS = 8.5, 1 << 12  # beyond 8.5 a uniform is 0 or 1 in double precision but for 1e-17


CELLS_OF_SD = _CELLS / (2 * _REACH)


@cache
def pieces() -> NDArray:
    """Parabolas through Phi at both ends and the middle of each cell, one behind the other, three numbers each.

    Phi at the left end, its rise over the cell, and the bend: for compiled code, and small enough for a near cache.
    """
    from scipy.special import ndtr

    edges = np.linspace(-_REACH, _REACH, _CELLS + 1)
    values, middles = ndtr(edges), ndtr(edges[:-1] + 0.5 / CELLS_OF_SD)
    found = np.zeros((_CELLS + 1, 3))
    found[:, 0], found[:-1, 1] = values, np.diff(values)
    found[:-1, 2] = 2.0 * ((values[:-1] + values[1:]) - 2.0 * middles)
    return found.ravel()


@cache
def _table() -> NDArray:
    return np.ascontiguousarray(pieces().reshape(-1, 3).T)


def uniforms(g: NDArray) -> NDArray:
    """Phi(g) for scores (steps, paths), NaN where they are; the error is below 1e-9. In memory that is used again."""
    left, rise, bend = _table()
    steps, paths = g.shape
    u, part, place = (scratch(steps, paths, number) for number in (1, 2, 3))
    np.multiply(g, CELLS_OF_SD, out=place)
    place += _CELLS / 2
    np.clip(place, 0, _CELLS, out=place)
    cell = _whole(place)
    place -= cell
    np.take(bend, cell, out=u, mode="clip")
    np.subtract(place, 1.0, out=part)
    u *= part
    np.take(rise, cell, out=part, mode="clip")
    u += part
    u *= place
    np.take(left, cell, out=part, mode="clip")
    u += part
    return u


def bin_counts(u: NDArray) -> NDArray:
    """Counts of u in BINS equal bins."""
    place = np.multiply(u.ravel(), BINS, out=scratch(1, u.size, 2)[0])
    counts = np.bincount(_whole(place), minlength=BINS + 1)
    counts[BINS - 1] += counts[BINS]
    return counts[:BINS]


def _whole(x: NDArray) -> NDArray[np.int64]:
    cells = scratch(1, x.size, 4).view(np.int64).reshape(x.shape)
    with np.errstate(invalid="ignore"):
        np.copyto(cells, x, casting="unsafe")
    return cells
