"""What the law of its variance says of a garch of order (1,1): sizes of its values, and of neighbouring ones."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.spec.records import dataclass
from procgen.theory.perpetuity import Perpetuity, settled
from procgen.theory.unknown import Unknown


@dataclass(frozen=True)
class Sizes:
    """Sizes y = x^2 / (x^2 + square) of values x, from 0 to 1. With a larger square their products are more skewed.

    `square` is the harmonic mean of the variance; `covariances` are those of a size and of the one so many steps later.
    """

    square: float
    mean: float
    lags: tuple[int, ...]
    covariances: tuple[float, ...]

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

    def sizes(self, lags: tuple[int, ...]) -> Sizes:
        """What is known of the sizes of its values; Unknown with its reason."""
        found = self._settled(lambda p: _of_sizes(p, lags))
        square, mean, *covariances = _of_sizes(found, lags).tolist()
        return Sizes(self.omega * square, mean, lags, tuple(covariances))


def _of_sizes(p: Perpetuity, lags: tuple[int, ...]) -> NDArray:
    """The square, the mean of sizes, and their covariances at lags; omega is 1."""
    square = 1.0 / float(p.weights @ (1.0 / p.variances))

    def size(x: NDArray) -> NDArray:
        return x * x / (x * x + square)

    mean = p.mean(size)
    return np.array([square, mean, *(p.products(size, lags) - mean * mean)])
