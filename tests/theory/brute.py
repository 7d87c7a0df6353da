"""A second derivation of linear theory: every series as a matrix of weights on shocks.

Rows are steps FIRST .. LAST, columns the shocks of each source from long before. Each operation does to the rows what
its definition says, without any algebra of the theory room; a covariance is then W S W'.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.signal import lfilter

FIRST, LAST, PAST = -16, 20, 600
STEPS = np.arange(FIRST, LAST + 1)
SHOCKS = np.arange(FIRST - PAST, LAST + 1)  # steps at which there are shocks
ZERO = -FIRST  # the row of step 0


@dataclass
class Weights:
    """Weights on the shocks of each source, and the mean; (steps,) and {source: (steps, shocks)}."""

    mean: np.ndarray
    on: dict[str, np.ndarray] = field(default_factory=dict)

    def map(self, f, mean) -> Weights:
        return Weights(mean, {key: f(w) for key, w in self.on.items()})

    def __add__(self, other: Weights) -> Weights:
        keys = {*self.on, *other.on}
        nothing = np.zeros((len(STEPS), len(SHOCKS)))
        on = {k: self.on.get(k, nothing) + other.on.get(k, nothing) for k in keys}
        return Weights(self.mean + other.mean, on)

    def times(self, c: float) -> Weights:
        return self.map(lambda w: c * w, c * self.mean)

    def lag(self, by: int) -> Weights:
        """Rows that would come from before FIRST are not a number."""

        def shift(w):
            return np.concatenate([np.full((by, *w.shape[1:]), np.nan), w[: len(w) - by]])

        return self.map(shift, shift(self.mean))

    def integrate(self, start: float) -> Weights:
        """y(0) = start, y(t) = y(t-1) + x(t); backwards y(t-1) = y(t) - x(t)."""

        def run(x, first):
            y = np.zeros_like(x)
            y[ZERO] = first
            for t in range(ZERO + 1, len(x)):
                y[t] = y[t - 1] + x[t]
            for t in range(ZERO, 0, -1):
                y[t - 1] = y[t] - x[t]
            return y

        return self.map(lambda w: run(w, 0.0), run(self.mean, start))

    def covariance(self, other: Weights, scales: dict[tuple[str, str], float]) -> np.ndarray:
        """All Cov(x(t), y(s)); `scales` are covariances of the sources at one step."""
        total = np.zeros((len(STEPS), len(STEPS)))
        for a, w in self.on.items():
            for b, v in other.on.items():
                scale = scales.get((a, b), scales.get((b, a), 0.0))
                if scale:
                    total += scale * (w @ v.T)
        return total


def constant(c: float) -> Weights:
    return Weights(np.full(len(STEPS), float(c)))


def stationary(key: str, phi=(), theta=()) -> Weights:
    """An ARMA filter of a source, from impulse responses cut after PAST steps."""
    impulse = np.zeros(len(SHOCKS))
    impulse[0] = 1.0
    psi = lfilter([1.0, *theta], [1.0, *(-c for c in phi)], impulse)
    lags = STEPS[:, None] - SHOCKS[None, :]
    return Weights(np.zeros(len(STEPS)), {key: np.where(lags >= 0, psi[np.maximum(lags, 0)], 0.0)})


def started(key: str, phi, theta, x, shocks) -> Weights:
    """The same recursion run from given values and shocks before step 0, step by step."""
    p, q = len(phi), len(theta)
    mean = np.full(len(STEPS), np.nan)
    mean[ZERO - len(x) : ZERO] = x
    w = np.zeros((len(STEPS), len(SHOCKS)))
    past = dict(zip(range(-len(shocks), 0), shocks, strict=True))
    for t in range(ZERO, len(STEPS)):
        step = STEPS[t]
        mean[t] = sum(phi[i] * mean[t - 1 - i] for i in range(p))
        mean[t] += sum(theta[j] * past.get(step - 1 - j, 0.0) for j in range(q))
        w[t] = sum((phi[i] * w[t - 1 - i] for i in range(p)), np.zeros(len(SHOCKS)))
        w[t, np.searchsorted(SHOCKS, step)] += 1.0
        for j in range(q):
            if step - 1 - j >= 0:
                w[t, np.searchsorted(SHOCKS, step - 1 - j)] += theta[j]
    return Weights(mean, {key: w})


def coefficients(partials) -> tuple[float, ...]:
    """AR coefficients with these partial autocorrelations, all stable (Durbin 1960; Barndorff-Nielsen & Schou 1973)."""
    a: list[float] = []
    for r in partials:
        a = [a[i] - r * a[len(a) - 1 - i] for i in range(len(a))] + [r]
    return tuple(a)
