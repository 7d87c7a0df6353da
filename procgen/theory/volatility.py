"""White noises whose conditional variance moves: what theory asks of one, and threshold garch; others in `logvariance`.

A noise e(t) = sqrt(h(t)) z(t) with h(t) known before step t is uncorrelated whatever h is. What makes it itself are
moments of h and of e^2 at two steps, which each family gives as functions of the lag.
"""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.averages import average
from procgen.theory.copula import is_symmetric
from procgen.theory.firstorder import FirstOrder
from procgen.theory.garch import HIGHEST, tail_index
from procgen.theory.processes import Process, Steps
from procgen.theory.sources import Source
from procgen.theory.transient import Moving, kept_products
from procgen.theory.unknown import Unknown

FORGOTTEN = 1e-16


class Volatility:
    """The `detail` of a conditionally heteroskedastic source.

    `total` is the share of a deviation of h that is left a step later, `leverage` whether signs of z move h.
    """

    law: Any
    leverage: bool
    total: float
    variance: float  # E h, inf where there is none
    highest_moment: float  # of e
    strictly_stationary: tuple[bool | None, str]
    started = False

    @property
    def condition(self) -> float:
        """What rounding is multiplied by in its moments, near where one of them ends."""
        return 1.0 / abs(1.0 - self.total) if self.total != 1.0 else 1.0

    @property
    def power_tailed(self) -> bool:
        """Whether its exponential is known to have no finite mean."""
        return bool(np.isfinite(self.highest_moment))

    @property
    def settles(self) -> float:
        """Steps after which the variance path from a given start is at its limit."""
        if not 0.0 < self.total < 1.0:
            return np.inf if self.total else 1.0
        return float(np.ceil(np.log(FORGOTTEN) / np.log(self.total)))

    def variance_path(self, steps: Steps) -> np.ndarray:
        """E h at steps >= 0 from the given past."""
        raise NotImplementedError

    def square_covariance(self, lags: Steps) -> np.ndarray:
        """Cov(e(t + lag)^2, e(t)^2) at lags >= 0; Unknown where there is no fourth moment."""
        raise NotImplementedError

    def products_from_start(self, steps: Steps) -> np.ndarray:
        """E e(u)^2 e(v)^2 at all pairs of ascending steps, from the given past."""
        raise NotImplementedError

    def variance_covariance(self, lags: Steps) -> np.ndarray:
        """Cov(h(t + lag), h(t)) at lags >= 0."""
        raise NotImplementedError

    def variance_law(self) -> Any:
        """The law of h as a frozen SciPy distribution."""
        raise Unknown("its conditional variance has no law in closed form")


class ConditionalVariance(Process):
    """h of a source, less its mean."""

    def __init__(self, source: Source, noise: Any):
        super().__init__(f"the variance of {source.key}", (noise,))
        self.source, self.highest_moment = source, source.detail.highest_moment / 2.0

    def covariance(self, t, s):
        return self.source.detail.variance_covariance(np.abs(t - s))

    def with_expression(self, other, t, s):
        if self.source.symmetric and not other.terms and all(source.symmetric for source in other.sources):
            return np.zeros(t.shape)  # flipping every sign leaves the variance and turns the other one round
        return super().with_expression(other, t, s)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, ConditionalVariance) and other.detail.source is self.source:
            return self.covariance(t, s)
        return super().with_process(own, other, t, s)

    def marginal(self, step):
        from procgen.theory.laws import Affine

        return Affine(self.source.detail.variance_law(), -self.source.variance, 1.0)


