"""Laws of whole numbers as SciPy-like objects: less their mean, with more zeros, and with a parameter that is drawn."""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property
from typing import Any

import numpy as np

NODES = 120
NOTHING = 1e-18
ROUNDING = 1e-12


class Centred:
    """A law less its mean; `spacing` is the distance of neighbouring values where only such have a chance, else 0."""

    def __init__(self, law: Any):
        self.law, self.base = law, float(law.mean())
        self.spacing = 1.0 if hasattr(law, "pmf") else 0.0

    def _with_mean(self, x):
        """Values with the mean added again; whole numbers are whole once more, or their chance would be missed."""
        x = np.asarray(x, float) + self.base
        near = np.rint(x)
        return np.where(np.abs(x - near) <= ROUNDING * np.maximum(np.abs(x), 1.0), near, x) if self.spacing else x

    def cdf(self, x):
        return self.law.cdf(self._with_mean(x))

    def sf(self, x):
        return self.law.sf(self._with_mean(x))

    def pdf(self, x):
        return self.law.pdf(np.asarray(x, float) + self.base)

    def ppf(self, p):
        return self.law.ppf(p) - self.base

    def isf(self, p):
        return self.law.isf(p) - self.base

    def mean(self) -> float:
        return 0.0

    def var(self) -> float:
        return float(self.law.var())


class Inflated:
    """A law of whole numbers, but 0 with a chance of its own before all else (Lambert 1992)."""

    def __init__(self, law: Any, share: float):
        self.law, self.share, self.spacing = law, share, law.spacing

    def cdf(self, x):
        return self.share * (np.asarray(x, float) >= 0.0) + (1.0 - self.share) * self.law.cdf(x)

    def sf(self, x):
        return self.share * (np.asarray(x, float) < 0.0) + (1.0 - self.share) * self.law.sf(x)

    def ppf(self, p):
        p = np.asarray(p, float)
        below = (1.0 - self.share) * self.law.cdf(-self.spacing / 2.0)
        lower = self.law.ppf(np.minimum(p / (1.0 - self.share), 1.0))
        upper = self.law.ppf(np.clip((p - self.share) / (1.0 - self.share), 0.0, 1.0))
        return np.where(
            p <= below, lower, np.where(p <= below + self.share, np.minimum(lower, 0.0), np.maximum(upper, 0.0))
        )

    def isf(self, p):
        return self.ppf(1.0 - np.asarray(p, float))

    def mean(self) -> float:
        return (1.0 - self.share) * float(self.law.mean())

    def var(self) -> float:
        return (1.0 - self.share) * (float(self.law.var()) + self.share * float(self.law.mean()) ** 2)


class Compound:
    """Whole numbers whose parameter is itself drawn from a continuous law: by an average over its quantiles.

    The parameter's ranks are mapped to normals, where a rule with equal steps is exact to rounding for what is smooth.
    """

    def __init__(self, law: Callable[[Any], Any], of: Any):
        from scipy.stats import norm

        z = np.linspace(-8.3, 8.3, NODES)
        weights = np.exp(-z * z / 2.0)
        self.weights = weights / weights.sum()
        at = np.where(z < 0, of.ppf(norm.cdf(z)), of.isf(norm.sf(z)))
        self.laws = law(at[:, None])  # one for each node, a row each

    def _averaged(self, name: str, x: Any) -> np.ndarray:
        x = np.asarray(x, float)
        rows = np.concatenate(
            [getattr(self.laws, name)(part).T for part in np.array_split(x.ravel(), 1 + x.size // 4096)]
        )
        return (rows @ self.weights).reshape(x.shape)

    def pmf(self, x):
        return self._averaged("pmf", x)

    def cdf(self, x):
        return self._averaged("cdf", x)

    def sf(self, x):
        return self._averaged("sf", x)

    @cached_property
    def _counts(self) -> np.ndarray:
        """All that have a chance worth a look."""
        top = 64
        while float(self.sf(top)) > NOTHING:
            top *= 2
        return np.arange(top + 1.0)

    @cached_property
    def _tables(self) -> tuple[np.ndarray, np.ndarray]:
        return self.cdf(self._counts), -self.sf(self._counts)

    def ppf(self, p):
        return np.searchsorted(self._tables[0], np.asarray(p, float)).astype(float)

    def isf(self, p):
        return np.searchsorted(self._tables[1], -np.asarray(p, float)).astype(float)

    def mean(self) -> float:
        return float(self.weights @ np.ravel(self.laws.mean()))

    def var(self) -> float:
        return float(self.weights @ np.ravel(self.laws.var() + (self.laws.mean() - self.mean()) ** 2))
