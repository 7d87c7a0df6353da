"""A pull to a mean in continuous time, seen at steps of unequal length (Uhlenbeck & Ornstein 1930)."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Gaussian
from procgen.theory.processes import Held, Process, Steps, alone, at_any
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import LEAVES, MEMORY, SETTLES

FORGOTTEN = 40.0  # e^-40 is below the last digit
LONGEST = 1 << 22  # shocks that are added up for the covariance with something else


class Pulled(Process):
    """x(t) = e^(-k D(t)) x(t-1) + r(D(t)) a(t): Cov = v e^(-k |time between|); see `Stating.pulled`.

    `started`: it leaves from a known value at step -1, and Cov is less by v e^(-k (times since then)).
    """

    gaussian = True

    def __init__(self, name: str, noise: Any, rate: float, clock: Any, started: bool):
        (self.shocks,) = noise.sources
        why = f"the autocovariance of {name} follows the time between steps, which differs from step to step"
        says = [(MEMORY, why)]
        if started:
            says.append((SETTLES, f"{name} {LEAVES}"))
        super().__init__(name, (noise,), tuple(says))
        self.noise, self.rate, self.clock, self.started = noise, rate, clock, started
        self.variance = self.shocks.variance / -math.expm1(-2.0 * rate)

    def covariance(self, t, s):
        a, b = self.clock.times(t), self.clock.times(s)
        total = self.variance * np.exp(-self.rate * np.abs(a - b))
        if not self.started:
            return total
        after = (np.asarray(t) >= 0) & (np.asarray(s) >= 0)
        lost = -np.expm1(-2.0 * self.rate * (np.minimum(a, b) + 1.0))
        return np.where(after, total * np.where(after, lost, 0.0), 0.0)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Pulled):
            return self._beside(other.detail, t, s)
        if isinstance(other.detail, Held):
            return other.detail.with_expression(alone(self.noise.space, own), s, t)
        return self.with_expression(alone(self.noise.space, other), t, s)

    def _beside(self, other: Pulled, t: Steps, s: Steps) -> np.ndarray:
        """Another one, whose shocks are correlated with these: their covariance is summed up from step 0."""
        if self.clock != other.clock:
            raise Unknown(f"the covariance of {self.name} and {other.name} is not known in closed form")
        shared = float(at_any(self.noise, other.noise, np.zeros(1, np.int64), np.zeros(1, np.int64))[0])
        both = self.rate + other.rate
        first = np.minimum(t, s)
        last = int(np.max(first, initial=0))
        if last > LONGEST:
            raise Unknown(f"the covariance of {self.name} and {other.name} is added up to step {LONGEST:,} only")
        at = np.zeros(last + 2)  # of both at steps -1, 0, ...
        at[0] = 0.0 if self.started or other.started else shared / -math.expm1(-both)
        gone = self.clock.lengths(np.arange(last + 1))
        kept, new = np.exp(-both * gone), shared * self._ratio(gone) * other._ratio(gone)
        for step in range(last + 1):
            at[step + 1] = kept[step] * at[step] + new[step]
        a, b, now = self.clock.times(t), self.clock.times(s), self.clock.times(first)
        start = np.where(first >= -1, at[np.maximum(first, -1) + 1], at[0])
        return start * np.exp(-self.rate * (a - now) - other.rate * (b - now))

    def with_expression(self, other, t, s):
        """The sum over its shocks, as far as they are remembered, of their covariances with the other."""
        t, s = np.broadcast_arrays(np.asarray(t, np.int64), np.asarray(s, np.int64))
        count = self._remembered(t)
        if count * t.size > LONGEST:
            raise Unknown(f"{self.name} remembers too many shocks to add up their covariances with something else")
        u = t[..., None] - np.arange(count)
        gone, lengths = self.clock.times(t)[..., None] - self.clock.times(u), self.clock.lengths(u)
        weights = np.exp(-self.rate * gone) * self._ratio(lengths)
        if self.started:
            weights = np.where(u >= 0, weights, 0.0)
        return (weights * at_any(self.noise, other, u, np.broadcast_to(s[..., None], u.shape))).sum(axis=-1)

    def _remembered(self, t: Steps) -> int:
        """A number of shocks, the last of which are forgotten at all of these steps."""
        count, now = 1, self.clock.times(t)
        while count <= LONGEST and np.any(self.rate * (now - self.clock.times(t - count)) < FORGOTTEN):
            count *= 2
        return count

    def _ratio(self, lengths: np.ndarray) -> np.ndarray:
        return np.sqrt(np.expm1(-2.0 * self.rate * lengths) / math.expm1(-2.0 * self.rate))

    def marginal(self, step: int) -> Any:
        at = np.array([step], np.int64)
        return Gaussian(0.0, math.sqrt(float(self.covariance(at, at)[0])))


def forecast(rate: float, clock: Any, past: float, steps: Steps) -> np.ndarray:
    """What is left at each step of a distance at step -1; the distance itself before."""
    steps = np.asarray(steps, np.int64)
    return past * np.exp(-rate * np.maximum(clock.times(steps) + 1.0, 0.0))
