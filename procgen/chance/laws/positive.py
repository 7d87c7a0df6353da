"""Laws with one bounded side, less their mean: gamma and lognormal, standardised."""

from __future__ import annotations

import math
from functools import lru_cache
from itertools import pairwise
from typing import Any, ClassVar

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import exp
from procgen.chance.inversion import Inverse
from procgen.chance.laws.base import Law
from procgen.chance.normal import normal_quantile
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass


@dataclass(frozen=True)
class Gamma(Law):
    """A gamma law less its mean; at shape 1 the exponential law, at a large shape nearly normal."""

    shape: float

    name: ClassVar[str] = "gamma"
    source: ClassVar[str] = "Johnson, Kotz & Balakrishnan (1994), ch. 17; quantile: Derflinger et al. (2010)"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("shape", "k", Real(at_least=0.5, at_most=10_000), "1: exponential; the skewness is 2 / sqrt(k)"),
    )

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        root = float(np.sqrt(self.shape))
        _inverse(self.shape).quantile(p, side, out, scratch)
        np.multiply(exp(np.divide(out, root, out=out)) - 1, root, out=out)

    def moment(self, k: int) -> float:
        moments = [1.0, 0.0]
        for n in range(1, k):  # from the cumulants (n - 1)! / shape**(n/2 - 1), by the derivative of the transform
            moments.append(n * (moments[n] / math.sqrt(self.shape) + moments[n - 1]))
        return moments[k]

    @property
    def exponential_moments(self) -> tuple[float, float]:
        return math.inf, math.sqrt(self.shape)

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        root = math.sqrt(self.shape)
        return -root * rate - self.shape * np.log1p(-rate / root)

    def distribution(self) -> Any:
        from scipy.stats import gamma

        root = math.sqrt(self.shape)
        return gamma(self.shape, loc=-root, scale=1 / root)

    def expect(self, f: Any) -> float:
        from scipy.integrate import quad

        # In w = log(x / shape), where the density has no singularity and no edge.
        root, height = math.sqrt(self.shape), self.shape * math.log(self.shape) - math.lgamma(self.shape)

        def integrand(w: float) -> float:
            if w > 700.0:
                return 0.0
            density = math.exp(max(self.shape * (w - math.exp(w)) + height, -745.0))
            return f(root * math.expm1(w)) * density if density > 1e-320 else 0.0

        far = 40.0 / root + 40.0 / self.shape
        edges = [-far, -8 / root, -4 / root, -1 / root, 0.0, 1 / root, 4 / root, min(8 / root, far), far]
        edges = sorted({min(max(edge, -far), far) for edge in edges})
        return sum(
            quad(integrand, low, high, epsabs=1e-12, epsrel=1e-11, limit=500)[0] for low, high in pairwise(edges)
        )


@dataclass(frozen=True)
class Lognormal(Law):
    """The exponential of a normal less its mean."""

    sigma: float

    name: ClassVar[str] = "lognormal"
    source: ClassVar[str] = "Aitchison & Brown (1957)"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("sigma", "s", Real(at_least=0.001, at_most=2), "standard deviation of its logarithm"),
    )

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        np.copysign(normal_quantile(p), side, out=out)
        self._from_normals(out, out, scratch)

    def _from_normals(self, z: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        s = self.sigma
        np.multiply(exp(np.subtract(np.multiply(z, s, out=out), s * s / 2, out=out)) - 1, 1 / self._sd, out=out)

    @property
    def _sd(self) -> float:
        """Of the lognormal with mean 1: sqrt(exp(s^2) - 1), by the series of its first digits where s is small."""
        v = self.sigma * self.sigma
        if v < 0.01:
            return float(np.sqrt(v * (1 + v / 2 * (1 + v / 3 * (1 + v / 4 * (1 + v / 5 * (1 + v / 6)))))))
        return float(np.sqrt(exp(v) - 1))

    def moment(self, k: int) -> float:
        # E x^j is (1 + d)^(j (j - 1) / 2) with d = exp(s^2) - 1; powers of d are collected in whole numbers.
        d, total = math.expm1(self.sigma * self.sigma), 0.0
        for i in range(k * (k - 1) // 2 + 1):
            c = sum((-1) ** (k - j) * math.comb(k, j) * math.comb(j * (j - 1) // 2, i) for j in range(k + 1))
            total += c * d ** (i - k / 2) if c else 0.0
        return total

    @property
    def exponential_moments(self) -> tuple[float, float]:
        return math.inf, 0.0

    def distribution(self) -> Any:
        from procgen.chance.laws import distributions

        return distributions.Lognormal(self.sigma, math.exp(-(self.sigma**2) / 2) / self._sd, -1 / self._sd)

    def expect(self, f: Any) -> float:
        from scipy.integrate import quad

        s, sd = self.sigma, math.sqrt(math.expm1(self.sigma**2))

        def integrand(n: float) -> float:
            density = math.exp(-n * n / 2) / math.sqrt(2 * math.pi)
            return f(math.expm1(s * n - s * s / 2) / sd) * density if density > 1e-320 else 0.0

        edges = (-38.0, -8.0, -2.0, s / 2, s / 2 + 2, s / 2 + 8, 38.0)
        return sum(
            quad(integrand, low, high, epsabs=1e-12, epsrel=1e-11, limit=500)[0] for low, high in pairwise(edges)
        )


@lru_cache(maxsize=64)
def _inverse(shape: float) -> Inverse:
    """Of the logarithm of a gamma variable over its shape, in units of 1 / sqrt(shape): smooth on the whole line."""
    root = float(np.sqrt(shape))

    def density(y: np.ndarray) -> np.ndarray:
        w = np.minimum(y / root, 700.0)
        return exp(shape * ((w - exp(w)) + 1))

    reach = 13 + 80 / root
    return Inverse(Areas(density, reach), Areas(lambda y: density(-y), reach))
