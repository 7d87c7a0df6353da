"""Laws with a quantile in closed form: normal, Laplace, logistic, uniform."""

from __future__ import annotations

import math
from typing import Any, ClassVar

import numpy as np

from procgen.chance.blocks import Scratch, blockwise
from procgen.chance.elementary import log_of
from procgen.chance.kernel import is_compiling
from procgen.chance.laws.base import Law
from procgen.chance.normal import normal_quantile
from procgen.spec.records import dataclass

_ROOT_HALF = 0.7071067811865476
_ROOT_3 = 1.7320508075688772
_ROOT_12 = 3.4641016151377544
_ROOT_3_PER_PI = 0.5513288954217921


@dataclass(frozen=True)
class Normal(Law):
    """The standard normal law; its shocks are Wichura's (1988) quantile."""

    name: ClassVar[str] = "normal"
    source: ClassVar[str] = "quantile: Wichura (1988), AS 241"
    gaussian: ClassVar[bool] = True

    def shocks(self, u, out: np.ndarray | None = None) -> np.ndarray:
        return normal_quantile(u, out)

    def shocks_from_normals(self, z, out: np.ndarray | None = None) -> np.ndarray:
        if out is None:
            return np.array(z, np.float64)
        np.copyto(out, z)
        return out

    def moment(self, k: int) -> float:
        return 0.0 if k % 2 else float(math.prod(range(1, k, 2)))

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        return rate * rate / 2

    def distribution(self) -> Any:
        from procgen.chance.laws.distributions import Gaussian

        return Gaussian()


@dataclass(frozen=True)
class Laplace(Law):
    """The double exponential law with scale sqrt(1/2)."""

    name: ClassVar[str] = "laplace"
    source: ClassVar[str] = "Johnson, Kotz & Balakrishnan (1995), ch. 24"

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        x = scratch(6, len(p))
        log_of(np.multiply(p, 2.0, out=x), x, scratch)
        np.copysign(np.multiply(x, _ROOT_HALF, out=x), side, out=out)

    def moment(self, k: int) -> float:
        return 0.0 if k % 2 else math.factorial(k) / 2.0 ** (k // 2)

    @property
    def exponential_moments(self) -> tuple[float, float]:
        return 1 / _ROOT_HALF, 1 / _ROOT_HALF

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        return -np.log1p(-rate * rate / 2)

    def distribution(self) -> Any:
        from scipy.stats import laplace

        return laplace(scale=_ROOT_HALF)


@dataclass(frozen=True)
class Logistic(Law):
    """The logistic law with scale sqrt(3)/pi."""

    name: ClassVar[str] = "logistic"
    source: ClassVar[str] = "Johnson, Kotz & Balakrishnan (1995), ch. 23"

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        x = scratch(6, len(p))
        log_of(np.divide(p, np.subtract(1.0, p, out=x), out=x), x, scratch)
        np.copysign(np.multiply(x, _ROOT_3_PER_PI, out=x), side, out=out)

    def moment(self, k: int) -> float:
        from scipy.special import zeta

        if k % 2 or k == 0:
            return float(k == 0)
        return 2 * math.factorial(k) * (1 - 2.0 ** (1 - k)) * float(zeta(k)) * _ROOT_3_PER_PI**k

    @property
    def exponential_moments(self) -> tuple[float, float]:
        return 1 / _ROOT_3_PER_PI, 1 / _ROOT_3_PER_PI

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        return -np.log(np.sinc(_ROOT_3_PER_PI * rate))

    def distribution(self) -> Any:
        from scipy.stats import logistic

        return logistic(scale=_ROOT_3_PER_PI)


@dataclass(frozen=True)
class Uniform(Law):
    """The uniform law between -sqrt(3) and sqrt(3)."""

    name: ClassVar[str] = "uniform"
    source: ClassVar[str] = "from its definition"

    def shocks(self, u, out: np.ndarray | None = None) -> np.ndarray:
        return blockwise(self._from_uniforms, u, out, whole=is_compiling())  # then tiles are short

    def _from_uniforms(self, u: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        # The bits of `_quantile` at the nearer end: u - 1/2 and 1 - u are exact.
        np.multiply(np.subtract(u, 0.5, out=out), _ROOT_12, out=out)

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        x = scratch(6, len(p))
        np.multiply(np.subtract(0.5, p, out=x), _ROOT_12, out=x)
        np.copysign(x, side, out=out)

    def moment(self, k: int) -> float:
        return 0.0 if k % 2 else 3.0 ** (k // 2) / (k + 1)

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        x = _ROOT_3 * np.abs(rate)
        far = np.maximum(x, 0.01)
        return np.where(x < 0.01, x * x / 6 - x**4 / 180, far + np.log(-np.expm1(-2 * far) / (2 * far)))

    def distribution(self) -> Any:
        from scipy.stats import uniform

        return uniform(-_ROOT_3, _ROOT_12)

    def _landmarks(self) -> tuple[float, ...]:
        return (-_ROOT_3, 0.0, _ROOT_3)
