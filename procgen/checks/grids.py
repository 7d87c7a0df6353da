"""The grid that values lie on, where they lie on one: the largest number of which all their differences are multiples.

It is Euclid's greatest common divisor: of whole numbers, where values are decimals or dyads of a few digits, and else
of differences with room for the rounding of stored numbers. Of values that lie on no grid, remainders fall below that
room before all of them are multiples.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from procgen.chance.kernel import is_compiling
from procgen.checks.blocks import in_one_pass
from procgen.checks.words import many, number

_TRIED = 32  # values of which a grid is sought
_TRIES = 4  # sets of them: a value beside the grid spoils one
_FEWEST = 3  # values that differ: of two, the difference says nothing
_ROUNDING = 2.0**-50  # of a value's size: what a stored number, a sum with an offset, and a difference may be off by
_APART = 10.0  # rooms for rounding that a grid must be wide
_SCALES = np.array([*(10.0**k for k in range(7)), 2.0**24])[:, None]
_WHOLE = 2.0**40  # size below which a number that is whole is so by no accident
_MOST = 0.9  # share of values that is most of them
_MOST_DECIMALS = 15  # that can be declared
_DIGITS = 9  # of a spacing by which it is known


def spacing(sample: NDArray) -> tuple[str, int]:
    """The spacing of the grid on which values of the sample lie, in digits, and how many of them do; "" and 0 if none.

    The grid is sought in some of them, and may begin anywhere.
    """
    known = sample[np.isfinite(sample)]
    apart = max(known.size // _TRIED, 1)
    for first in range(min(_TRIES, apart)):
        values = np.unique(known[first::apart][:_TRIED])
        grid = _divisor(values)
        if grid is not None:
            if _of_type(4.0 * grid, known, np.float16) or _of_type(grid, known, np.float32):
                break
            return f"{grid:.{_DIGITS}g}", _on(known, float(values[0]), grid, float(values[-1] - values[0]))
    return "", 0


def said(grid: float, declared: int | None = None) -> str:
    """What is said of values on a grid that is not declared: rounded to decimals, or what else it is."""
    if declared is not None:
        where, mend = f", where the spec declares {declared}", " if that is meant"
    else:
        where, mend = ", which is not declared", ""
    digits = decimals(grid)
    if digits is None:
        where += "" if declared is None else " decimals"
        return f"values lie on a grid of {number(grid, 6)}{where}"
    return f"values are rounded to {many(digits, 'decimal')}{where}; write `decimals: {digits}`{mend}"


def decimals(grid: float) -> int | None:
    """How many decimals numbers on a grid have, where it is that of decimals; else None."""
    digits = round(-math.log10(grid))
    return digits if 0 <= digits <= _MOST_DECIMALS and math.isclose(grid, 10.0**-digits, rel_tol=1e-8) else None


def _of_type(grid: float, values: NDArray, kind: type) -> bool:
    """Whether most values fit a floating-point type, whose own grid where half of them lie is no finer than this."""
    with np.errstate(over="ignore", invalid="ignore"):
        fits = int(np.count_nonzero(values.astype(kind) == values))
        own = float(np.spacing(kind(np.median(np.abs(values)))))
    return fits > _MOST * values.size and grid <= own * (1.0 + 1e-6)


def _on(known: NDArray, start: float, grid: float, across: float) -> int:
    """How many values lie on a grid through `start`; `across` is how far its spacing was measured."""
    room = _room(known) * (1.0 + np.abs(known - start) / across)
    multiple = (known - start) / grid
    return int(np.count_nonzero(np.abs(multiple - np.rint(multiple)) * grid <= np.minimum(room, grid / _APART)))


def _room(values: NDArray) -> float:
    return _ROUNDING * float(np.max(np.abs(values)))


def _divisor(values: NDArray) -> float | None:
    """The greatest common divisor of the differences of ascending values; None where they have none."""
    if values.size < _FEWEST or not np.isfinite(values[-1] - values[0]):
        return None
    few = values[:1]  # of values on no such grid one tells, as a rule
    if not (np.rint(few * _SCALES) / _SCALES == few).any():
        return _measured(values)
    scaled = np.rint(values * _SCALES)
    fits = (np.abs(scaled[:, [0, -1]]).max(axis=1) < _WHOLE) & (scaled / _SCALES == values).all(axis=1)
    if fits.any():
        first = int(np.argmax(fits))
        return float(np.gcd.reduce(np.diff(scaled[first]).astype(np.int64))) / float(_SCALES[first, 0])
    return _measured(values)


def _measured(values: NDArray) -> float | None:
    """The same of numbers that are no decimals or dyads: as far as rounding lets it be told, which adds up."""
    gaps, across = np.diff(values), float(values[-1] - values[0])
    room, grid = _room(values), float(gaps.min())
    error = room
    if is_compiling():
        found = np.empty(1)
        in_one_pass("divided", gaps, across, room, _APART, found)
        return float(found[0]) or None
    while grid > _APART * (room + error * (across / grid)):
        multiple = gaps / grid
        left, unsure = np.abs(multiple - np.rint(multiple)) * grid, room + multiple * error
        apart = left > unsure
        if not apart.any():
            return across / round(across / grid)
        least = int(np.argmin(np.where(apart, left, np.inf)))
        grid, error = float(left[least]), float(unsure[least])
    return None
