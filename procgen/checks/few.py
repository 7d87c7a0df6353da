"""Shocks of a law of few values: ranks spread over their chances, which are uniform (Brockwell 2007)."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.spec.records import dataclass

ROOT_12 = 3.4641016151377544
NEAR = 1e-6  # how far from a value, as a share of its size, a shock may lie that is one
_NOWHERE = 0.6  # beyond the ends of a rank, which are -1/2 and 1/2: for what is none of the values
_SURE = 6.0  # standard deviations that rounding may move a shock without hiding which of the values it is


@dataclass(frozen=True)
class Few:
    """The values and chances of a law, and within which distance of a value a shock counts as that."""

    points: Any
    within: float = 0.0

    def ranks(self, z: NDArray, v: NDArray) -> NDArray:
        """Standardised uniforms of shocks z by uniforms v; beyond their ends where z is none of the values."""
        values, upto = self.points.values, np.append(0.0, np.cumsum(self.points.chances))
        reach = self.within + NEAR * np.maximum(1.0, np.abs(z))
        first, end = np.searchsorted(values, z - reach, side="left"), np.searchsorted(values, z + reach, side="right")
        rank = upto[first] + v * (upto[end] - upto[first]) - 0.5
        rank = np.where(end > first, rank, _NOWHERE)
        return np.where(np.isfinite(z), ROOT_12 * rank, np.nan)

    def hidden(self, noise: float) -> bool:
        """Whether a rounding that adds this variance to a shock hides which of the values it is."""
        return not _SURE * noise**0.5 <= self.within


def few_of(law: Any, carrier: Any, grain: float, blurred: bool = False) -> tuple[Few | None, float]:
    """How the shocks that a carrier gives of rounded values are told apart, and the rounding that is left to them.

    Where a shock is a shift and a scale of its value, the cell of a stored value holds all that is stored so: exactly.
    Else a shock is the nearest of the values, as it is where what is undone gives it back only up to rounding
    (`blurred`).
    """
    if law.points is None:
        return None, grain
    if not grain:
        return Few(law.points, 0.49 * law.points.spacing if blurred else 0.0), 0.0
    rows = np.zeros((2, 2))
    rows[0, 1] = grain / 2  # the second path is moved by half a cell at the first step
    z = carrier.tile(rows)
    here, later = (z[:, 1] - z[:, 0]).tolist() if isinstance(z, np.ndarray) else (np.nan, np.nan)
    if np.isfinite(here) and later == 0.0:
        return Few(law.points, abs(here)), 0.0
    return Few(law.points, 0.49 * law.points.spacing), grain
