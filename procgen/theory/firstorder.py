"""What the law of its variance says of a garch of order (1,1): the law of a value, and sizes of neighbours."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.theory.perpetuity import Perpetuity, settled
from procgen.theory.unknown import Unknown

OF_TYPICAL = 1.0  # of the harmonic mean variance: the square whose size is 1/2; with more, products are more skewed
PLACES = (0.1, 0.5, 1.0, 2.0, 4.0)  # in typical standard deviations, where the law must have settled
LEAST = 1e-12  # of the law on either side: what lies farther out goes on as a power, which it nears
REACH, CELLS = 40.0, 2048  # of the table of the law: where the size of a value is sinh of its place; its cells
AT_ONCE = 1 << 12


@dataclass(frozen=True)
class Sizes:
    """Sizes y = x^2 / (x^2 + square) of values x, from 0 to 1.

    `covariances` are those of a size and of the one so many steps later; `leverage` is the mean of the sign of x times
    the size at the next step, less that of the sign times that of the size.
    """

    square: float
    mean: float
    lags: tuple[int, ...]
    covariances: tuple[float, ...]
    leverage: float

    def of(self, x: NDArray) -> NDArray:
        """Sizes of deviations of any shape."""
        squares = np.square(x)
        return squares / (squares + self.square)


class FirstOrder:
    """A noise sqrt(h) z with h(t+1) = omega + (beta + (alpha + gamma I(z < 0)) z^2) h(t), or the reason why it is not.

    The stationary one: what leaves from a given variance has other laws at each step.
    """

    law: Any
    omega: float
    variance: float
    started: bool
    strictly_stationary: Any

    @property
    def feedback(self) -> tuple[float, float, float] | None:
        """alpha, gamma and beta at order (1,1), None at others."""
        raise NotImplementedError

    def _settled(self, wanted: Any) -> Perpetuity:
        if self.feedback is None:
            raise Unknown("at higher orders the law of its variance is not computed")
        if self.started:
            raise Unknown("it leaves from a given variance: its law changes with the step, and is not computed")
        if self.strictly_stationary[0] is not True:
            raise Unknown("it is not known to be stationary")
        alpha, gamma, beta = self.feedback
        if not alpha and not gamma:
            raise Unknown("its variance does not move")
        return settled(wanted, self.law, alpha, gamma, beta)

    @cached_property
    def value_law(self) -> ValueLaw:
        """The law of a value, with the calls of a frozen SciPy distribution; Unknown with its reason."""
        shock = self.law.distribution()
        if not np.isinf(shock.support()).all():
            raise Unknown("its shocks end somewhere: the law of its values has corners, and is not computed")

        def wanted(p: Perpetuity) -> NDArray:
            typical = 1.0 / np.sqrt(p.weights @ (1.0 / p.variances))
            at = np.array([side * place * typical for side in (-1.0, 1.0) for place in PLACES])
            return p.weights @ shock.cdf(at / np.sqrt(p.variances)[:, None])

        found = self._settled(wanted)
        return ValueLaw(shock, np.sqrt(self.omega * found.variances), found.weights, self.variance)

    def sizes(self, lags: tuple[int, ...]) -> Sizes:
        """What is known of the sizes of its values; Unknown with its reason."""
        found = self._settled(lambda p: _of_sizes(p, lags))
        square, mean, *covariances, leverage = _of_sizes(found, lags).tolist()
        return Sizes(self.omega * square, mean, lags, tuple(covariances), leverage)


def _of_sizes(p: Perpetuity, lags: tuple[int, ...]) -> NDArray:
    """The square, the mean of sizes, their covariances at lags, and the leverage; omega is 1."""
    square = OF_TYPICAL / float(p.weights @ (1.0 / p.variances))

    def size(x: NDArray) -> NDArray:
        return x * x / (x * x + square)

    mean = p.mean(size)
    leverage = 0.0
    if (p.z < 0.0).any():  # else only squares count, and signs stand for themselves
        leverage = float(p.products(size, (1,), np.sign)[0]) - p.mean(np.sign) * mean
    return np.array([square, mean, *(p.products(size, lags) - mean * mean), leverage])


class ValueLaw:
    """The law of s z for a shock z and an independent spread s, given by values and weights that need not be chances.

    Read from a table of the logarithms of both tails, by cubics that meet the density; below a chance of 1e-12 they go
    on as powers. `variance` is that of the values, which may be infinite.
    """

    spacing = 0.0

    def __init__(self, shock: Any, spreads: NDArray, weights: NDArray, variance: float):
        self.shock, self.spreads, self.weights, self.variance = shock, spreads, weights, variance
        self.unit = float(1.0 / (weights @ (1.0 / spreads)))

    def exact(self, what: str, x: Any) -> NDArray:
        """`cdf`, `sf` or `pdf` by the sum over spreads, to about 1e-13 of 1."""
        x = np.asarray(x, float)
        scale = self.spreads if what == "pdf" else 1.0
        parts = np.array_split(x.ravel(), 1 + x.size // AT_ONCE)
        rows = [getattr(self.shock, what)(part[:, None] / self.spreads) @ (self.weights / scale) for part in parts]
        return np.concatenate(rows).reshape(x.shape)

    @cached_property
    def _below(self) -> Tail:
        return Tail(lambda x: self.exact("cdf", -x), lambda x: self.exact("pdf", -x), self.unit)

    @cached_property
    def _above(self) -> Tail:
        return Tail(lambda x: self.exact("sf", x), lambda x: self.exact("pdf", x), self.unit)

    def sf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        return np.where(x < 0.0, 1.0 - self._below(-x), self._above(x))

    def cdf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        return np.where(x < 0.0, self._below(-x), 1.0 - self._above(x))

    def pdf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        return np.where(x < 0.0, self._below.density(-x), self._above.density(x))

    def ppf(self, p: Any) -> NDArray:
        p = np.asarray(p, float)
        return self._quantile(p, 1.0 - p)

    def isf(self, p: Any) -> NDArray:
        p = np.asarray(p, float)
        return self._quantile(1.0 - p, p)

    def _quantile(self, below: NDArray, above: NDArray) -> NDArray:
        """Where so much lies below and above; whichever is less tells it best."""
        lower = below <= float(self._below(0.0))
        return np.where(lower, -self._below.size(below), self._above.size(above))

    def mean(self) -> float:
        return 0.0

    def var(self) -> float:
        return self.variance

    def std(self) -> float:
        return float(np.sqrt(self.variance))


class Tail:
    """What lies beyond a size x >= 0 on one side: the logarithm of its chance in places s with x = unit sinh(s)."""

    def __init__(self, chance: Any, density: Any, unit: float):
        s: NDArray = np.linspace(0.0, REACH, CELLS + 1)
        beyond = int(np.argmax(chance(unit * np.sinh(s)) < LEAST)) or CELLS
        self.unit, self.width = unit, float(s[beyond]) / CELLS
        s = self.width * np.arange(CELLS + 1)
        chances = np.maximum(chance(unit * np.sinh(s)), 0.5 * LEAST)
        end = int(np.argmax(chances < LEAST)) or CELLS
        self.logs = np.log(chances[:end])
        self.slopes = -density(unit * np.sinh(s[:end])) * unit * np.cosh(s[:end]) / chances[:end]
        self.last = unit * float(np.sinh(s[end - 1]))
        self.power = -self.slopes[-1] * float(np.tanh(s[end - 1]))

    def __call__(self, x: Any) -> NDArray:
        """The chance beyond x."""
        x = np.maximum(np.asarray(x, float), 0.0)
        inside = np.exp(self._read(np.arcsinh(x / self.unit))[0])
        beyond = np.exp(self.logs[-1]) * (self.last / np.maximum(x, self.last)) ** self.power
        return np.where(x > self.last, beyond, inside)

    def density(self, x: Any) -> NDArray:
        x = np.maximum(np.asarray(x, float), 0.0)
        _, slope = self._read(np.arcsinh(x / self.unit))
        with np.errstate(divide="ignore", invalid="ignore"):
            return self(x) * np.where(x > self.last, self.power / x, -slope / np.hypot(x, self.unit))

    def size(self, chance: Any) -> NDArray:
        """The size beyond which a chance lies; infinite for 0."""
        from procgen.chance.laws.mixture import halved

        with np.errstate(divide="ignore"):
            wanted = np.log(np.asarray(chance, float))
        cell = np.clip(np.searchsorted(-self.logs, -wanted, side="right") - 1, 0, len(self.logs) - 2)
        low = self.width * cell
        place = halved(lambda s: self._read(s)[0] > wanted, low, low + self.width)
        with np.errstate(over="ignore"):
            beyond = self.last * np.exp((self.logs[-1] - wanted) / self.power)
        return np.where(wanted < self.logs[-1], beyond, self.unit * np.sinh(place))

    def _read(self, s: NDArray) -> tuple[NDArray, NDArray]:
        """The logarithm and its slope in a place, by the cubic of its cell (Hermite)."""
        cell = np.minimum((s / self.width).astype(np.int64), len(self.logs) - 2)
        t = np.minimum(s / self.width - cell, 1.0)
        a, b = self.logs[cell], self.logs[cell + 1]
        p, q = self.width * self.slopes[cell], self.width * self.slopes[cell + 1]
        bend, turn = 3.0 * (b - a) - 2.0 * p - q, p + q - 2.0 * (b - a)
        return a + t * (p + t * (bend + t * turn)), (p + t * (2.0 * bend + 3.0 * t * turn)) / self.width
