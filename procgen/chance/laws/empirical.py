"""The law of an observed sample, resampled as it is or smoothed, standardised by its own moments."""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import cached_property, lru_cache
from itertools import pairwise
from typing import Any, ClassVar

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import exp, log
from procgen.chance.inversion import Inverse
from procgen.chance.laws.base import Law
from procgen.chance.laws.points import Points
from procgen.chance.normal import normal_tail
from procgen.chance.tabulated import Tabulated, folded
from procgen.spec.declare import Parameter
from procgen.spec.records import dataclass
from procgen.spec.sample import Sample, Smoothing

_FURTHEST = 13.0  # bandwidths: the normal area beyond is 6e-39
_LEAST = Smoothing.width.at_least or 0.0
_PER_ROOT_2_PI = 0.3989422804014327


@dataclass(frozen=True)
class Empirical(Law):
    """A value of a sample, each with the same chance, less their mean and over their standard deviation.

    Smoothed, a normal of standard deviation `bandwidth` (in those of the sample) is added to it, and the whole brought
    back to variance 1; by `true` the bandwidth is 0.9 min(1, interquartile range / 1.34) / n^(1/5), at least 0.05.
    """

    values: tuple[float, ...]
    smoothed: bool | float = False

    name: ClassVar[str] = "empirical"
    source: ClassVar[str] = "Efron & Tibshirani (1993), ch. 4; smoothed: Silverman (1986), eq. 3.31 and sec. 6.4.1"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("values", "", Sample(), "the sample; the numbers of a file then become a part of the spec"),
        Parameter(
            "smoothed",
            "h",
            Smoothing(),
            "whether a normal is added to the values, in standard deviations of the sample; true: by Silverman's rule",
            default=False,
        ),
    )

    def __post_init__(self) -> None:
        values = tuple([float(value) for value in self.values])
        if len(values) < 2 or not all(map(math.isfinite, values)) or min(values) == max(values):
            raise ValueError(
                f"empirical: expected at least two different values, all finite, got {len(values)} values"
                f"{f' between {min(values):g} and {max(values):g}' if values else ''}"
            )
        object.__setattr__(self, "values", values)

    def __hash__(self) -> int:
        return self._hash

    @cached_property
    def _hash(self) -> int:
        return hash((self.values, self.smoothed))

    def __str__(self) -> str:
        smoothed = f", smoothed by {self.bandwidth:.4g}" if self.bandwidth else ""
        return f"{self.name}({len(self.values):,} values{smoothed})"

    @cached_property
    def standardised(self) -> np.ndarray:
        """The values in increasing order with mean 0 and variance 1."""
        ordered, n, total = sorted(self.values), len(self.values), 0.0
        for value in ordered:
            total = total + value / n
        rest = 0.0
        for value in ordered:
            rest = rest + (value - total) / n
        mean, square = total + rest, 0.0
        for value in ordered:
            square = square + (value - mean) * (value - mean) / n
        return (np.array(ordered) - mean) / float(np.sqrt(square))

    @cached_property
    def bandwidth(self) -> float:
        """Of the normals that are added, in standard deviations of the sample; 0: none are."""
        if not isinstance(self.smoothed, bool):
            return float(self.smoothed)
        if not self.smoothed:
            return 0.0
        n, ordered = len(self.values), self.standardised
        quartiles = []
        for share in (0.25, 0.75):
            place = share * (n - 1)
            low = min(int(place), n - 2)
            quartiles.append(ordered[low] + (place - low) * (ordered[low + 1] - ordered[low]))
        spread = min(1.0, float(quartiles[1] - quartiles[0]) / 1.34) or 1.0
        return max(0.9 * spread * float(exp(-log(float(n)) / 5)), _LEAST)

    @property
    def normals(self) -> tuple[np.ndarray, float]:
        """Means and common standard deviation of the normals whose mixture the smoothed law is."""
        whole = float(np.sqrt(1 + self.bandwidth * self.bandwidth))
        return self.standardised / whole, self.bandwidth / whole

    @property
    def points(self) -> Points | None:
        return None if self.bandwidth else _points(self)

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        if self.bandwidth:
            _smooth(self).inverse.quantile(p, side, out, scratch)
            return
        n = len(self.values)
        place = np.floor(p * n).astype(np.int64)
        np.take(self.standardised, np.where(side < 0, place, n - 1 - place), out=out, mode="clip")

    @property
    def mean_size(self) -> float:
        points = self.points
        if points is not None:
            return points.mean_size
        means, sd = self.normals
        far = np.abs(means) / sd  # of a normal: sd (2 phi(far) + far (1 - 2 tail(far)))
        size = exp(far * far * -0.5) * (2 * _PER_ROOT_2_PI) + far * (1 - 2 * normal_tail(far))
        return float(folded(size[:, None])[0]) * sd / len(means)

    @property
    def balanced(self) -> bool:
        return _points(self).balanced

    def moment(self, k: int) -> float:
        if not self.bandwidth:
            return _points(self).moment(k)
        means, sd = self.normals
        return sum(
            math.comb(k, j) * float(np.mean(means ** (k - j))) * sd**j * math.prod(range(1, j, 2))
            for j in range(0, k + 1, 2)
        )

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        if not self.bandwidth:
            return _points(self).growth(rate)
        means, sd = self.normals
        blurred = rate * sd
        return Points(means, np.full(len(means), 1 / len(means))).growth(rate) + blurred * blurred / 2

    def distribution(self) -> Any:
        return _smooth(self) if self.bandwidth else _points(self).distribution()

    def expect(self, f: Callable[[float], float]) -> float:
        points = self.points
        if points is not None:
            return points.expect(f)
        from scipy.integrate import quad

        density, (means, sd) = self.distribution().pdf, self.normals
        ends = np.arange(means[0] - 9 * sd, means[-1] + 10 * sd, 2 * sd)
        edges = sorted({0.0, *ends.tolist()})
        return sum(
            quad(lambda z: f(z) * float(density(z)), low, high, epsabs=1e-12, epsrel=1e-11, limit=200)[0]
            for low, high in pairwise(edges)
        )

    def _landmarks(self) -> tuple[float, ...]:
        means, sd = self.normals
        return tuple(np.arange(means[0] - _FURTHEST * sd, means[-1] + _FURTHEST * sd, 2 * sd).tolist())


