"""Moments of a garch: e(t) = sqrt(h(t)) z(t), h(t) = omega + sum alpha_i e(t-i)^2 + sum beta_j h(t-j).

Its squares are a linear process: with v = e^2 - h, which is white,

    (1 - sum (alpha_i + beta_i) B^i) h = omega + alpha(B) v.

So h - E h is a moving sum of the autoregression with coefficients alpha + beta, driven by v, and with kz the
kurtosis of z, Var v = (kz - 1) E h^2. Where Psi = Var h / Var v is finite this gives

    E h^2 = (E h)^2 / (1 - (kz - 1) Psi),   finite exactly when (kz - 1) Psi < 1

(Milhoj 1985 for arch; Bollerslev 1986 for order (1,1); Karanasos 1999, J. Econometrics 90, 63-76, for any order).
Stationarity: Nelson (1990), Econometric Theory 6, 318-334; Bougerol & Picard (1992), J. Econometrics 52, 115-127.
"""

from __future__ import annotations

from functools import cached_property
from itertools import zip_longest
from typing import Any

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.arma import companion, cross_covariance
from procgen.theory.averages import average
from procgen.theory.firstorder import FirstOrder
from procgen.theory.powers import existing_orders
from procgen.theory.recursion import recursed
from procgen.theory.transient import Moving, kept_products

HIGHEST = 64.0  # moments of h are looked at up to this order
ROOT_TOLERANCE = 1e-10
SETTLED = 1e-16


