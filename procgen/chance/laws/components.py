"""Any finite mixture of normal laws, standardised to mean 0 and variance 1."""

from __future__ import annotations

import math
from collections.abc import Mapping
from functools import lru_cache
from typing import Any, ClassVar

import numpy as np

from procgen.chance.blocks import Scratch
from procgen.chance.laws.base import Law
from procgen.chance.laws.mixture import Normals
from procgen.spec.declare import Parameter, Real, Records
from procgen.spec.records import dataclass

_MOST = 16
_WEIGHT = Parameter("weight", "w", Real(at_least=1e-6, at_most=1e6), "its share, relative to the others")
_MEAN = Parameter("mean", "m", Real(at_least=-20, at_most=20), "its mean", default=0.0)
_SD = Parameter("sd", "s", Real(at_least=0.01, at_most=100), "its standard deviation", default=1.0)


@dataclass(frozen=True)
class NormalMixture(Law):
    """One of several normals, chosen by weight; shifted and scaled as a whole to mean 0 and variance 1."""

    components: tuple[tuple[float, float, float], ...]

    name: ClassVar[str] = "normal_mixture"
    source: ClassVar[str] = "Pearson (1894); quantile by numerical inversion, Derflinger et al. (2010)"
    parameters: ClassVar[tuple[Parameter, ...]] = (
        Parameter("components", "", Records(_WEIGHT, _MEAN, _SD), "the normals; only relative sizes matter"),
    )

    def __post_init__(self) -> None:
        given = self.components
        parts = tuple(_numbers(part) for part in ((given,) if isinstance(given, Mapping) else given))
        if not 1 <= len(parts) <= _MOST:
            raise ValueError(f"normal_mixture: expected 1 to {_MOST} components, got {len(parts)}")
        object.__setattr__(self, "components", parts)

    def __str__(self) -> str:
        return f"{self.name}({', '.join(f'{w:.6g}·N({m:.6g}, {s:.6g}²)' for w, m, s in self.components)})"

    @property
    def standardised(self) -> tuple[tuple[float, float, float], ...]:
        """(weight, mean, standard deviation) of each normal of the standardised law; weights add up to 1."""
        total = mean = variance = 0.0
        for w, _, _ in self.components:
            total = total + w
        for w, m, _ in self.components:
            mean = mean + w / total * m
        for w, m, s in self.components:
            variance = variance + w / total * (s * s + (m - mean) * (m - mean))
        sd = float(np.sqrt(variance))
        return tuple((w / total, (m - mean) / sd, s / sd) for w, m, s in self.components)

    def _quantile(self, p: np.ndarray, side: np.ndarray, out: np.ndarray, scratch: Scratch) -> None:
        _inverse(self).quantile(p, side, out, scratch)

    def moment(self, k: int) -> float:
        return Normals(self.standardised).moment(k)

    def _growth(self, rate: np.ndarray) -> np.ndarray:
        return Normals(self.standardised).growth(rate)

    def distribution(self) -> Any:
        return _distribution(self)

    def _landmarks(self) -> tuple[float, ...]:
        return Normals(self.standardised).landmarks


def _numbers(part: Any) -> tuple[float, float, float]:
    values = part if isinstance(part, Mapping) else dict(zip(("weight", "mean", "sd"), part, strict=True))
    out = []
    for parameter in (_WEIGHT, _MEAN, _SD):
        value = values.get(parameter.name, parameter.default)
        number = isinstance(value, int | float) and not isinstance(value, bool)
        if not (number and math.isfinite(value) and parameter.domain.holds(value)):  # type: ignore[attr-defined]
            raise ValueError(
                f"normal_mixture: expected {parameter.name} to be {parameter.domain.describe()}, got {value!r}"
            )
        out.append(float(value))
    return out[0], out[1], out[2]


@lru_cache(maxsize=64)
def _inverse(law: NormalMixture) -> Any:
    parts = law.standardised
    return Normals(parts).inverse(all(mean == 0.0 for _, mean, _ in parts))


@lru_cache(maxsize=64)
def _distribution(law: NormalMixture) -> Any:
    return Normals(law.standardised).distribution()