class Smooth:
    """A smoothed sample: its quantile, and the calls of a frozen SciPy distribution."""

    def __init__(self, means: np.ndarray, sd: float) -> None:
        self._means, self._sd = means, sd
        self._low, self._high = float(means[0]) - _FURTHEST * sd, float(means[-1]) + _FURTHEST * sd
        density = self._density = Tabulated(self._sum, self._low, self._high, sd / 2)
        reach, marks = max(-self._low, density.high), self._low + sd * np.arange(density.count // 2)
        self._above = Areas(density, reach, marks.tolist())
        self._below = Areas(lambda z: density(-z), reach, (-marks).tolist())

    @cached_property
    def inverse(self) -> Inverse:
        return Inverse(self._above, self._below)

    def pdf(self, z):
        return self._density(np.asarray(z, float))

    def cdf(self, z):
        z = np.asarray(z, float)
        return self._below.beyond(-np.atleast_1d(z)).reshape(z.shape)

    def sf(self, z):
        z = np.asarray(z, float)
        return self._above.beyond(np.atleast_1d(z)).reshape(z.shape)

    def ppf(self, p):
        p = np.asarray(p, float)
        return _found(p, -1.0, self._below, self._above)

    def isf(self, p):
        p = np.asarray(p, float)
        return _found(p, 1.0, self._above, self._below)

    def support(self) -> tuple[float, float]:
        return -math.inf, math.inf

    def mean(self) -> float:
        return 0.0

    def var(self) -> float:
        return 1.0

    def std(self) -> float:
        return 1.0

    def _sum(self, z: np.ndarray) -> np.ndarray:
        """The density at a few neighbouring points: only normals that are near enough count."""
        near = np.searchsorted(self._means, [z[0] - 38 * self._sd, z[-1] + 38 * self._sd])
        far = (z - self._means[near[0] : near[1], None]) / self._sd
        if not len(far):
            return np.zeros_like(z)
        return folded(exp(far * far * -0.5)) * (_PER_ROOT_2_PI / self._sd / len(self._means))


def _found(p: np.ndarray, sign: float, near: Areas, far: Areas) -> np.ndarray:
    """The points beyond which an area p lies on the side of `sign`."""
    flat = np.atleast_1d(p).ravel()
    x = np.where(flat <= 0.0, np.inf, np.where(flat >= 1.0, -np.inf, 0.0))
    small, large = (flat > 0.0) & (flat <= 0.5), (flat > 0.5) & (flat < 1.0)
    x[small] = near.point(np.maximum(flat[small], 1e-30))
    x[large] = -far.point(1.0 - flat[large])
    return sign * x.reshape(p.shape)


@lru_cache(maxsize=32)
def _points(law: Empirical) -> Points:
    values, counts = np.unique(law.standardised, return_counts=True)
    return Points(values, counts / len(law.values))


@lru_cache(maxsize=32)
def _smooth(law: Empirical) -> Smooth:
    return Smooth(*law.normals)
