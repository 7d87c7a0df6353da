"""The law at one step of a series with drawn parameters: a weighted sum of the laws given them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.chance.laws.mixture import crossed, halved
from procgen.spec.records import dataclass


class MixedLaw:
    """A finite mixture of laws, with the calls of a frozen SciPy distribution."""

    def __init__(self, weights: Sequence[float], laws: Sequence[Any]):
        self.weights, self.laws = tuple(weights), tuple(laws)

    def _sum(self, what: str, x: Any) -> NDArray:
        x = np.asarray(x, float)
        total = np.zeros(x.shape)
        for weight, law in zip(self.weights, self.laws, strict=True):
            total = total + weight * getattr(law, what)(x)
        return total

    @property
    def spacing(self) -> float:
        """The distance of neighbouring values where only such have a chance, else 0; inf where laws differ in it."""
        found = {float(getattr(law, "spacing", 0.0)) for law in self.laws}
        return found.pop() if len(found) == 1 else float("inf")

    def pdf(self, x: Any) -> NDArray:
        return self._sum("pdf", x)

    def cdf(self, x: Any) -> NDArray:
        return self._sum("cdf", x)

    def sf(self, x: Any) -> NDArray:
        return self._sum("sf", x)

    def ppf(self, p: Any) -> NDArray:
        """Quantiles, between those of the parts; each side by its own area, which has all its digits."""
        p = np.asarray(p, float)
        low, high = self._ends(p)
        found, below = np.empty(p.shape), p < 0.5
        if below.any():
            found[below] = self._found(self.cdf, 1.0, p[below], low[below], high[below])
        if not below.all():
            found[~below] = self._found(self.sf, -1.0, 1.0 - p[~below], low[~below], high[~below])
        return found[()]

    def _found(self, beyond: Any, sign: float, area: NDArray, low: NDArray, high: NDArray) -> NDArray:
        """Where an area that rises with the sign of x is `area`; the upper end of a jump over it."""
        if self.spacing:  # all jumps: nothing to be read from the shape
            return halved(lambda x: beyond(x) < area if sign > 0 else beyond(x) > area, low, high)
        unit = sign * np.where(area > 0.0, area, 1.0)
        return crossed(lambda x: (beyond(x) - area) / unit, low, high)

    def _ends(self, p: NDArray) -> tuple[NDArray, NDArray]:
        parts = np.array([law.ppf(p) for law in self.laws])
        return parts.min(axis=0), parts.max(axis=0)

    def isf(self, p: Any) -> NDArray:
        return self.ppf(1.0 - np.asarray(p, float))

    def mean(self) -> float:
        return float(sum(w * law.mean() for w, law in zip(self.weights, self.laws, strict=True)))

    def var(self) -> float:
        m = self.mean()
        parts = zip(self.weights, self.laws, strict=True)
        return float(sum(w * (law.var() + (law.mean() - m) ** 2) for w, law in parts))

    def std(self) -> float:
        return float(np.sqrt(self.var()))


@dataclass(frozen=True)
class Normal:
    """A normal law by special functions alone: SciPy's takes longer to import than all that is asked of it here."""

    mean: float = 0.0
    sd: float = 1.0

    def support(self) -> tuple[float, float]:
        return -np.inf, np.inf

    def pdf(self, x: Any) -> NDArray:
        z = (np.asarray(x, float) - self.mean) / self.sd
        return np.exp(-0.5 * z * z) / (self.sd * np.sqrt(2 * np.pi))

    def cdf(self, x: Any) -> NDArray:
        from scipy.special import ndtr

        return ndtr((np.asarray(x, float) - self.mean) / self.sd)

    def sf(self, x: Any) -> NDArray:
        from scipy.special import ndtr

        return ndtr((self.mean - np.asarray(x, float)) / self.sd)

    def ppf(self, p: Any) -> NDArray:
        from scipy.special import ndtri

        return self.mean + self.sd * ndtri(np.asarray(p, float))

    def isf(self, p: Any) -> NDArray:
        from scipy.special import ndtri

        return self.mean - self.sd * ndtri(np.asarray(p, float))


class MixedNormals(MixedLaw):
    """The same of normal laws, all at once."""

    spacing = 0.0  # type: ignore[assignment]

    def __init__(self, weights: Sequence[float], means: Sequence[float], sds: Sequence[float]):
        super().__init__(weights, ())
        self._w, self._m, self._s = (np.asarray(x, float) for x in (weights, means, sds))

    def _z(self, x: Any) -> NDArray:
        return (np.asarray(x, float)[..., None] - self._m) / self._s

    def pdf(self, x: Any) -> NDArray:
        return np.exp(-0.5 * self._z(x) ** 2) @ (self._w / (self._s * np.sqrt(2 * np.pi)))

    def cdf(self, x: Any) -> NDArray:
        from scipy.special import ndtr

        return ndtr(self._z(x)) @ self._w

    def sf(self, x: Any) -> NDArray:
        from scipy.special import ndtr

        return ndtr(-self._z(x)) @ self._w

    def _ends(self, p: NDArray) -> tuple[NDArray, NDArray]:
        from scipy.special import ndtri

        parts = self._m + self._s * ndtri(p)[..., None]
        return parts.min(axis=-1), parts.max(axis=-1)

    def mean(self) -> float:
        return float(self._w @ self._m)

    def var(self) -> float:
        return float(self._w @ (self._s**2 + (self._m - self.mean()) ** 2))