@dataclass(frozen=True)
class Garch(FirstOrder):
    """The parameters of a garch and what follows from them; `past_*` are oldest first, when it starts from them."""

    law: Any
    omega: float
    alpha: tuple[float, ...]
    beta: tuple[float, ...] = ()
    past_variances: tuple[float, ...] | None = None
    past_squares: tuple[float, ...] = ()

    @property
    def feedback(self) -> tuple[float, float, float] | None:
        """alpha, 0 and beta at order (1,1) and for arch(1)."""
        if len(self.alpha) != 1 or len(self.beta) > 1:
            return None
        return self.alpha[0], 0.0, self.beta[0] if self.beta else 0.0

    @property
    def persistence(self) -> tuple[float, ...]:
        """alpha_i + beta_i, the autoregressive coefficients of h and of e^2."""
        return tuple(a + b for a, b in zip_longest(self.alpha, self.beta, fillvalue=0.0))

    @property
    def total(self) -> float:
        return float(sum(self.alpha) + sum(self.beta))

    @property
    def started(self) -> bool:  # type: ignore[override]
        return self.past_variances is not None

    @property
    def variance(self) -> float:  # type: ignore[override]
        """omega / (1 - sum alpha - sum beta), inf where that is not above 0 (Bollerslev 1986, theorem 1)."""
        return self.omega / (1.0 - self.total) if self.total < 1.0 else np.inf

    @property
    def variance_weights(self) -> dict[int, float]:
        """h - E h in delays of the autoregression with coefficients `persistence` of v."""
        return {i: a for i, a in enumerate(self.alpha, start=1)}

    @property
    def square_weights(self) -> dict[int, float]:
        """e^2 - E e^2 in the same delays."""
        return {0: 1.0} | {j: -b for j, b in enumerate(self.beta, start=1)}

    @cached_property
    def spread(self) -> float:
        """Psi = Var h / Var v, inf where h has no stationary mean."""
        if self.total >= 1.0:
            return np.inf
        gamma = cross_covariance(self.persistence, self.persistence)
        alpha = np.array(self.alpha)
        lags = np.arange(len(alpha))[:, None] - np.arange(len(alpha))[None, :]
        return float(alpha @ gamma(lags) @ alpha)

    @cached_property
    def shock_variance(self) -> float:
        """Var v = (kz - 1) E h^2, inf where there is no fourth moment."""
        excess = self.law.excess_kurtosis
        if excess is None or not np.isfinite(self.variance):
            return np.inf
        left = 1.0 - (excess + 2.0) * self.spread
        return (excess + 2.0) * self.variance**2 / left if left > 0.0 else np.inf

    @property
    def kurtosis(self) -> float:
        """kz E h^2 / (E h)^2, inf where there is no fourth moment."""
        if not np.isfinite(self.shock_variance):
            return np.inf
        return (self.law.excess_kurtosis + 3.0) / (1.0 - (self.law.excess_kurtosis + 2.0) * self.spread)

    @cached_property
    def exponent(self) -> float | None:
        """E log(beta + alpha z^2) at order (1,1) and for arch(1); None at higher orders."""
        if self.feedback is None:
            return None
        a, _, b = self.feedback
        return average(self.law, lambda z: np.log(b + a * z * z))

    @property
    def strictly_stationary(self) -> tuple[bool | None, str]:
        """Whether a strictly stationary solution exists, and by which argument; None where that is open."""
        if self.total < 1.0:
            return True, f"alpha + beta sums to {self.total:.6g}, below 1 (Bollerslev 1986)"
        if self.exponent is not None:
            sign = "below" if self.exponent < 0.0 else "not below"
            return self.exponent < 0.0, f"E log(beta + alpha z^2) is {self.exponent:.6g}, {sign} 0 (Nelson 1990)"
        if sum(self.beta) >= 1.0:
            return False, "the betas sum to 1 or more (Bougerol & Picard 1992)"
        if self.total == 1.0:
            return True, "alpha + beta sums to 1 and the law has no atoms (Bougerol & Picard 1992)"
        return None, "alpha + beta sums to more than 1: at this order the top Lyapunov exponent has no closed form"

    @property
    def condition(self) -> float:
        """What rounding is multiplied by: in the variance near an end of it, in fourth moments near theirs."""
        near = [1.0 - self.total]
        if np.isfinite(self.shock_variance):
            near.append(1.0 - (self.law.excess_kurtosis + 2.0) * self.spread)
        return max((1.0 / abs(x) for x in near if x), default=1.0)

    @cached_property
    def orders(self) -> tuple[float, float]:
        """All moments below the first order exist, none from the second on (inf: not known); equal where exact.

        They are of the stationary law, and of what a given past settles to: until then each step has the moments of
        the law of z, but they grow without a bound. At order (1,1) both are twice the s with E (beta + alpha z^2)^s = 1
        (Kesten 1973; Mikosch & Starica 2000); at higher orders every even moment is decided (`theory.powers`).
        """
        law = float(self.law.highest_moment)
        if not any(self.alpha):
            return law, law
        if self.feedback is not None:
            a, _, b = self.feedback
            index = min(tail_index(self.law, lambda z: b + a * z * z), law)
            return index, index if index < 2.0 * HIGHEST else law
        if self.total >= 1.0:  # at 1 the growth of E h^s is 0 at s = 0 and s = 1, and below 0 between
            return 2.0 if self.total == 1.0 else 0.0, 2.0
        exist, end = existing_orders(self.alpha, self.beta, lambda k: self.law.moment(2 * k))
        return exist, min(end, law)

    @property
    def highest_moment(self) -> float:
        """The order below which moments are known to exist."""
        return self.orders[0]

    @property
    def power_tailed(self) -> bool:
        """Whether its tails are known to be power laws, so that its exponential has no finite mean."""
        return bool(np.isfinite(self.orders[1]))

    @property
    def settles(self) -> float:
        """Steps after which the variance path is at its limit to 1e-16; inf where it has none."""
        if self.total >= 1.0:
            return np.inf
        power, steps = companion(self.persistence), 1
        with np.errstate(under="ignore"):
            while np.abs(power).max() > SETTLED:
                power, steps = power @ power, 2 * steps
        return float(steps)

    def products_from_start(self, steps: np.ndarray) -> np.ndarray:
        """E e(u)^2 e(v)^2 at all pairs of ascending steps, from the given past."""
        return kept_products(self, self._moving, steps)

    def _moving(self) -> Moving:
        p, q = len(self.alpha), max(len(self.beta), 1)
        fixed, random = np.zeros((p + q - 1, p + q - 1)), np.zeros((p + q - 1, p + q - 1))  # A = fixed + z^2 random
        fixed[0, : len(self.beta)], fixed[0, q:], random[0, 0] = self.beta, self.alpha[1:], self.alpha[0]
        for i in (*range(1, q), *range(q + 1, p + q - 1)):
            fixed[i, i - 1] = 1.0
        if p > 1:
            random[q, 0] = 1.0
        past, squares = (self.past_variances or ())[::-1], self.past_squares[::-1]
        first = np.array([float(self.variance_path(np.zeros(1))[0]), *past[: q - 1], *squares[: p - 1]])
        kurtosis, mean = self.law.excess_kurtosis + 3.0, fixed + random

        def squared(m: np.ndarray) -> np.ndarray:
            return mean @ m @ mean.T + (kurtosis - 1.0) * (random @ m @ random.T)

        constant = self.omega * np.eye(p + q - 1)[0]
        return Moving(constant, mean, squared, fixed + kurtosis * random, kurtosis, first)

    def variance_path(self, steps: np.ndarray) -> np.ndarray:
        """E h(t) at steps >= 0 from the given past: m(t) = omega + sum alpha_i E e(t-i)^2 + sum beta_j m(t-j)."""
        steps = np.asarray(steps, np.int64)
        return self._path(int(np.max(steps, initial=0)) + 1)[steps]

    def _path(self, count: int) -> np.ndarray:
        memory = self.__dict__.setdefault("_paths", np.empty(0))
        if len(memory) < count:
            memory = self._forward(max(count, 1024, 2 * len(memory)))
            self.__dict__["_paths"] = memory
        return memory

    def _forward(self, count: int) -> np.ndarray:
        coming = np.full(count, self.omega)  # omega, and what reaches past step 0 from the given past
        for weights, past in ((self.alpha, self.past_squares), (self.beta, self.past_variances or ())):
            for i, weight in enumerate(weights, start=1):
                for t in range(min(i, count)):
                    coming[t] += weight * past[t - i]
        return recursed(self.persistence, coming)


def tail_index(law: Any, factor: Any) -> float:
    """Twice the s with E factor(z)^s = 1: the order below which e has moments when h(t+1) = omega + factor(z) h(t)."""
    highest = min(float(law.highest_moment) / 2.0, HIGHEST)

    def excess(s: float) -> float:
        return average(law, lambda z: np.exp(np.minimum(s * np.log(factor(z)), 700.0))) - 1.0

    low, high = 1e-3, 1.0
    while high < highest and excess(min(high, 0.999 * highest)) < 0.0:
        low, high = high, 2.0 * high
    high = min(high, 0.999 * highest)
    if excess(high) < 0.0:
        return 2.0 * highest  # every moment that is looked at
    if excess(low) >= 0.0:
        return 0.0
    while high - low > ROOT_TOLERANCE:  # by halves: to import a library's search takes 20 times as long
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) < 0.0 else (low, middle)
    return low + high
