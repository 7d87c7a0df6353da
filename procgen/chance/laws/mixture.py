"""A mixture of two normal laws, standardised to mean 0 and variance 1."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import exp
from procgen.chance.inversion import Inverse
from procgen.chance.laws.base import Law
from procgen.spec.declare import Parameter, Real

_FURTHEST = 13.0  # standard deviations: the normal area beyond is 6e-39
_MARKS = (-12, -8, -6, -4, -2, 0, 2, 4, 6, 8, 12)
_HALVINGS = 200


@dataclass(frozen=True)
class Mixture(Law):
    """With probability 1 - weight a normal N(0, 1), else N(shift, ratio**2); then standardised."""

    weight: float
    ratio: float
    shift: float = 0.0

    name: ClassVar[str] = "mixture"
    source: ClassVar[str] = "Pearson (1894); quantile by numerical inversion, Derflinger et al. (2010)"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("weight", "w", Real(above=0, below=1), "probability of the second normal"),
        Parameter("ratio", "r", Real(at_least=0.01, at_most=100), "its standard deviation relative to the first's"),
        Parameter(
            "shift",
            "m",
            Real(at_least=-20, at_most=20),
            "its mean less the first's, in standard deviations of the first",
            default=0.0,
        ),
    )

    @property
    def components(self) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
        """(weight, mean, standard deviation) of both normals of the standardised law."""
        w, r, m = self.weight, self.ratio, self.shift
        sd = float(np.sqrt((1 - w) + w * (r * r) + w * (1 - w) * (m * m)))
        return (1 - w, -w * m / sd, 1 / sd), (w, (1 - w) * m / sd, r / sd)

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        _inverse(self).quantile(p, side, out, scratch)

    def moment(self, k: int) -> float:
        return Normals(self.components).moment(k)

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        return Normals(self.components).growth(rate)

    def distribution(self) -> Any:
        return _distribution(self)

    def _landmarks(self) -> tuple[float, ...]:
        return Normals(self.components).landmarks


@lru_cache(maxsize=64)
def _inverse(law: Mixture) -> Inverse:
    return Normals(law.components).inverse(law.shift == 0.0)


@lru_cache(maxsize=64)
def _distribution(law: Mixture) -> Any:
    return Normals(law.components).distribution()


@dataclass(frozen=True)
class Normals:
    """Several normals, as (weight, mean, standard deviation); the weights add up to 1."""

    parts: tuple[tuple[float, float, float], ...]

    @property
    def landmarks(self) -> tuple[float, ...]:
        """Points around each of them, close enough for a quadrature to see the narrow ones."""
        return tuple(sorted({0.0, *(mean + i * sd for _, mean, sd in self.parts for i in _MARKS)}))

    def inverse(self, symmetric: bool) -> Inverse:
        """The quantile of their mixture."""

        def density(z: np.ndarray) -> np.ndarray:
            total = np.zeros_like(z)
            for w, mean, sd in self.parts:
                far = (z - mean) / sd
                total += exp(far * far * -0.5) * (w / sd)
            return total

        reach = max(abs(mean) + _FURTHEST * sd for _, mean, sd in self.parts)
        marks = self.landmarks
        if symmetric:
            return Inverse(Areas(density, reach, marks))
        return Inverse(Areas(density, reach, marks), Areas(lambda z: density(-z), reach, [-mark for mark in marks]))

    def moment(self, k: int) -> float:
        """E z^k."""
        return sum(
            w * math.comb(k, j) * mean ** (k - j) * sd**j * math.prod(range(1, j, 2))
            for w, mean, sd in self.parts
            for j in range(0, k + 1, 2)
        )

    def growth(self, rate: np.ndarray) -> np.ndarray:
        """log E exp(rate z)."""
        from scipy.special import logsumexp

        exponents = [mean * rate + (sd * rate) ** 2 / 2 for _, mean, sd in self.parts]
        return logsumexp(np.stack(exponents, axis=1), b=[w for w, _, _ in self.parts], axis=1)

    def distribution(self) -> Any:
        """Their mixture as a frozen SciPy distribution."""
        from scipy.special import ndtr, ndtri
        from scipy.stats import norm, rv_continuous

        parts, moment = self.parts, self.moment

        class Mixed(rv_continuous):
            def _pdf(self, x):
                return sum(w * norm.pdf(x, mean, sd) for w, mean, sd in parts)

            def _cdf(self, x):
                return sum(w * ndtr((x - mean) / sd) for w, mean, sd in parts)

            def _sf(self, x):
                return sum(w * ndtr((mean - x) / sd) for w, mean, sd in parts)

            def _ppf(self, p):
                ends = _ends(ndtri(p))
                low = halved(lambda x: self._cdf(x) < p, *ends)
                return np.where(p < 0.5, low, halved(lambda x: self._sf(x) > 1.0 - p, *ends))

            def _isf(self, p):
                ends = _ends(-ndtri(p))
                high = halved(lambda x: self._sf(x) > p, *ends)
                return np.where(p < 0.5, high, halved(lambda x: self._cdf(x) < 1.0 - p, *ends))

            def _munp(self, n):
                return moment(int(n))

        def _ends(g):
            each = [mean + sd * g for _, mean, sd in parts]
            return np.min(each, axis=0), np.max(each, axis=0)

        return Mixed(name="mixture")()


def halved(beyond: Callable[[np.ndarray], np.ndarray], low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """Where `beyond` turns from true to false between two arrays of ends, by halving, to the last bit."""
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        if np.all((middle == low) | (middle == high)):
            break
        further = beyond(middle)
        low, high = np.where(further, middle, low), np.where(further, high, middle)
    return 0.5 * (low + high)
