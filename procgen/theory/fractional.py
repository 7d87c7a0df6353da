"""Gaussian series with a long memory: their covariances fall like a power of the lag.

Hosking (1981), Biometrika 68, 165-176, for fractional differences; Mandelbrot & Van Ness (1968), SIAM Review 10,
422-437, for fractional Gaussian noise; an ARMA filter of the first as the convolution of both autocovariances
(Doornik & Ooms 2003, Comput. Stat. Data Anal. 42, 333-348).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import cached_property
from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Gaussian
from procgen.theory.arma import cross_covariance
from procgen.theory.processes import Process, Steps
from procgen.theory.recursion import recursed
from procgen.theory.unknown import Unknown

FORGOTTEN = 1e-17
LONGEST = 1 << 20  # lags of an ARMA filter's memory
FAR = 64  # beyond this lag the asymptotic series of a ratio of gamma functions is exact to rounding
SMOOTH = 12  # beyond this lag the series of a second difference of a power is
_ODD_BERNOULLI = ((0.0, 0.5, -1.5, 1.0), (0.0, -1 / 6, 0.0, 5 / 3, -2.5, 1.0), (0, 1 / 6, 0, -7 / 6, 0, 3.5, -3.5, 1))


class StationaryGaussian(Process):
    """A Gaussian stationary series with mean 0 and a known autocovariance."""

    gaussian = True

    def __init__(self, name: str, ingredients: tuple[Any, ...], autocovariance: Any):
        super().__init__(name, ingredients)
        self.autocovariance = autocovariance

    @property
    def long_memory(self) -> float:
        """The d of its spectral density, which goes like frequency^-2d towards 0."""
        return self.autocovariance.long_memory

    def covariance(self, t: Steps, s: Steps) -> np.ndarray:
        return self.autocovariance(np.abs(np.asarray(t) - np.asarray(s)))

    def spectral_density(self, frequencies: np.ndarray) -> np.ndarray:
        """Two-sided, per cycle, at frequencies in cycles a step."""
        return self.autocovariance.spectral_density(frequencies)

    def weights(self, count: int) -> np.ndarray:
        """What the shocks 0, 1, .. count - 1 steps ago add, in units of the series."""
        return self.autocovariance.weights(count)

    def marginal(self, step: int) -> Any:
        return Gaussian(0.0, math.sqrt(float(self.autocovariance(np.zeros(1, np.int64))[0])))


class FractionalNoise:
    """Autocovariance of (1 - B)^-d of white noise of a variance: gamma(k) = gamma(k - 1) (k - 1 + d) / (k - d)."""

    def __init__(self, d: float, variance: float = 1.0):
        self.d, self.shock_variance, self.long_memory = d, variance, d
        self.variance = variance * math.exp(math.lgamma(1.0 - 2.0 * d) - 2.0 * math.lgamma(1.0 - d))

    @cached_property
    def _near(self) -> np.ndarray:
        k = np.arange(1.0, FAR + 1.0)
        return self.variance * np.concatenate([[1.0], np.cumprod((k - 1.0 + self.d) / (k - self.d))])

    def __call__(self, lags: np.ndarray) -> np.ndarray:
        lags = np.asarray(lags, np.int64)
        near = self._near[np.minimum(lags, FAR)]
        if not (lags > FAR).any():
            return near
        far = np.maximum(lags, FAR).astype(float)
        return np.where(lags > FAR, self._near[FAR] * np.exp(self._log_ratio(far) - self._log_ratio(float(FAR))), near)

    def _log_ratio(self, k: Any) -> Any:
        """log Gamma(k + d) / Gamma(k + 1 - d), by Stirling's series; even orders cancel (Tricomi & Erdelyi 1951)."""
        total = (2.0 * self.d - 1.0) * np.log(k)
        for n, bernoulli in zip((3, 5, 7), _ODD_BERNOULLI, strict=True):
            at = sum(c * self.d**i for i, c in enumerate(bernoulli))
            total = total - 2.0 * at / (n * (n - 1) * k ** (n - 1))
        return total

    def spectral_density(self, frequencies: np.ndarray) -> np.ndarray:
        """variance of the shocks (2 sin pi f)^-2d (Hosking 1981, theorem 1)."""
        _refuse_pole(frequencies, self.d)
        return self.shock_variance * (2.0 * np.sin(np.pi * np.abs(frequencies))) ** (-2.0 * self.d)

    def weights(self, count: int) -> np.ndarray:
        """psi(j) = psi(j - 1) (j - 1 + d) / j, times the standard deviation of the shocks."""
        j = np.arange(1.0, count)
        return math.sqrt(self.shock_variance) * np.concatenate([[1.0], np.cumprod((j - 1.0 + self.d) / j)])


