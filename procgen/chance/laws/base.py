"""What a law of shocks is: shocks from uniforms or from correlated normals, and its theory."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import fields
from functools import lru_cache
from itertools import pairwise
from typing import TYPE_CHECKING, Any, ClassVar, cast

import numpy as np

from procgen.chance.areas import gauss_rule
from procgen.chance.blocks import Scratch, blockwise
from procgen.chance.elementary import exp
from procgen.chance.normal import normal_tail_of
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass

if TYPE_CHECKING:
    from procgen.chance.laws.points import Points

_LAST = 9.25  # the normal area beyond is the least that a quantile is built for
_PANELS = 64
_PER_ROOT_2_PI = 0.3989422804014327


@dataclass(frozen=True)
class Law:
    """A law with mean 0 and variance 1, whose shocks are non-decreasing functions of one uniform.

    A law that has no variance has a unit of its own, in which `spread` is told.

    A law declares its parameters and fields of the same names, and implements `_quantile` (value code, portable
    unless it says otherwise), `moment` and `distribution` (theory). ValueError when a parameter is out of its domain.
    """

    name: ClassVar[str]
    source: ClassVar[str]
    parameters: ClassVar[tuple[Parameter, ...]] = ()
    gaussian: ClassVar[bool] = False
    portable: ClassVar[bool] = True
    scaled_by: ClassVar[str] = "sd"  # or "spread", of a law that has no variance

    def __post_init__(self) -> None:
        for parameter in self.parameters:
            value, domain = getattr(self, parameter.name), cast(Real, parameter.domain)
            number = isinstance(value, int | float) and not isinstance(value, bool)
            if not (number and math.isfinite(value) and domain.holds(value)):
                raise ValueError(f"{self.name}: expected {parameter.name} to be {domain.describe()}, got {value!r}")
            object.__setattr__(self, parameter.name, float(value))

    def __str__(self) -> str:
        values = ", ".join(f"{field.name}={getattr(self, field.name):.12g}" for field in fields(self))
        return f"{self.name}({values})" if values else self.name

    # shocks

    def shocks(self, u, out: np.ndarray | None = None) -> np.ndarray:
        """Shocks of uniforms in (0, 1), elementwise; out may be u itself."""
        return blockwise(self._from_uniforms, u, out)

    def shocks_from_normals(self, z, out: np.ndarray | None = None) -> np.ndarray:
        """Shocks with the ranks of standard normals z, elementwise; out may be z itself."""
        return blockwise(self._from_normals, z, out)

    def _from_uniforms(self, u: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        side, p = scratch(12, len(u)), scratch(13, len(u))
        np.subtract(u, 0.5, out=side)
        np.minimum(u, np.subtract(1.0, u, out=p), out=p)
        self._quantile(p, side, out, scratch)

    def _from_normals(self, z: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        side, p = scratch(12, len(z)), scratch(13, len(z))
        np.copyto(side, z)
        normal_tail_of(np.abs(z, out=p), p, scratch)
        self._quantile(p, side, out, scratch)

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        """The values beyond which the area p <= 1/2 lies, on the lower side where side < 0.

        Vectors; work arrays 0 to 11 are free.
        """
        raise NotImplementedError

    @property
    def mean_size(self) -> float:
        """E abs(z) to about 1e-9, by portable operations."""
        return _mean_size(self)

    @property
    def needs_spread(self) -> bool:
        """Whether it has no variance, so that only a `spread` can scale it."""
        return self.scaled_by == "spread"

    @property
    def points(self) -> Points | None:
        """The values and their chances of a law of finitely many values; None of a law with a density."""
        return None

    @property
    def balanced(self) -> bool:
        """Whether z and -z have the same law, asked of a few of its quantiles."""
        z = np.array([0.3, 1.1, 2.5, 5.0])
        upper, lower = self.shocks_from_normals(z), self.shocks_from_normals(-z)
        return bool((np.abs(upper + lower) <= 1e-9 * upper).all())

    # theory

    @property
    def highest_moment(self) -> float:
        """The order below which moments exist; inf when all do."""
        return math.inf

    def moment(self, k: int) -> float | None:
        """E z^k; None where it is infinite or undefined."""
        raise NotImplementedError

    @property
    def skewness(self) -> float | None:
        """E z^3; None where it does not exist."""
        return self.moment(3)

    @property
    def excess_kurtosis(self) -> float | None:
        """E z^4 - 3; None where it is infinite."""
        fourth = self.moment(4)
        return None if fourth is None else fourth - 3.0

    @property
    def exponential_moments(self) -> tuple[float, float]:
        """The rates q below which E exp(q abs(z)) over the lower and over the upper side is finite."""
        return (math.inf, math.inf) if math.isinf(self.highest_moment) else (0.0, 0.0)

    def growth(self, rates: np.ndarray) -> np.ndarray | None:
        """log E exp(rate z), elementwise: inf where that is infinite; None where it has no elementary form."""
        lower, upper = self.exponential_moments
        exists = np.abs(rates) < np.where(rates > 0.0, upper, lower)
        found = self._growth(np.where(exists & (rates != 0.0), rates, 1e-300))
        if found is None and exists.any():
            return None
        return np.where(rates == 0.0, 0.0, np.where(exists, 0.0 if found is None else found, math.inf))

    def _growth(self, rates: np.ndarray) -> np.ndarray | None:
        """The same where it is finite."""
        return None

    def distribution(self) -> Any:
        """The law as a frozen SciPy distribution: pdf, cdf, sf, ppf, isf, moment."""
        raise NotImplementedError

    def expect(self, f: Callable[[float], float]) -> float:
        """E f(z) by adaptive quadrature to about 1e-10, f finite but for an integrable singularity at 0."""
        from scipy.integrate import quad

        pdf = self.distribution().pdf
        edges = [-math.inf, *self._landmarks(), math.inf]
        total = 0.0
        for low, high in pairwise(edges):
            total += quad(lambda z: f(z) * pdf(z), low, high, epsabs=1e-12, epsrel=1e-11, limit=500)[0]
        return total

    def _landmarks(self) -> tuple[float, ...]:
        """Points where a quadrature is better cut, in increasing order."""
        return (-1.0, 0.0, 1.0)


@lru_cache(maxsize=64)
def _mean_size(law: Law) -> float:
    """Twice the mean over the upper side, by Gauss's rule over the normals that have the ranks of the shocks."""
    low, high = -_LAST, _LAST
    for _ in range(60):  # where the shocks change their sign
        middle = (low + high) / 2
        low, high = (low, middle) if law.shocks_from_normals(middle) > 0 else (middle, high)
    nodes, weights = gauss_rule(16)
    width, total = (_LAST - high) / _PANELS, 0.0
    for k in range(_PANELS):
        z = high + width * (k + (nodes + 1) / 2)
        heights = law.shocks_from_normals(z) * exp(z * z * -0.5)
        for weight, height in zip(weights.tolist(), heights.tolist(), strict=True):
            total = total + weight * height
    return total * width * _PER_ROOT_2_PI
