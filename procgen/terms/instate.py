"""Values in a given state of the chains behind them: a level, and shocks of the same step times their spreads."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import field
from typing import Any

import numpy as np

from procgen.spec.records import dataclass


@dataclass
class InState:
    """level + Σ spread · shock, where `shocks` has for each source its spread, the source, and the law of the shock.

    Levels and spreads are numbers or rows, (steps, 1).
    """

    level: Any = 0.0
    shocks: dict[int, tuple[Any, Any, Any]] = field(default_factory=dict)

    def __add__(self, other: InState) -> InState:
        shocks = dict(self.shocks)
        for key, (spread, source, law) in other.shocks.items():
            shocks[key] = (spread + shocks[key][0] if key in shocks else spread, source, law)
        return InState(self.level + other.level, shocks)

    def times(self, factor: Any) -> InState:
        """The same times a number, or rows of them; what is never more than 0 has no shocks."""
        if np.ndim(factor) == 0 and factor == 0.0:
            return InState(0.0 * self.level)
        return InState(factor * self.level, {k: (factor * s, *shock) for k, (s, *shock) in self.shocks.items()})


def added(parts: Sequence[InState]) -> InState:
    """The sum of parts."""
    total = InState()
    for part in parts:
        total = total + part
    return total


def multiplied(parts: Sequence[InState]) -> InState | None:
    """The product of parts; None where more than one has shocks."""
    total = InState(1.0)
    for part in parts:
        if total.shocks and part.shocks:
            return None
        total = total.times(part.level) if not part.shocks else part.times(total.level)
    return total
