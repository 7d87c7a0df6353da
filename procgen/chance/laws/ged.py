"""The generalised error law, standardised to variance 1."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import exp
from procgen.chance.gamma import log_gamma
from procgen.chance.inversion import Inverse
from procgen.chance.laws.base import Law
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass

_FARTHEST = 80.0  # the density of the logarithm falls like exp(w) below, and exp(-80) is 1e-35


@dataclass(frozen=True)
class GED(Law):
    """The generalised error law: heavier tails than the normal for a shape below 2, Laplace at 1, flatter above 2."""

    shape: float

    name: ClassVar[str] = "ged"
    source: ClassVar[str] = "Nelson (1991), eq. 2.4; quantile by numerical inversion, Derflinger et al. (2010)"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("shape", "ν", Real(at_least=0.4, at_most=20), "power of z in the exponent: 1 Laplace, 2 normal"),
    )

    @property
    def scale(self) -> float:
        """s in the density proportional to exp(-(abs(z) / s)**shape)."""
        return float(exp((log_gamma(1 / self.shape) - log_gamma(3 / self.shape)) * 0.5))

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        # abs(z) has the area 2 p above it; its logarithm has a smooth density, which z itself has not at 0.
        above = np.multiply(p, 2.0)
        far = np.subtract(0.5, above)
        size = np.empty_like(p)
        _inverse(self.shape).quantile(np.minimum(above, 1.0 - above), far, size, scratch)
        np.multiply(exp(size), self.scale, out=size)
        np.copysign(size, side, out=out)

    def moment(self, k: int) -> float:
        if k % 2:
            return 0.0
        one, three = math.lgamma(1 / self.shape), math.lgamma(3 / self.shape)
        return math.exp(math.lgamma((k + 1) / self.shape) + (k / 2 - 1) * one - k / 2 * three)

    @property
    def exponential_moments(self) -> tuple[float, float]:
        if self.shape == 1.0:
            return 1 / self.scale, 1 / self.scale
        return (math.inf, math.inf) if self.shape > 1.0 else (0.0, 0.0)

    def _growth(self, rate: np.ndarray) -> np.ndarray | None:
        if self.shape == 1.0:
            return -np.log1p(-((rate * self.scale) ** 2))
        return rate * rate / 2 if self.shape == 2.0 else None

    def distribution(self) -> Any:
        from scipy.stats import gennorm

        return gennorm(self.shape, scale=self.scale)


@lru_cache(maxsize=64)
def _inverse(shape: float) -> Inverse:
    """Of w = log(abs(z) / scale), whose density is proportional to exp(w - exp(shape w))."""

    def density(w: np.ndarray) -> np.ndarray:
        return exp(w - exp(shape * w))

    return Inverse(Areas(density, _FARTHEST), Areas(lambda w: density(-w), _FARTHEST))
