"""Noises whose log variance is a first-order autoregression: exponential garch and stochastic volatility.

With l = log h, l(t+1) = omega + beta l(t) + g(t), and K(q) = log E exp(q g), everything follows from
S(q) = K(q) + K(beta q) + K(beta^2 q) + ..:

    log E h^p = p omega / (1 - beta) + S(p)
    log (E h(t) h(t+k) / (E h)^2) = S(1 + beta^k) - S(1) - S(beta^k)

and E e(t)^2 e(t+k)^2 is that times E z^2 exp(q g) / E exp(q g) at q = beta^(k-1), since g(t) may depend on z(t)
(Nelson 1991, Econometrica 59, 347-370, appendix; Taylor 1986; Taylor 1994, Math. Finance 4, for the last).
"""

from __future__ import annotations

from functools import cached_property, lru_cache
from itertools import pairwise
from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Lognormal
from procgen.spec.records import dataclass
from procgen.theory.copula import is_symmetric
from procgen.theory.unknown import Unknown
from procgen.theory.volatility import Volatility

DEGREES = (16, 32, 64, 128)
SETTLED = 1e-12  # of a Chebyshev series: its last coefficients beside its largest
HALVINGS = 48
NEGLIGIBLE_RATE = 1e-13  # K(q) below it is q E g but for q^2
LARGEST_EXPONENT = 600.0
NEGLIGIBLE = 1e-18
ADDED_AT_ONCE = 1 << 12  # values of K
FAR = 37.0  # standard deviations of a normal: the area beyond is 1e-299
PANELS = 256
MOST_STEPS = 256
LONGEST_TABLE = 1 << 16  # steps of a path of variances that is kept


class LogVariance(Volatility):
    """What both families share. `mean_log` is E l, `beta` the coefficient of l."""

    beta: float
    mean_log: float
    first_log: float | None = None  # l(0), where it is given

    def cumulants(self, q: np.ndarray) -> np.ndarray:
        """S(q) for q in [0, 2]."""
        raise NotImplementedError

    def tilt(self, q: np.ndarray) -> np.ndarray:
        """log (E z^2 exp(q g) / E exp(q g)) for q in [0, 1]."""
        raise NotImplementedError

    @property
    def limit(self) -> float:
        """The order below which E h^p is finite."""
        return np.inf

    @property
    def total(self) -> float:  # type: ignore[override]
        return self.beta

    @property
    def started(self) -> bool:  # type: ignore[override]
        return self.first_log is not None

    @cached_property
    def variance(self) -> float:  # type: ignore[override]
        return self._power(1.0) if self.limit > 1.0 else np.inf

    @property
    def highest_moment(self) -> float:  # type: ignore[override]
        return min(float(self.law.highest_moment), 2.0 * self.limit)

    @property
    def power_tailed(self) -> bool:
        return bool(np.isfinite(float(self.law.highest_moment)))

    @property
    def strictly_stationary(self) -> tuple[bool | None, str]:  # type: ignore[override]
        return True, f"its log variance is an autoregression with coefficient {self.beta:.6g} (Nelson 1991)"

    def variance_path(self, steps):
        count = int(np.max(steps, initial=0)) + 1
        if count > LONGEST_TABLE:
            return self._variance_at(np.asarray(steps, float))
        kept = self.__dict__.get("_path", np.zeros(0))
        if len(kept) < count:
            kept = self._variance_at(np.arange(max(count, 256, min(2 * len(kept), LONGEST_TABLE)), dtype=float))
            self.__dict__["_path"] = kept
        return kept[np.asarray(steps, np.int64)]

    def _variance_at(self, steps: np.ndarray) -> np.ndarray:
        assert self.first_log is not None
        left = self.beta**steps
        mean = self.mean_log + (self.first_log - self.mean_log) * left
        return np.exp(mean + self.cumulants(np.ones(1))[0] - self.cumulants(left))

    def products_from_start(self, steps):
        assert self.first_log is not None
        if len(steps) > MOST_STEPS:
            raise Unknown(f"fourth moments from a given log variance are added up over {MOST_STEPS} shocks only")
        if self.limit <= 2.0:
            raise Unknown("infinite fourth moment: the exponential of its shocks has no second power")
        late, early = np.tril_indices(len(steps))
        gap, left = steps[late] - steps[early], self.beta ** steps.astype(float)
        k, one = self.beta ** gap.astype(float), self.cumulants(np.ones(1))[0]
        log = 2.0 * self.mean_log + (left[late] + left[early]) * (self.first_log - self.mean_log)
        log = log + self.cumulants(1.0 + k) - self.cumulants(left[early] * (1.0 + k)) + one - self.cumulants(k)
        later = log + self.tilt(self.beta ** np.maximum(gap - 1.0, 0.0))
        out = np.empty((len(steps), len(steps)))
        out[late, early] = np.where(gap == 0, (self.law.excess_kurtosis + 3.0) * np.exp(log), np.exp(later))
        out[early, late] = out[late, early]
        return out

    def variance_covariance(self, lags):
        return self.variance**2 * np.expm1(self._joint(lags))

    def square_covariance(self, lags):
        excess = self.law.excess_kurtosis
        if excess is None:
            raise Unknown("infinite fourth moment: the law of the shocks has none")
        together = self._joint(lags)
        later = together + self.tilt(self.beta ** np.maximum(lags - 1.0, 0.0))
        return self.variance**2 * np.where(lags == 0, (excess + 3.0) * np.exp(together) - 1.0, np.expm1(later))

    def _joint(self, lags) -> np.ndarray:
        """log (E h(t) h(t+lag) / (E h)^2)."""
        if self.limit <= 2.0:
            raise Unknown("infinite fourth moment: the exponential of its shocks has no second power")
        left = self.beta ** np.asarray(lags, float)
        flat = left.ravel()
        both, alone, one = np.split(self.cumulants(np.concatenate([1.0 + flat, flat, [1.0]])), [flat.size, -1])
        return (both - one - alone).reshape(left.shape)  # added up alike, so that their errors cancel at long lags

    def _power(self, p: float) -> float:
        return float(np.exp(p * self.mean_log + self.cumulants(np.array([p]))[0]))


