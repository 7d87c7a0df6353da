"""Fourth moments of a noise that leaves from a given variance: E e(u)^2 e(v)^2 at all pairs of steps from 0 on.

Its state moves as v(t + 1) = c + A(z(t)) v(t) with h(t) as its first element, from a known v(0). Means and second
moments of v follow step by step, and with a(u) = E e(u)^2 v(u + 1) = c E h(u) + E[z^2 A] E v(u) h(u) the mean of v
after a square (He & Terasvirta 1999, for the same moments in the stationary law).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.unknown import Unknown

LONGEST = 2048  # steps


@dataclass(frozen=True)
class Moving:
    """How the state of a noise moves, in means over one shock z."""

    constant: np.ndarray  # c
    mean: np.ndarray  # E A
    squared: Callable[[np.ndarray], np.ndarray]  # E A M A' of a symmetric M
    led: np.ndarray  # E z^2 A
    kurtosis: float  # E z^4
    first: np.ndarray  # v(0)

    def square_products(self, count: int) -> np.ndarray:
        """E e(u)^2 e(v)^2 at u, v < count."""
        n = len(self.first)
        means, seconds = np.empty((count, n)), np.empty((count, n))  # E v and E v h
        now, pair = self.first, np.outer(self.first, self.first)
        for t in range(count):
            means[t], seconds[t] = now, pair[:, 0]
            cross = np.outer(self.constant, self.mean @ now)
            pair = np.outer(self.constant, self.constant) + cross + cross.T + self.squared(pair)
            now = self.constant + self.mean @ now
        out = np.diag(self.kurtosis * seconds[:, 0])
        after = means[:, :1] * self.constant + seconds @ self.led.T  # row u: E e(u)^2 v(u + lag)
        for lag in range(1, count):
            after = after[: count - lag]
            u = np.arange(count - lag)
            out[u, u + lag] = out[u + lag, u] = after[:, 0]
            after = means[: count - lag, :1] * self.constant + after @ self.mean.T
        return out


def square_products(process: Any, steps: np.ndarray) -> np.ndarray:
    """E e(u)^2 e(v)^2 at all pairs of ascending steps of a process that leaves from a given past."""
    if process.law.excess_kurtosis is None:
        raise Unknown("infinite fourth moment: the law of the shocks has none")
    return process.products_from_start(steps)


def kept_products(process: Any, moving: Callable[[], Moving], steps: np.ndarray) -> np.ndarray:
    """The same by the recursion of a state, kept for the next steps."""
    count = int(steps[-1]) + 1
    if count > LONGEST:
        raise Unknown(f"fourth moments from a given variance are added up before step {LONGEST} only")
    memory = process.__dict__.get("_square_products")
    if memory is None or len(memory) < count:
        memory = moving().square_products(max(count, 64))
        process.__dict__["_square_products"] = memory
    return memory[np.ix_(steps, steps)]