class GaussianNoise:
    """Autocovariance of fractional Gaussian noise: variance (|k + 1|^2H - 2 |k|^2H + |k - 1|^2H) / 2."""

    def __init__(self, hurst: float, variance: float = 1.0):
        self.hurst, self.variance, self.long_memory = hurst, variance, hurst - 0.5

    def __call__(self, lags: np.ndarray) -> np.ndarray:
        lags = np.asarray(lags, np.int64)
        k, power = lags.astype(float), 2.0 * self.hurst
        near = (np.abs(k + 1) ** power - 2.0 * k**power + np.abs(k - 1) ** power) / 2.0
        far, series = np.maximum(k, SMOOTH), np.zeros(k.shape)
        term = np.full(k.shape, power * (power - 1.0) / 2.0)
        for n in range(2, 16, 2):  # sum of binomial(2H, n) k^(2H - n), n even: nothing cancels
            series = series + term * far ** (power - n)
            term = term * (power - n) * (power - n - 1) / ((n + 1) * (n + 2))
        return self.variance * np.where(lags > SMOOTH, series, near)

    def spectral_density(self, frequencies: np.ndarray) -> np.ndarray:
        """variance Gamma(2H + 1) sin(pi H) 2 (1 - cos w) times the sum over j of abs(w + 2 pi j)^(-2H - 1), w = 2 pi f.

        Sinai (1976), Theory Probab. Appl. 21, 64-80; the sum as two Hurwitz zeta functions.
        """
        from scipy.special import gamma, zeta

        _refuse_pole(frequencies, self.hurst - 0.5)
        f, power = np.abs(np.asarray(frequencies, float)), 2.0 * self.hurst + 1.0
        if self.hurst == 0.5:
            return np.full(f.shape, self.variance)
        scale = self.variance * gamma(power) * math.sin(math.pi * self.hurst) * (2.0 * np.pi) ** -power
        apart, height = np.where(f > 0.0, f, 0.5), 2.0 * np.sin(np.pi * f)
        pole = (height / apart) ** 2 * apart ** (2.0 - power)  # j = 0 by itself: finite however near to 0
        total = pole + height**2 * (zeta(power, 1.0 + f) + zeta(power, 1.0 - f))
        return np.where(f > 0.0, scale * total, 0.0)

    def weights(self, count: int) -> np.ndarray:
        raise Unknown("the weights of fractional Gaussian noise on its shocks have no closed form")


class Filtered:
    """Autocovariance of an ARMA filter theta(B) / phi(B) of a stationary series."""

    def __init__(self, noise: Any, phi: Sequence[float], theta: Sequence[float]):
        self.noise, self.phi, self.theta, self.long_memory = noise, tuple(phi), tuple(theta), noise.long_memory

    @cached_property
    def _weights(self) -> np.ndarray:
        """Autocovariances of the filter of unit white noise at lags 0, 1, ... until they are forgotten."""
        gamma, tail = cross_covariance(self.phi, self.phi), np.array([1.0, *self.theta])
        shifts = np.convolve(tail, tail[::-1])
        reach = np.arange(len(shifts)) - (len(tail) - 1)
        count = 64
        while count <= LONGEST:
            lags = np.arange(count)
            values = sum(c * gamma(lags + by) for c, by in zip(shifts.tolist(), reach.tolist(), strict=True))
            values = np.asarray(values, float)
            if np.abs(values[count // 2 :]).max() <= FORGOTTEN * values[0]:
                return values
            count *= 2
        raise Unknown("its ARMA part forgets too slowly to add up its covariances")

    def __call__(self, lags: np.ndarray) -> np.ndarray:
        weights = self._weights
        if not weights[1:].any():  # no filter: a lag needs no sum over others
            return weights[0] * self.noise(lags)
        distinct, which = np.unique(np.asarray(lags, np.int64), return_inverse=True)
        by = np.arange(1, len(weights))
        values = [
            weights[0] * float(self.noise(np.array([k]))[0])
            + float(weights[1:] @ (self.noise(np.abs(k - by)) + self.noise(k + by)))
            for k in distinct.tolist()
        ]
        return np.array(values)[which].reshape(np.shape(lags))

    def spectral_density(self, frequencies: np.ndarray) -> np.ndarray:
        z = np.exp(-2j * np.pi * np.asarray(frequencies, float))
        response = np.polyval([*self.theta[::-1], 1.0], z) / np.polyval([*(-c for c in self.phi[::-1]), 1.0], z)
        return np.abs(response) ** 2 * self.noise.spectral_density(frequencies)

    def weights(self, count: int) -> np.ndarray:
        return recursed(self.phi, np.convolve([1.0, *self.theta], self.noise.weights(count))[:count])


def _refuse_pole(frequencies: np.ndarray, d: float) -> None:
    if d > 0.0 and np.any(np.asarray(frequencies) == 0.0):
        raise Unknown("it has a long memory: the sum of its autocovariances, its spectral density at 0, is infinite")
