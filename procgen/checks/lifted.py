"""What a wrong level alone makes of squares and products about the stated mean: which departures follow from it.

So does a wrong season: shocks whose mean moves with the phase are wider, follow each other, and have another law.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from procgen.checks.words import BY_PHASE

if TYPE_CHECKING:
    from procgen.checks.verdict import Check

_HALF = 0.5  # share of a departure that the level must make, for it to follow from that
_THIRD = 1 / 3  # the same for phases: of a season with another period they show what is lacking, half of all
SCORE = 1.5  # a spread score of s is a log variance of about 1.5 s, for laws from Laplace to normal
_PRODUCTS = ("shocks: autocorrelation", "shocks: neighbouring paths")
_SUMS = "shocks: variance of sums"
_MOMENTS = ("variance", "variance over steps", "autocovariance over steps", "slope over steps")


class Lifted:
    """How far values, and shocks, of one series lie from their stated mean; and what follows."""

    def __init__(self, rows: Sequence[Check]):
        self._at = {row.probe: row for row in rows if row.what in ("mean", "mean over steps")}
        self._variance = {row.probe: row.theory for row in rows if row.what == "variance over steps"}
        self._shocks = _of_shocks(rows)
        self._season = max(((row.estimate or 0.0) ** 2 for row in rows if row.what == BY_PHASE), default=0.0)
        self._wider = max(_of_variance(rows) - 1.0, 0.0)

    def explains(self, row: Check) -> bool:
        """Whether the level makes at least half of what a check sees, or the season a third."""
        off = abs((row.estimate or 0.0) - (row.theory or 0.0))
        return 0.0 < _HALF * off <= self._makes(row) or self._of_season(row, off)

    def _of_season(self, row: Check, off: float) -> bool:
        """Whether the mean by phase makes a third of a product of shocks; of their variance, for all else of them."""
        if not self._season or not row.what.startswith("shocks: "):
            return False
        if row.what in _PRODUCTS:
            return _THIRD * off <= self._season
        if row.what == _SUMS:
            return _THIRD * off <= self._season * float(row.probe.split()[0])
        return _THIRD * self._wider <= self._season

    def _makes(self, row: Check) -> float:
        if row.what in _PRODUCTS:
            return self._shocks**2
        if row.what == _SUMS:
            return self._shocks**2 * float(row.probe.split()[0])
        where = row.probe.split(", lag")[0]
        mean = self._at.get(where)
        if row.what not in _MOMENTS or mean is None or mean.estimate is None or mean.theory is None:
            return 0.0
        square = (mean.estimate - mean.theory) ** 2
        variance = self._variance.get(where) if row.what == "slope over steps" else 1.0
        return square / variance if variance else 0.0


def _of_variance(rows: Sequence[Check]) -> float:
    """The variance of shocks in the stated one, or what their scores say of it."""
    seen = {row.what: row.estimate for row in rows if row.estimate is not None}
    return seen.get("shocks: variance", math.exp(SCORE * seen.get("shocks: spread score", 0.0)))


def _of_shocks(rows: Sequence[Check]) -> float:
    """The level of shocks in their sd: of their scores, where these have it at all steps alike.

    Shocks of ranks end at ±√3, and their scores do not: there the level is a matter of all steps if it is most of
    the shocks' mean square.
    """
    seen = {row.what: abs(row.estimate or 0.0) for row in rows if not row.probe.startswith("worst")}
    level, by_step = seen.get("shocks: mean", 0.0), seen.get("shocks: level by step", 0.0)
    most = level**2 >= _HALF * (level**2 + seen.get("shocks: variance", 1.0))
    return max(level, by_step) if most or _HALF * by_step <= level else level
