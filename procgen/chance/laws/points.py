"""Laws of finitely many values, such as Bernoulli's, standardised to mean 0 and variance 1."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, ClassVar

import numpy as np

from procgen.chance.blocks import Scratch
from procgen.chance.laws.base import Law
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass

_SAME = 1e-9  # values that are closer than this share of the largest count as one


@dataclass(frozen=True, eq=False)
class Points:
    """The values of a law in increasing order, and their chances."""

    values: np.ndarray
    chances: np.ndarray

    @property
    def spacing(self) -> float:
        """The least distance of neighbouring values that are told apart."""
        gaps = np.diff(self.values)
        least = _SAME * float(np.abs(self.values).max())
        return float(gaps[gaps > least].min(initial=np.inf))

    @property
    def mean_size(self) -> float:
        """E abs(z)."""
        total = 0.0
        for value, chance in zip(self.values.tolist(), self.chances.tolist(), strict=True):
            total = total + abs(value) * chance
        return total

    @property
    def balanced(self) -> bool:
        """Whether z and -z have the same law."""
        near = np.abs(self.values + self.values[::-1]) <= _SAME * np.abs(self.values).max()
        return bool(near.all() and (np.abs(self.chances - self.chances[::-1]) <= _SAME).all())

    @property
    def same(self) -> float:
        """The probability that two independent draws are equal."""
        total = 0.0
        for chance in self.chances.tolist():
            total = total + chance * chance
        return total

    def moment(self, k: int) -> float:
        """E z^k."""
        return float(np.dot(self.chances, self.values**k))

    def growth(self, rate: np.ndarray) -> np.ndarray:
        """log E exp(rate z)."""
        from scipy.special import logsumexp

        return logsumexp(rate[:, None] * self.values, b=self.chances, axis=1)

    def expect(self, f: Callable[[float], float]) -> float:
        """E f(z)."""
        return float(np.dot(self.chances, [f(value) for value in self.values.tolist()]))

    def distribution(self) -> Any:
        return Discrete(self)


class Discrete:
    """A law of finitely many values with the calls of a frozen SciPy distribution.

    `spacing` is the width of a cell about a value that holds no other one.
    """

    def __init__(self, points: Points) -> None:
        self.points, self.spacing = points, points.spacing
        self._upto = _running(points.chances)
        self._from = _running(points.chances[::-1])[::-1]

    def cdf(self, x):
        at = np.searchsorted(self.points.values, x, side="right")
        return np.append(0.0, self._upto)[at]

    def sf(self, x):
        at = np.searchsorted(self.points.values, x, side="right")
        return np.append(self._from, 0.0)[at]

    def pmf(self, x):
        at = np.minimum(np.searchsorted(self.points.values, x), len(self.points.values) - 1)
        return np.where(self.points.values[at] == x, self.points.chances[at], 0.0)

    def pdf(self, x):
        return np.zeros(np.shape(x))

    def ppf(self, p):
        at = np.searchsorted(self._upto, np.asarray(p, float), side="left")
        return self.points.values[np.minimum(at, len(self.points.values) - 1)]

    def isf(self, p):
        at = np.searchsorted(-self._from, -np.asarray(p, float), side="right") - 1
        return self.points.values[np.maximum(at, 0)]

    def support(self) -> tuple[float, float]:
        return float(self.points.values[0]), float(self.points.values[-1])

    def mean(self) -> float:
        return self.points.moment(1)

    def var(self) -> float:
        mean = self.points.moment(1)
        return self.points.moment(2) - mean * mean

    def std(self) -> float:
        return float(np.sqrt(self.var()))


def _running(chances: np.ndarray) -> np.ndarray:
    """Sums of the first chances, the last of them 1."""
    total, out = 0.0, np.empty(len(chances))
    for i, chance in enumerate(chances.tolist()):
        total = total + chance
        out[i] = total
    return np.minimum(out / total, 1.0)


@dataclass(frozen=True)
class Bernoulli(Law):
    """One of two values: the upper one with probability p, standardised (0 and 1 less p, over sqrt(p (1 - p)))."""

    p: float

    name: ClassVar[str] = "bernoulli"
    source: ClassVar[str] = "Johnson, Kemp & Kotz (2005), ch. 3"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("p", "p", Real(above=0, below=1), "probability of the upper value"),
    )

    @property
    def ends(self) -> tuple[float, float]:
        """The lower and the upper value."""
        odds = float(np.sqrt(self.p / (1 - self.p)))
        return -odds, 1 / odds

    @property
    def points(self) -> Points:
        return Points(np.array(self.ends), np.array([1 - self.p, self.p]))

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        low, high = self.ends
        above = np.where(side < 0, 1 - p, p)
        np.copyto(out, np.where(above < self.p, high, low))

    @property
    def mean_size(self) -> float:
        return self.points.mean_size

    @property
    def balanced(self) -> bool:
        return self.p == 0.5

    def moment(self, k: int) -> float:
        low, high = self.ends
        return (1 - self.p) * low**k + self.p * high**k

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        return self.points.growth(rate)

    def distribution(self) -> Any:
        return self.points.distribution()

    def expect(self, f: Callable[[float], float]) -> float:
        return self.points.expect(f)
