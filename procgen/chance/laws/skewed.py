"""Hansen's skewed t law, standardised."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.blocks import Scratch
from procgen.chance.gamma import half_step
from procgen.chance.laws.base import Law
from procgen.chance.laws.student import StudentT
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass

_ROOT_PI = 1.7724538509055159


@dataclass(frozen=True)
class SkewedT(Law):
    """Student's t with its two halves stretched by 1 - skew and 1 + skew, standardised."""

    df: float
    skew: float

    name: ClassVar[str] = "skewed_t"
    source: ClassVar[str] = "Hansen (1994), eq. 10-13; moments: Jondeau & Rockinger (2003)"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("df", "η", Real(above=2), "degrees of freedom; moments below this order exist"),
        Parameter("skew", "λ", Real(above=-1, below=1), "above 0: the upper half is the wider one"),
    )

    @property
    def shift_and_scale(self) -> tuple[float, float]:
        """Hansen's a and b: z = (x - a) / b, where x has the stretched halves and its mode at 0."""
        a = 4 * self.skew * self._c * (self.df - 2) / (self.df - 1)
        return a, float(np.sqrt(1 + 3 * (self.skew * self.skew) - a * a))

    @property
    def _c(self) -> float:
        return half_step(self.df / 2) / (_ROOT_PI * float(np.sqrt(self.df - 2)))

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        # The mode has the area (1 + skew) / 2 above it; each half is half a t, found from the area on its own side.
        a, b = self.shift_and_scale
        beyond = np.where(side < 0, 1 - p, p)
        upper = beyond <= (1 + self.skew) / 2
        near = np.where((side < 0) == upper, 1 - p, p)  # the area on the side of the half that it falls into
        width = np.where(upper, 1 + self.skew, 1 - self.skew)
        half = np.empty_like(p)
        StudentT(self.df)._quantile(near / width, np.where(upper, 1.0, -1.0), half, scratch)
        np.divide(width * half - a, b, out=out)

    @property
    def highest_moment(self) -> float:
        return self.df

    def moment(self, k: int) -> float | None:
        if k >= self.df:
            return None
        n, (a, b) = self.df, self.shift_and_scale

        def about_mode(j: int) -> float:
            size = (n - 2) ** (j / 2) * math.exp(
                math.lgamma((j + 1) / 2) + math.lgamma((n - j) / 2) - math.lgamma(n / 2) - math.lgamma(0.5)
            )
            return size / 2 * ((1 + self.skew) ** (j + 1) + (-1) ** j * (1 - self.skew) ** (j + 1))

        return sum(math.comb(k, j) * about_mode(j) * (-a) ** (k - j) for j in range(k + 1)) / b**k

    def distribution(self) -> Any:
        return _distribution(self)

    def _landmarks(self) -> tuple[float, ...]:
        a, b = self.shift_and_scale
        return tuple(sorted({-1.0, 0.0, 1.0, -a / b}))


@lru_cache(maxsize=64)
def _distribution(law: SkewedT) -> Any:
    from scipy.stats import rv_continuous, t

    (a, b), skew = law.shift_and_scale, law.skew
    half = t(law.df, scale=math.sqrt((law.df - 2) / law.df))

    class Hansen(rv_continuous):
        def _pdf(self, z):
            x = b * z + a
            return b * half.pdf(x / np.where(x < 0, 1 - skew, 1 + skew))

        def _cdf(self, z):
            x = b * z + a
            lower = (1 - skew) * half.cdf(np.minimum(x, 0) / (1 - skew))
            return np.where(x < 0, lower, 1 - (1 + skew) * half.sf(np.maximum(x, 0) / (1 + skew)))

        def _sf(self, z):
            x = b * z + a
            upper = (1 + skew) * half.sf(np.maximum(x, 0) / (1 + skew))
            return np.where(x > 0, upper, 1 - (1 - skew) * half.cdf(np.minimum(x, 0) / (1 - skew)))

        def _ppf(self, u):
            return np.where(u < (1 - skew) / 2, _below(u), -_above(1 - u))

        def _isf(self, u):
            return np.where(u < (1 + skew) / 2, -_above(u), _below(1 - u))

        def _munp(self, n):
            moment = law.moment(int(n))
            return math.inf if moment is None else moment

    def _below(u):
        return ((1 - skew) * half.ppf(np.minimum(u / (1 - skew), 0.5)) - a) / b

    def _above(u):
        return -((1 + skew) * half.isf(np.minimum(u / (1 + skew), 0.5)) - a) / b

    return Hansen(name="skewed_t")()
