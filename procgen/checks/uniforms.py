"""From normal scores to uniforms by a table: four times as fast as the exact function, and as good for counting."""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import NDArray

from procgen.checks.blocks import scratch
from procgen.checks.scores import BINS

_REACH, _CELLS = 8.5, 1 << 16  # beyond 8.5 a uniform is 0 or 1 in double precision but for 1e-17


CELLS_OF_SD = _CELLS / (2 * _REACH)


@cache
def _table() -> tuple[NDArray, NDArray]:
    """Phi at the left end of each cell, and its rise over the cell."""
    from scipy.special import ndtr

    values = ndtr(np.linspace(-_REACH, _REACH, _CELLS + 1))
    return values, np.append(np.diff(values), 0.0)


@cache
def lefts() -> NDArray:
    """The table of Phi for compiled code, its last entry twice: the rise of a cell is the next entry minus its own."""
    left = _table()[0]
    return np.append(left, left[-1])


def uniforms(g: NDArray) -> NDArray:
    """Phi(g) for scores (steps, paths), NaN where they are; the error is below 3e-9. In memory that is used again."""
    left, rise = _table()
    steps, paths = g.shape
    u, part, place = (scratch(steps, paths, number) for number in (1, 2, 3))
    np.multiply(g, CELLS_OF_SD, out=place)
    place += _CELLS / 2
    np.clip(place, 0, _CELLS, out=place)
    cell = _whole(place)
    place -= cell
    np.take(rise, cell, out=part, mode="clip")
    part *= place
    np.take(left, cell, out=u, mode="clip")
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
