"""A mixture of two normal laws, standardised to mean 0 and variance 1."""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import exp
from procgen.chance.inversion import Inverse
from procgen.chance.laws.base import Law
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass

_FURTHEST = 13.0  # standard deviations: the normal area beyond is 6e-39
_MARKS = (-12, -8, -6, -4, -2, 0, 2, 4, 6, 8, 12)
_HALVINGS = 200
_ROUNDING = 2.0**-50  # of an area that is added up, in units of its own
_NEAR = 2.0**-40  # of a value


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
                return self._found(p, 1.0 - p, *_ends(ndtri(p)))

            def _isf(self, p):
                return self._found(1.0 - p, p, *_ends(-ndtri(p)))

            def _found(self, p, rest, low, high):
                lower, unit = p < 0.5, np.minimum(p, rest)
                return crossed(lambda x: np.where(lower, self._cdf(x) - p, rest - self._sf(x)) / unit, low, high)

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


def crossed(f: Callable[[np.ndarray], np.ndarray], low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """Where f, which rises, comes to 0 between two arrays of ends; an end where it is beyond.

    By Chandrupatla (1997, Advances in Engineering Software 28, 145-149): through three points where they lie well, else
    by halving. Found is what f makes of is 0 but for rounding, which is taken to be that of areas in units of their
    own; where f is level there, its level begins at what is found.
    """
    low, high = np.broadcast_arrays(np.asarray(low, float), np.asarray(high, float))
    with np.errstate(all="ignore"):  # what comes of equal values is not used
        x1, x2, f1, f2 = high, low, f(high), f(low)
        found = np.where(f2 >= 0.0, low, np.where(f1 < 0.0, high, 0.5 * (low + high)))  # the last of infinite ends
        left = (f2 < 0.0) & (f1 >= 0.0) & np.isfinite(low) & np.isfinite(high)
        t = np.full(low.shape, 0.5)
        for _ in range(_HALVINGS):
            if not left.any():
                break
            x = np.where(left, x1 + t * (x2 - x1), x1)
            fx = f(x)
            same = (fx < 0.0) == (f1 < 0.0)
            x3, f3 = np.where(same, x1, x2), np.where(same, f1, f2)
            x2, f2 = np.where(same, x2, x1), np.where(same, f2, f1)
            x1, f1 = x, fx
            nearer = np.abs(f1) < np.abs(f2)
            best, rest = np.where(nearer, x1, x2), np.where(nearer, f1, f2)
            least = 2.0**-53 * np.abs(best) / np.abs(x2 - x1)
            found = np.where(left, best, found)
            left = left & (np.abs(rest) > _ROUNDING) & (least <= 0.25)
            xi, phi = (x1 - x2) / (x3 - x2), (f1 - f2) / (f3 - f2)
            t = f1 / (f2 - f1) * f3 / (f2 - f3) + (x3 - x1) / (x2 - x1) * f1 / (f3 - f1) * f2 / (f3 - f2)
            t = np.where((phi * phi < xi) & ((1.0 - phi) * (1.0 - phi) < 1.0 - xi) & np.isfinite(t), t, 0.5)
            t = np.minimum(np.maximum(t, least), 1.0 - least)
        before = found - 8.0 * _ROUNDING * (x1 - x2) / (f1 - f2) - _NEAR * np.maximum(np.abs(found), high - low)
        level = (before > low) & (np.abs(f(found)) <= _ROUNDING) & (f(np.maximum(before, low)) >= -_ROUNDING)
        if level.any():
            found = np.where(level, halved(lambda x: f(x) < -_ROUNDING, low, found), found)
    return found
