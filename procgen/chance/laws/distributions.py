"""Distributions that are asked most, by special functions of SciPy: importing its own takes half a second, these a
twentieth of it.

What is not written here of all that a distribution of `scipy.stats` answers is asked of that one. No value is made with
these: they are for theory and checks.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.special import log_ndtr, ndtr, ndtri, poch, stdtr, stdtrit

from procgen.spec.records import dataclass

_LOG_ROOT_2_PI = 0.9189385332046727
_OTHERS = frozenset({"entropy", "expect", "interval", "median", "moment", "rvs", "stats"})


class _Asked:
    """A law that asks SciPy's for what it has not itself."""

    def support(self) -> tuple[float, float]:
        return -np.inf, np.inf

    def scipys(self) -> Any:
        raise NotImplementedError

    def __getattr__(self, name: str) -> Any:
        if name not in _OTHERS:
            raise AttributeError(name)
        return getattr(self.scipys(), name)


@dataclass(frozen=True)
class Gaussian(_Asked):
    """The normal law of a mean and a standard deviation above 0."""

    location: float = 0.0
    scale: float = 1.0

    def _z(self, x):
        return (np.asarray(x, float) - self.location) / self.scale

    def pdf(self, x):
        z = self._z(x)
        return np.exp(-(z**2) / 2.0) / np.sqrt(2 * np.pi) / self.scale

    def logpdf(self, x):
        z = self._z(x)
        return -(z**2) / 2.0 - _LOG_ROOT_2_PI - np.log(self.scale)

    def cdf(self, x):
        return ndtr(self._z(x))

    def logcdf(self, x):
        return log_ndtr(self._z(x))

    def sf(self, x):
        return ndtr(-self._z(x))

    def logsf(self, x):
        return log_ndtr(-self._z(x))

    def ppf(self, p):
        return ndtri(p) * self.scale + self.location

    def isf(self, p):
        return -ndtri(p) * self.scale + self.location

    def mean(self) -> float:
        return self.location

    def var(self) -> float:
        return self.scale * self.scale

    def std(self) -> float:
        return self.scale

    def scipys(self) -> Any:
        from scipy.stats import norm

        return norm(self.location, self.scale)


@dataclass(frozen=True)
class Lognormal(_Asked):
    """The law of location + scale exp(sigma z), for a standard normal z and sigma and scale above 0."""

    sigma: float
    scale: float = 1.0
    location: float = 0.0

    def support(self) -> tuple[float, float]:
        return self.location, np.inf

    def _z(self, x):
        """What x is of z; -inf at the lower end and below it."""
        above = np.maximum(np.asarray(x, float) - self.location, 0.0)
        with np.errstate(divide="ignore"):
            return np.log(above / self.scale) / self.sigma

    def pdf(self, x):
        return np.exp(self.logpdf(x))

    def logpdf(self, x):
        z, above = self._z(x), np.asarray(x, float) - self.location
        inside = above > 0.0
        at = np.where(inside, z, 0.0)
        height = -(at**2) / 2.0 - _LOG_ROOT_2_PI - np.log(self.sigma * np.where(inside, above, 1.0))
        return np.where(inside, height, -np.inf)

    def cdf(self, x):
        return ndtr(self._z(x))

    def logcdf(self, x):
        return log_ndtr(self._z(x))

    def sf(self, x):
        return ndtr(-self._z(x))

    def logsf(self, x):
        return log_ndtr(-self._z(x))

    def ppf(self, p):
        return self.location + self.scale * np.exp(self.sigma * ndtri(p))

    def isf(self, p):
        return self.location + self.scale * np.exp(-self.sigma * ndtri(p))

    def mean(self) -> float:
        return self.location + self.scale * float(np.exp(self.sigma**2 / 2))

    def var(self) -> float:
        with np.errstate(over="ignore"):
            return self.scale**2 * float(np.expm1(self.sigma**2) * np.exp(self.sigma**2))

    def std(self) -> float:
        with np.errstate(over="ignore"):
            return self.scale * float(np.sqrt(np.expm1(self.sigma**2)) * np.exp(self.sigma**2 / 2))

    def scipys(self) -> Any:
        from scipy.stats import lognorm

        return lognorm(self.sigma, loc=self.location, scale=self.scale)


@dataclass(frozen=True)
class Student(_Asked):
    """Student's law of some degrees of freedom above 0, times a scale above 0."""

    df: float
    scale: float = 1.0

    def _z(self, x):
        return np.asarray(x, float) / self.scale

    def pdf(self, x):
        return np.exp(self.logpdf(x))

    def logpdf(self, x):
        z = self._z(x)
        highest = np.log(poch(self.df / 2, 0.5)) - 0.5 * np.log(np.pi * self.df) - np.log(self.scale)
        return highest - (self.df + 1) / 2 * np.log1p(z * z / self.df)

    def cdf(self, x):
        return stdtr(self.df, self._z(x))

    def logcdf(self, x):
        return self.logsf(-np.asarray(x, float))

    def sf(self, x):
        return stdtr(self.df, -self._z(x))

    def logsf(self, x):
        z = self._z(x)
        with np.errstate(divide="ignore"):
            return np.where(z > 0, np.log(stdtr(self.df, -np.abs(z))), np.log1p(-stdtr(self.df, -np.abs(z))))

    def ppf(self, p):
        p = np.asarray(p, float)
        far = np.abs(stdtrit(self.df, np.minimum(p, 1.0 - p)))  # of a p whose end it does not reach, inf of any sign
        return self.scale * np.where(p < 0.5, -far, far)

    def isf(self, p):
        return -self.ppf(p)

    def mean(self) -> float:
        return 0.0 if self.df > 1 else float("inf")

    def var(self) -> float:
        if self.df <= 1:
            return float("nan")
        return self.scale**2 * self.df / (self.df - 2) if self.df > 2 else float("inf")

    def std(self) -> float:
        return float(np.sqrt(self.var()))

    def scipys(self) -> Any:
        from scipy.stats import t

        return t(self.df, scale=self.scale)