@dataclass(frozen=True)
class Stochastic(LogVariance):
    """g(t) = eta (rho z(t) + sqrt(1 - rho^2) w(t)) with a normal w, and a normal z where rho is not 0."""

    law: Any
    mean_log: float
    beta: float
    eta: float
    rho: float = 0.0

    @property
    def leverage(self) -> bool:  # type: ignore[override]
        return self.rho != 0.0

    @property
    def log_variance(self) -> float:
        """Var l."""
        return self.eta**2 / (1.0 - self.beta**2)

    def cumulants(self, q):
        return q * q * (self.log_variance / 2.0)

    def tilt(self, q):
        return np.log1p((self.rho * self.eta * q) ** 2)

    def variance_law(self):
        return Lognormal(float(np.sqrt(self.log_variance)), float(np.exp(self.mean_log)))


@dataclass(frozen=True)
class Egarch(LogVariance):
    """g(t) = alpha (abs(z(t)) - centre) + gamma z(t)."""

    law: Any
    mean_log: float
    beta: float
    alpha: float
    gamma: float
    centre: float
    first_log: float | None = None

    @cached_property
    def leverage(self) -> bool:  # type: ignore[override]
        return self.gamma != 0.0

    @property
    def limit(self) -> float:
        lower, upper = self.law.exponential_moments
        slopes = ((self.alpha + self.gamma, upper), (self.alpha - self.gamma, lower))
        return min((rate / slope for slope, rate in slopes if slope > 0.0), default=np.inf)

    @cached_property
    def _series(self) -> tuple[Pieces, Pieces, float]:
        return _exponential_moments(self.law, self.alpha, self.gamma, self.centre, 2.0 if self.limit > 2.0 else 1.0)

    def _log_mean(self, q: np.ndarray) -> np.ndarray:
        """K(q)."""
        bent, _, level = self._series
        return np.log1p(q * level + q * q * bent(q))

    def cumulants(self, q):
        q, left = np.asarray(q, float), 1.0
        total, rows = np.zeros(q.shape), int(np.clip(ADDED_AT_ONCE // max(q.size, 1), 1, 256))
        while True:
            powers = np.multiply.accumulate(np.concatenate([[left], np.full(rows, self.beta)]))
            added = self._log_mean(q * powers[:-1].reshape(-1, *np.ones(q.ndim, int)))
            largest = np.abs(added).reshape(rows, -1).max(axis=1, initial=0.0)
            last = np.flatnonzero(largest * powers[1:] <= NEGLIGIBLE * (1.0 - self.beta))
            for one in added[: last[0] + 1 if len(last) else rows]:  # from the first on, whatever stands beside q
                total = total + one
            if len(last):
                return total
            left = float(powers[-1])

    def tilt(self, q):
        _, tilted, _ = self._series
        return np.log(tilted(q)) - self._log_mean(q)


@dataclass(frozen=True)
class Pieces:
    """A function of q as Chebyshev series between edges; `coefficients` (degree + 1, pieces)."""

    edges: np.ndarray
    coefficients: np.ndarray

    def __call__(self, q: np.ndarray) -> np.ndarray:
        q = np.asarray(q, float)
        at = np.clip(np.searchsorted(self.edges, q, side="right") - 1, 0, len(self.edges) - 2)
        low, high = self.edges[at], self.edges[at + 1]
        inside = (2.0 * q - low - high) / (high - low)
        return np.polynomial.chebyshev.chebval(inside, self.coefficients[:, at], tensor=False)


@lru_cache(maxsize=64)
def _exponential_moments(law: Any, alpha: float, gamma: float, centre: float, top: float):
    """(E exp(q g) - 1 - q E g) / q^2 and E z^2 exp(q g) for q in [0, top], and E g.

    One Chebyshev series each; or one between any two of `HALVINGS` halvings of `top`, since of a law with power tails
    they have few derivatives at 0, but all beyond it. Unknown where the series do not settle.
    """
    z, weights = _nodes(law)
    with np.errstate(over="ignore", invalid="ignore"):  # what overflows in a heavy tail does not settle either
        g = alpha * (np.abs(z) - centre) + gamma * z

        def fitted(low: float, high: float, degree: int) -> list[np.ndarray] | None:
            x = np.cos(np.pi * (np.arange(degree + 1) + 0.5) / (degree + 1))
            grown = np.minimum(np.outer(low + (high - low) * (x + 1.0) / 2.0, g), LARGEST_EXPONENT)
            values = _bent(grown) @ (weights * g * g), np.exp(grown) @ (weights * z * z)
            series = [np.polynomial.chebyshev.chebfit(x, value, degree) for value in values]
            settled = all(np.abs(c[-3:]).max() <= SETTLED * np.abs(c).max() for c in series)
            return series if settled or high <= NEGLIGIBLE_RATE else None

        def pieces(edges: np.ndarray, degree: int) -> list[Pieces] | None:
            found = [fitted(low, high, degree) for low, high in pairwise(edges.tolist())]
            if any(series is None for series in found):
                return None
            return [Pieces(edges, np.stack([series[i] for series in found], axis=1)) for i in (0, 1)]  # type: ignore[index]

        whole, halves = np.array([0.0, top]), np.concatenate([[0.0], top / 2.0 ** np.arange(HALVINGS, -1, -1)])
        tries = [(halves, DEGREES[1])] if np.isfinite(law.highest_moment) else [(whole, degree) for degree in DEGREES]
        for edges, degree in tries:
            both = pieces(edges, degree)
            if both is not None:
                return both[0], both[1], float(weights @ g)
    raise Unknown("it is too near to where its moments end, or of too heavy tails, for them to be computed")


def _nodes(law: Any) -> tuple[np.ndarray, np.ndarray]:
    """Values of z and their weights in an expectation: Gauss's rule over a normal n with the rank of z.

    A law whose tails fall faster than any exponential is its own quantile, which ends far out; the others are SciPy's.
    """
    from scipy.special import ndtr, ndtri

    turn = 0.0 if is_symmetric(law) else float(ndtri(law.distribution().cdf(0.0)))
    ends = np.concatenate([np.linspace(-FAR, turn, PANELS + 1), np.linspace(turn, FAR, PANELS + 1)[1:]])
    x, w = np.polynomial.legendre.leggauss(16)
    half = np.diff(ends)[:, None] / 2.0
    n, weights = (ends[:-1, None] + half * (x + 1.0)).ravel(), (half * w).ravel()
    weights = weights * np.exp(-n * n / 2.0) / np.sqrt(2.0 * np.pi)
    if all(np.isinf(law.exponential_moments)):
        return law.shocks_from_normals(n), weights
    tail, distribution = ndtr(-np.abs(n)), law.distribution()
    z = np.where(n < 0.0, distribution.ppf(tail), distribution.isf(tail))
    for side in (n < 0.0, n >= 0.0):  # SciPy's quantiles end, where a power law is its own asymptote
        lost = side & ~np.isfinite(z)
        if lost.any():
            (last,) = np.nonzero(side & np.isfinite(z) & (tail == np.min(tail[side & np.isfinite(z)])))
            z[lost] = z[last[0]] * (tail[last[0]] / tail[lost]) ** (1.0 / law.highest_moment)
    return z, weights


def _bent(x: np.ndarray) -> np.ndarray:
    """(exp(x) - 1 - x) / x^2."""
    near = np.abs(x) < 0.3
    small = np.where(near, x, 0.0)
    series = np.zeros(np.shape(x))
    for n in range(14, 1, -1):
        series = 1.0 + series * small / (n + 1.0)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(near, series / 2.0, (np.expm1(x) - x) / (x * x))
