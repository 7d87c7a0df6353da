"""Areas under a density, and the points beyond which a given area lies, by portable operations.

The line is mapped by x = sinh(y), which turns tails that fall like a power into tails that fall exponentially.
Panels of y are halved until Gauss's rule with 16 points agrees with itself; areas are added from the far end
inwards, so that small ones keep their relative accuracy.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable

import numpy as np

from procgen.chance.elementary import cos_turns, exp, log

Density = Callable[[np.ndarray], np.ndarray]

_POINTS = 16
_AGREEMENT = 1e-11  # of a panel with its halves; the halves are then far closer to the truth
_SETTLED = 1e-13  # of an area with the one that was asked for
_NOTHING = 1e-36  # an area this small is not refined: 1e-12 of 2**-65 is a thousand times larger
_WIDTH = 0.25
_MOST_PANELS = 10_000
_ITERATIONS = 60


def gauss_rule(points: int) -> tuple[np.ndarray, np.ndarray]:
    """Nodes and weights of Gauss's rule on (-1, 1): Newton's method on Legendre's three-term recurrence."""
    index = np.arange(1, points + 1, dtype=np.float64)
    x = cos_turns((index - 0.25) / (2 * points + 1))
    for _ in range(8):
        before, value = np.ones(points), x.copy()
        for k in range(2, points + 1):
            before, value = value, ((2 * k - 1) * x * value - (k - 1) * before) / k
        slope = points * (before - x * value) / (1 - x * x)
        x = x - value / slope
    return x, 2 / ((1 - x * x) * slope * slope)


_NODES, _WEIGHTS = gauss_rule(_POINTS)


class Areas:
    """The tail areas of a law, from a function proportional to its density.

    reach: less than 1e-32 of the law lies further than this from 0. marks: points that panels end at, close enough
    around anything narrow in the density for Gauss's rule to see it.
    """

    def __init__(self, density: Density, reach: float, marks: Iterable[float] = ()) -> None:
        self._density = density
        self._left, self._right, area = self._panels(reach, sorted(marks))
        beyond, total = np.empty(len(area) + 1), 0.0
        beyond[-1] = 0.0
        for i in range(len(area) - 1, -1, -1):
            total += float(area[i])
            beyond[i] = total
        self._total = total
        self._beyond = beyond / total  # of the left edge of each panel, then 0
        self._rising = self._beyond[::-1].copy()

    def beyond(self, x: np.ndarray) -> np.ndarray:
        """The area above x, relative to the whole."""
        far = np.abs(x)
        y = np.copysign(log(far + np.sqrt(far * far + 1)), x)
        y = np.minimum(np.maximum(y, self._left[0]), self._right[-1])
        panel = np.searchsorted(self._left, y, side="right") - 1
        return self._from(y, panel)

    def point(self, area: np.ndarray) -> np.ndarray:
        """The x with a given area above it, 0 < area < 1: Newton's method on the log of the area, kept in its panel."""
        panel = len(self._left) - np.searchsorted(self._rising, area, side="left")
        low, high = self._left[panel], self._right[panel]
        wanted, top = log(area), log(self._beyond[panel])
        end = log(np.maximum(self._beyond[panel + 1], _NOTHING))
        y = low + (high - low) * np.minimum((top - wanted) / (top - end), 1.0)  # that log is nearly linear
        at = np.arange(len(y))  # those still to be moved
        for _ in range(_ITERATIONS):
            here = y[at]
            found = self._from(here, panel[at])
            low[at] = np.where(found >= area[at], here, low[at])
            high[at] = np.where(found >= area[at], high[at], here)
            missed = log(np.maximum(found, _NOTHING)) - wanted[at]
            moved = here + missed * found / np.maximum(self._mapped(here) / self._total, _NOTHING)
            inside = (moved >= low[at]) & (moved <= high[at])
            y[at] = np.where(inside, moved, (low[at] + high[at]) * 0.5)
            at = at[(np.abs(missed) > _SETTLED) & (y[at] != here)]
            if not len(at):
                break
        return _sinh(y)

    def _from(self, y: np.ndarray, panel: np.ndarray) -> np.ndarray:
        return self._beyond[panel + 1] + self._integral(y, self._right[panel]) / self._total

    def _mapped(self, y: np.ndarray) -> np.ndarray:
        return self._density(_sinh(y)) * (exp(y) + exp(-y)) * 0.5

    def _integral(self, left: np.ndarray, right: np.ndarray) -> np.ndarray:
        middle, half = (left + right) * 0.5, (right - left) * 0.5
        heights = self._mapped(middle + _NODES[:, None] * half)
        total = np.zeros_like(middle)
        for weight, height in zip(_WEIGHTS, heights, strict=True):
            total += weight * height
        return total * half

    def _panels(self, reach: float, marks: list[float]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        edges = _edges(reach, marks)
        left, right = edges[:-1], edges[1:]
        whole = self._integral(left, right)
        done: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []
        while True:
            middle = (left + right) * 0.5
            first, second = self._integral(left, middle), self._integral(middle, right)
            both = first + second
            good = np.abs(both - whole) <= _AGREEMENT * both + _NOTHING
            done.append((left[good], right[good], both[good]))
            bad = ~good
            if np.count_nonzero(bad) > _MOST_PANELS:
                raise ValueError("expected a smooth density, got one that no halving of panels can integrate")
            left, right = np.concatenate([left[bad], middle[bad]]), np.concatenate([middle[bad], right[bad]])
            whole = np.concatenate([first[bad], second[bad]])
            if not bad.any():
                break
        left, right, area = (np.concatenate(parts) for parts in zip(*done, strict=True))
        order = np.argsort(left, kind="stable")
        return left[order], right[order], area[order]


def _edges(reach: float, marks: list[float]) -> np.ndarray:
    """Ends of the first panels: even in y, and at the marks."""
    top = float(log(reach + np.sqrt(reach * reach + 1)))
    count = int(np.floor(2 * top / _WIDTH)) + 1
    even = np.arange(count + 1) * (2 * top / count) - top
    at = np.array([x for x in marks if abs(x) < reach])
    return np.unique(np.concatenate([even, np.copysign(log(np.abs(at) + np.sqrt(at * at + 1)), at)]))


def _sinh(y: np.ndarray) -> np.ndarray:
    return (exp(y) - exp(-y)) * 0.5
