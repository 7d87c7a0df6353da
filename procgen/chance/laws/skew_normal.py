"""Azzalini's skew normal law, standardised."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import exp
from procgen.chance.inversion import Inverse
from procgen.chance.laws.base import Law
from procgen.chance.normal import normal_tail
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass

_ROOT_2_PER_PI = 0.7978845608028654
_FURTHEST = 13.0  # standard deviations: the normal area beyond is 6e-39
_CANCELS, _NODES = 3.0, 48  # standard deviations beyond which areas are integrated; points of the rule
_MARKS = (-8, -4, -2, -1, 0, 1, 2, 4, 8)


@dataclass(frozen=True)
class SkewNormal(Law):
    """The density of a normal times the area below alpha times its argument, standardised."""

    alpha: float

    name: ClassVar[str] = "skew_normal"
    source: ClassVar[str] = "Azzalini (1985); quantile by numerical inversion, Derflinger et al. (2010)"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("alpha", "α", Real(at_least=-50, at_most=50), "above 0: the upper tail is the longer one"),
    )

    @property
    def mean_and_sd(self) -> tuple[float, float]:
        """Of the law before it is standardised."""
        mean = self._delta * _ROOT_2_PER_PI
        return mean, float(np.sqrt(1 - mean * mean))

    @property
    def _delta(self) -> float:
        return self.alpha / float(np.sqrt(1 + self.alpha * self.alpha))

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        _inverse(self).quantile(p, side, out, scratch)

    def moment(self, k: int) -> float:
        # x = delta abs(u) + sqrt(1 - delta^2) v of independent normals u, v (Henze 1986)
        _, sd = self.mean_and_sd
        d = self._delta

        def absolute(j: int) -> float:
            return 2 ** (j / 2) * math.gamma((j + 1) / 2) / math.sqrt(math.pi)

        def centred(j: int) -> float:
            return sum(math.comb(j, i) * d**j * absolute(i) * (-_ROOT_2_PER_PI) ** (j - i) for i in range(j + 1))

        normal = [0.0 if j % 2 else math.prod(range(1, j, 2)) * (1 - d * d) ** (j // 2) for j in range(k + 1)]
        return sum(math.comb(k, j) * centred(j) * normal[k - j] for j in range(k + 1)) / sd**k

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        from scipy.special import log_ndtr

        mean, sd = self.mean_and_sd
        q = rate / sd
        return math.log(2) + q * q / 2 + log_ndtr(self._delta * q) - mean * q

    def distribution(self) -> Any:
        return _distribution(self)

    def _landmarks(self) -> tuple[float, ...]:
        mean, sd = self.mean_and_sd
        width = 1 / (1 + abs(self.alpha))  # over which the density rises from the steep side
        return tuple(sorted({0.0, *((i * width - mean) / sd for i in _MARKS), *((i - mean) / sd for i in _MARKS)}))


@lru_cache(maxsize=64)
def _inverse(law: SkewNormal) -> Inverse:
    (mean, sd), alpha = law.mean_and_sd, law.alpha

    def density(z: np.ndarray) -> np.ndarray:
        x = mean + sd * z
        tail = normal_tail(np.abs(alpha * x))
        return exp(x * x * -0.5) * np.where(alpha * x < 0, tail, 1 - tail)

    reach, marks = (abs(mean) + _FURTHEST) / sd, law._landmarks()
    return Inverse(Areas(density, reach, marks), Areas(lambda z: density(-z), reach, [-mark for mark in marks]))


@lru_cache(maxsize=64)
def _distribution(law: SkewNormal) -> Any:
    """The law before it is standardised. SciPy's own integrates the tail of each point by itself."""
    from scipy.special import ndtr, owens_t, roots_laguerre
    from scipy.stats import norm, rv_continuous, skewnorm

    alpha, (nodes, weights) = law.alpha, roots_laguerre(_NODES)

    def below(x, a):
        """F = Φ − 2 T (Owen 1956); where that cancels, F = 1/π times the integral over t > a of

        exp(−x² (1 + t²) / 2) / (1 + t²),   with t² = a² + 2 v / x²   by Laguerre's rule in v.
        """
        near = np.asarray(ndtr(x) - 2 * owens_t(x, a))
        far = (x < 0) & (a * np.abs(x) > _CANCELS)
        if far.any():
            z, square = x[far], np.square(x[far])[:, None]
            t = a * a + 2 * nodes / square
            near[far] = 2 * norm.pdf(z) * norm.pdf(a * z) * (weights / (square * (1 + t) * np.sqrt(t))).sum(axis=1)
        return np.clip(near, 0.0, 1.0)

    class Azzalini(rv_continuous):
        def _pdf(self, x):
            return skewnorm.pdf(x, alpha)

        def _cdf(self, x):
            return below(x, alpha)

        def _sf(self, x):
            return below(-x, -alpha)

        def _ppf(self, p):
            return skewnorm.ppf(p, alpha)

        def _isf(self, p):
            return skewnorm.isf(p, alpha)

        def _stats(self):
            return tuple(map(float, skewnorm.stats(alpha, moments="mvsk")))

    mean, sd = law.mean_and_sd
    return Azzalini(name="skew_normal")(loc=-mean / sd, scale=1 / sd)
