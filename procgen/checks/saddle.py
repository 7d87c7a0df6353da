"""Tails of sums of independent numbers of one known law, by the saddle point of their cumulant function.

Lugannani & Rice (1980), Saddle point approximation for the distribution of the sum of independent random variables:
the error is relative to the tail and of the order 1/n, so that even a few shocks are judged far out.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import power, tails
from procgen.checks.judge import Finding
from procgen.spec.records import dataclass

Nodes = tuple[NDArray, NDArray]  # of a law: values and their weights
REACH = 5.0  # standard errors: a sum is not judged where one number alone may carry it that far
_NODES = 1024
_LAST = 7.5  # normal score of the outermost node: what lies beyond has a probability of 6e-14
_LEAST = 1e-12  # probability between two lumps that is but rounding
_NONE = np.zeros(0)
_NEAR = 1e-3  # this near to the middle the formula is 0/0, and its limit is taken
_STEPS = 100
_STEEPEST = 1e3
_ROUNDING = 1e-12  # of the largest value: a law no wider than that has one value


@dataclass(frozen=True, eq=False)
class Summand:
    """A law as values and their weights; it is brought to mean 0 and variance 1."""

    values: NDArray
    weights: NDArray

    def __post_init__(self) -> None:
        w = self.weights / self.weights.sum()
        v = self.values - w @ self.values
        object.__setattr__(self, "weights", w)
        spread = math.sqrt(float(w @ v**2))
        known = spread <= _ROUNDING * float(np.max(np.abs(self.values)))  # squares of what is 1 or -1 are one number
        object.__setattr__(self, "values", 0.0 * v if known else v / spread)

    @cached_property
    def skew(self) -> float:
        return float(self.weights @ self.values**3)

    @cached_property
    def excess(self) -> float:
        return float(self.weights @ self.values**4) - 3.0

    def tails(self, z: float, n: int) -> tuple[float, float]:
        """(log upper, log lower) tail of the standardised sum of n at z."""
        a = z / math.sqrt(n)
        slope, k, second = self._saddle(a)
        r = math.copysign(math.sqrt(max(2 * n * (slope * a - k), 0.0)), slope)
        u = slope * math.sqrt(n * second)
        if abs(r) < _NEAR or abs(u) < _NEAR:
            return tails.pearson3(z, self.skew / math.sqrt(n))
        return _tail(r, u), _tail(-r, -u)

    def _saddle(self, a: float) -> tuple[float, float, float]:
        """The slope at which the tilted law has mean a, the cumulant function there and its second derivative.

        Newton's steps, held between bounds; where no tilted law has this mean, a slope far out.
        """
        side = math.copysign(1.0, a)
        low, high, slope = 0.0, math.inf, abs(a)
        for _ in range(_STEPS):
            k, mean, second = self._tilted(side * slope)
            gap = abs(a) - side * mean
            if abs(gap) < 1e-12 or slope > _STEEPEST:
                break
            low, high = (slope, high) if gap > 0 else (low, slope)
            step = slope + gap / max(second, 1e-300)
            slope = step if low < step < min(high, 4 * slope) else min(2 * slope, 0.5 * (low + high))
        return side * slope, k, second

    def _tilted(self, slope: float) -> tuple[float, float, float]:
        """The cumulant function at a slope, and its first two derivatives."""
        exponent = slope * self.values
        top = float(exponent.max())
        e = self.weights * np.exp(exponent - top)
        total = float(e.sum())
        mean = float(e @ self.values) / total
        return top + math.log(total), mean, max(float(e @ (self.values - mean) ** 2) / total, 1e-300)


def _tail(r: float, u: float) -> float:
    """log of Q(r) + phi(r) (1/u - 1/r)."""
    from scipy.special import log_ndtr

    log_density = -0.5 * r * r - 0.5 * math.log(2 * math.pi)
    mills = math.exp(float(log_ndtr(-r)) - log_density) if r > -30 else math.inf
    inside = mills + 1 / u - 1 / r
    if not math.isfinite(mills):
        return 0.0
    return min(0.0, log_density + math.log(max(inside, 1e-300)))


def summand(distribution: Any, of: Callable[[NDArray], NDArray], farthest: float = math.inf) -> Summand:
    """What `of` makes of a law with `ppf`; sizes beyond `farthest` are left out."""
    return made_of(nodes(distribution), of, farthest)


def made_of(nodes: Nodes, of: Callable[[NDArray], NDArray], farthest: float = math.inf) -> Summand:
    """What `of` makes of a law as nodes and weights; sizes beyond `farthest` are left out."""
    values, weight = of(nodes[0]), nodes[1]
    usable = np.isfinite(values) & (np.abs(values) <= farthest)
    return Summand(values[usable], weight[usable])


def nodes(distribution: Any) -> Nodes:
    """A law with `ppf` as values and weights.

    Values with a chance of their own, where the law tells them (`lumps`: values and chances), are nodes with that
    chance; what is continuous lies between them.
    """
    from scipy.special import ndtr

    g = np.linspace(-_LAST, _LAST, _NODES + 1)
    u, density = ndtr(g), np.exp(-0.5 * g**2)
    lumps, chances = getattr(distribution, "lumps", (_NONE, _NONE))
    upto = np.asarray(distribution.cdf(lumps), float) if lumps.size else _NONE
    found, weights = [lumps], [chances]
    for low, high in zip(np.append(0.0, upto), np.append(upto - chances, 1.0), strict=True):
        if high - low > _LEAST:
            found.append(np.asarray(distribution.ppf(low + (high - low) * u), dtype=float))
            weights.append((high - low) * density / density.sum())
    return np.concatenate(found), np.concatenate(weights)


def sum_finding(z: float, n: int, law: Summand, error: float, theory: float = 0.0) -> Finding:
    """The standardised mean z of n independent numbers of a known law."""
    skew = abs(law.skew) / math.sqrt(n)
    excess = max(law.excess, 0.0) / n
    return Finding(
        theory,
        theory + z * error,
        error,
        tails.two_sided(*law.tails(z, n)),
        lambda level: power.shift(level, error, skew, excess),
    )
