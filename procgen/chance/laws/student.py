"""Student's t, standardised to variance 1."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch
from procgen.chance.elementary import exp, log1p
from procgen.chance.inversion import Inverse
from procgen.chance.laws.base import Law
from procgen.spec.declare import Parameter, Real
from procgen.spec.records import dataclass


@dataclass(frozen=True)
class StudentT(Law):
    """Student's t with df > 2 degrees of freedom, times sqrt((df - 2) / df)."""

    df: float

    name: ClassVar[str] = "student_t"
    source: ClassVar[str] = "Bollerslev (1987); quantile by numerical inversion, Derflinger et al. (2010)"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("df", "ν", Real(above=2), "degrees of freedom; moments below this order exist"),
    )

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        _inverse(self.df).quantile(p, side, out, scratch)

    @property
    def highest_moment(self) -> float:
        return self.df

    def moment(self, k: int) -> float | None:
        if k >= self.df:
            return None
        if k % 2:
            return 0.0
        return math.prod((2 * i - 1) * (self.df - 2) / (self.df - 2 * i) for i in range(1, k // 2 + 1))

    def distribution(self) -> Any:
        from procgen.chance.laws.distributions import Student

        return Student(self.df, math.sqrt((self.df - 2) / self.df))


@lru_cache(maxsize=64)
def _inverse(df: float) -> Inverse:
    def density(z: np.ndarray) -> np.ndarray:
        return exp((df + 1) * -0.5 * log1p(z * z / (df - 2)))

    # The tail area falls like (z / sqrt(df - 2))**-df at least: 1e-32 is passed at exp(76 / df).
    return Inverse(Areas(density, float(np.sqrt(df) * exp(76 / df))))