@dataclass(frozen=True)
class Gjr(FirstOrder, Volatility):
    """h(t+1) = omega + c(z(t)) h(t), c = beta + (alpha + gamma I(z < 0)) z^2, with `first` = h(0) where it is given.

    Glosten, Jagannathan & Runkle (1993), J. Finance 48; moments: He & Terasvirta (1999), J. Econometrics 92, 173-192.
    """

    law: Any
    omega: float
    alpha: float
    gamma: float
    beta: float
    first: float | None = None

    @property
    def feedback(self) -> tuple[float, float, float]:
        return self.alpha, self.gamma, self.beta

    @property
    def started(self) -> bool:  # type: ignore[override]
        return self.first is not None

    @property
    def leverage(self) -> bool:  # type: ignore[override]
        return self.gamma != 0.0

    @cached_property
    def below(self) -> tuple[float, float]:
        """E z^2 and E z^4 over z < 0."""
        kurtosis = np.inf if self.law.excess_kurtosis is None else self.law.excess_kurtosis + 3.0
        if is_symmetric(self.law):
            return 0.5, kurtosis / 2.0
        second = average(self.law, lambda z: np.where(z < 0.0, z * z, 0.0))
        return second, kurtosis if np.isinf(kurtosis) else average(self.law, lambda z: np.where(z < 0.0, z**4, 0.0))

    @cached_property
    def total(self) -> float:  # type: ignore[override]
        """E c."""
        return self.beta + self.alpha + self.gamma * self.below[0]

    @property
    def second(self) -> float:
        """E c^2."""
        a, g, b, (d2, d4) = self.alpha, self.gamma, self.beta, self.below
        if not np.isfinite(d4):
            return np.inf
        return b * b + 2 * b * (a + g * d2) + a * a * (self.law.excess_kurtosis + 3.0) + (2 * a * g + g * g) * d4

    @property
    def variance(self) -> float:  # type: ignore[override]
        return self.omega / (1.0 - self.total) if self.total < 1.0 else np.inf

    @property
    def variance_square(self) -> float:
        """E h^2; Unknown where it is infinite."""
        if not (self.total < 1.0 and self.second < 1.0):
            raise Unknown("infinite fourth moment: E (beta + (alpha + gamma I) z^2)^2 is not below 1")
        return self.omega**2 * (1.0 + self.total) / ((1.0 - self.total) * (1.0 - self.second))

    def factor(self, z: np.ndarray) -> np.ndarray:
        """c(z)."""
        return self.beta + (self.alpha + np.where(z < 0.0, self.gamma, 0.0)) * z * z

    @cached_property
    def strictly_stationary(self) -> tuple[bool | None, str]:  # type: ignore[override]
        if self.total < 1.0:
            return True, f"E (beta + (alpha + gamma I) z^2) is {self.total:.6g}, below 1"
        exponent = average(self.law, lambda z: np.log(self.factor(z)))
        sign = "below" if exponent < 0.0 else "not below"
        return exponent < 0.0, f"E log(beta + (alpha + gamma I) z^2) is {exponent:.6g}, {sign} 0 (Nelson 1990)"

    @cached_property
    def highest_moment(self) -> float:  # type: ignore[override]
        """Twice the s with E c^s = 1 (Kesten 1973)."""
        return min(tail_index(self.law, self.factor), float(self.law.highest_moment))

    @property
    def power_tailed(self) -> bool:
        return bool(np.isfinite(float(self.law.highest_moment))) or self.highest_moment < 2.0 * HIGHEST

    def variance_path(self, steps):
        steps = np.asarray(steps, float)
        assert self.first is not None
        if self.total == 1.0:
            return self.first + self.omega * steps
        rest = self.omega / (1.0 - self.total)
        with np.errstate(over="ignore"):
            return rest + (self.first - rest) * self.total**steps

    @property
    def condition(self) -> float:
        near = (1.0 - self.total, 1.0 - self.second)
        return max((1.0 / abs(x) for x in near if x and np.isfinite(x)), default=1.0)

    @property
    def led(self) -> float:
        """E z^2 c."""
        return self.beta + self.alpha * (self.law.excess_kurtosis + 3.0) + self.gamma * self.below[1]

    def products_from_start(self, steps):
        return kept_products(self, self._moving, steps)

    def _moving(self) -> Moving:
        omega, total, led, first = np.array([[self.omega], [self.total], [self.led], [self.first]])
        kurtosis = self.law.excess_kurtosis + 3.0
        return Moving(omega, total[None], lambda m: self.second * m, led[None], kurtosis, first)

    def square_covariance(self, lags):
        second = self.variance_square
        kurtosis = self.law.excess_kurtosis + 3.0
        first = self.omega * self.variance + self.led * second - self.variance**2
        later = first * self.total ** np.maximum(lags - 1.0, 0.0)
        return np.where(lags == 0, kurtosis * second - self.variance**2, later)

    def variance_covariance(self, lags):
        return (self.variance_square - self.variance**2) * self.total ** lags.astype(float)
