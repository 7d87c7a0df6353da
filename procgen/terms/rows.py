"""Numbers that are rows, one value a path, where a term is given single ones otherwise."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np


class Unlike(Exception):
    """Things of several paths that are not made alike, and must be made path by path."""


def row_in(value: Any) -> int:
    """How many paths the rows within a value are for; 0 where there is none."""
    if isinstance(value, np.ndarray):
        return value.size
    if isinstance(value, tuple):
        return max(map(row_in, value), default=0)
    if isinstance(value, Mapping):
        return max(map(row_in, value.values()), default=0)
    return 0


def alike(numbers: tuple) -> tuple:
    """Numbers beside rows become rows too, so that an array of all of them has one row each."""
    count = row_in(numbers)
    if not count:
        return numbers
    return tuple([np.full(count, number) if isinstance(number, float | int) else number for number in numbers])


def of_path(value: Any, path: int) -> Any:
    """A value with the numbers of one path in the place of rows."""
    if isinstance(value, np.ndarray):
        return float(value[path])
    if isinstance(value, tuple):
        return tuple([of_path(part, path) for part in value])
    if isinstance(value, Mapping):
        return {name: of_path(part, path) for name, part in value.items()}
    return value


def each_path(term: Any) -> list[Any]:
    """The terms of all paths of one whose numbers are rows; itself where none is."""
    return [type(term)(of_path(term.values, path)) for path in range(row_in(term.values))] or [term]


def plain(x: Any) -> Any:
    """A number as Python's float, and a row as it is."""
    return x if np.ndim(x) else float(x)
