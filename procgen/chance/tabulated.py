"""A density that is dear to evaluate, tabulated once: polynomials of its logarithm on equal panels, portable.

Each panel holds Chebyshev's series through the logarithm at his points. Where the density falls below the least double
it counts as that.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from procgen.chance.elementary import cos_turns, exp, log

_POINTS = 18
_LEAST = 1e-290


class Tabulated:
    """x -> density(x) on low .. high, 0 beyond; elementwise.

    density: a function of one vector of increasing points, asked for the points of one panel at a time.
    width: of the panels; over this distance a polynomial of degree 17 must match the logarithm.
    """

    def __init__(self, density: Callable[[np.ndarray], np.ndarray], low: float, high: float, width: float) -> None:
        self.low, self.width = low, width
        self.count = int(np.floor((high - low) / width)) + 1
        angles = (np.arange(_POINTS) + 0.5) / (2 * _POINTS)
        nodes = (1 - cos_turns(angles)) * (0.5 * width)
        values = np.array([log(np.maximum(density(low + width * i + nodes), _LEAST)) for i in range(self.count)]).T
        self.series = []
        for j in range(_POINTS):
            # over the nodes -cos(angle): T_j(-x) = (-1)^j T_j(x)
            weights = cos_turns(angles * j) * ((-1.0 if j % 2 else 1.0) * (2.0 if j else 1.0) / _POINTS)
            total = np.zeros(self.count)
            for weight, row in zip(weights.tolist(), values, strict=True):
                total = total + weight * row
            self.series.append(total)
        self.high = low + width * self.count

    def __call__(self, x: np.ndarray) -> np.ndarray:
        place = (x - self.low) / self.width
        cell = np.minimum(np.maximum(np.floor(place), 0), self.count - 1)
        t = 2 * (place - cell) - 1
        at, twice = cell.astype(np.int64), 2 * t
        one, two = np.zeros_like(t), np.zeros_like(t)
        for series in self.series[:0:-1]:  # Clenshaw (1955)
            one, two = np.take(series, at) + twice * one - two, one
        height = exp(np.take(self.series[0], at) + t * one - two)
        return np.where((x >= self.low) & (x <= self.high), height, 0.0)


def folded(rows: np.ndarray) -> np.ndarray:
    """The sum over rows, added up by halves in an order of our own."""
    while len(rows) > 1:
        half = len(rows) // 2
        first = rows[:half] + rows[half : 2 * half]
        rows = np.concatenate([first, rows[2 * half :]])
    return rows[0]
