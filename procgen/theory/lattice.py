"""A Gaussian series rounded to multiples of a number: exact moments, by waves where it is fine and areas where coarse.

With w = 2 pi / D, rounding to multiples of D adds e(x) = (D / pi) sum over k of (-1)^k sin(k w x) / k, and all moments
of sines of jointly normal values are closed (Widrow & Kollar 2008, ch. 4). Where D is larger than a standard
deviation, the value counts the borders that lie below: the derivative of their covariance in the correlation is a
bivariate density for each pair of borders (Plackett 1954), which is integrated.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from typing import Any

import numpy as np

from procgen.chance.laws.distributions import Gaussian
from procgen.theory.processes import Held, Process, alone, at_any, mean_at
from procgen.theory.unknown import Unknown

Steps = np.ndarray
NEAR = 12  # multiples looked at on either side of the mean where the body spreads over less than one
WAVES = 64
CASES = 256  # at once
REST = 25.0  # exp(-REST) is nothing
REACH = 9.5  # standard deviations beyond which there is no border
MOST_PAIRS = 1 << 14
AT_ONCE = 1 << 22
SAME = 1e-12
NARROWEST = 1e-9


class Rounded(Process):
    """`to` times the nearest whole number to x / to, for a Gaussian x, less its mean.

    known: what x is rounded to at steps at which it is known, for one on a border goes up or down by the term's rule.
    """

    lumpy = True

    def __init__(self, name: str, body: Any, to: float, known: Callable[[Steps], np.ndarray]):
        super().__init__(name, (body,))
        self.body, self.to, self.known = body, float(to), known

    def shape(self, steps: Steps) -> tuple[np.ndarray, np.ndarray]:
        """Mean and standard deviation of x, in multiples of `to`."""
        variance = np.maximum(at_any(self.body, self.body, steps, steps), 0.0)
        return mean_at(self.body, steps) / self.to, np.sqrt(variance) / self.to

    def mean(self, steps: Steps) -> np.ndarray:
        """E of the rounded value."""
        steps = np.asarray(steps, np.int64)
        m, sd = self.shape(steps)
        coarse = np.rint(m) + _below(m, sd)
        spread = self.to * np.where(sd < 1.0, coarse, m + _error(m, np.maximum(sd, 1.0)))
        return np.where(sd > 0.0, spread, self.known(steps)) if np.any(sd <= 0.0) else spread

    def covariance(self, t, s):
        return self.crossed(self, t, s)

    def crossed(self, other: Rounded, t: Steps, s: Steps) -> np.ndarray:
        (m, u), (n, v) = self.shape(t), other.shape(s)
        c = at_any(self.body, other.body, t, s) / (self.to * other.to)
        c = np.clip(c, -u * v, u * v)
        # Of a series that is stationary most are alike: each is computed once.
        cases, which = np.unique(np.stack([x.ravel() for x in (m, u, n, v, c)]), axis=1, return_inverse=True)
        return self.to * other.to * self._of_cases(other, *cases)[which.ravel()].reshape(t.shape)

    def _of_cases(self, other: Rounded, m, u, n, v, c) -> np.ndarray:
        fine = (np.minimum(u, v) >= 1.0) & (self.to == other.to)
        out = np.zeros(c.shape)
        for chosen, way in ((fine, _by_waves), (~fine & (u * v > 0.0), _by_borders)):
            if chosen.any():
                out[chosen] = way(self.name, m[chosen], u[chosen], n[chosen], v[chosen], c[chosen])
        return out

    def with_expression(self, other, t, s):
        from procgen.theory.laws import jointly_gaussian

        if not jointly_gaussian(self.body, other):
            return super().with_expression(other, t, s)
        return at_any(self.body, other, t, s) * _slope(*self.shape(t))  # Stein (1981)

    def with_process(self, own, other, t, s):
        if isinstance(other.detail, Rounded) and self.body.space.gaussian(
            self.body.sources | other.detail.body.sources
        ):
            return self.crossed(other.detail, t, s)
        if isinstance(other.detail, Held):
            return other.detail.with_expression(alone(self.body.space, own), s, t)
        return super().with_process(own, other, t, s)

    def marginal(self, step):
        at = np.array([step], np.int64)
        (m,), (sd,) = self.shape(at)
        if sd <= 0.0:
            raise Unknown("the value at that step is known, not random")
        return Multiples(m, sd, self.to, float(self.mean(at)[0]))


class Multiples:
    """The law of a normal rounded to multiples of `to`, less its mean; m and sd are those of x / to."""

    def __init__(self, m: float, sd: float, to: float, mean: float):
        self.m, self.sd, self.spacing, self.base = m, sd, to, mean

    def _border(self, x):
        """The upper border of what is rounded to x or less, in standard deviations of x / to."""
        k = (np.asarray(x, float) + self.base) / self.spacing
        near = np.rint(k)
        whole = np.where(np.abs(k - near) <= 1e-9 * np.maximum(np.abs(k), 1.0), near, np.floor(k))
        return (whole + 0.5 - self.m) / self.sd

    def cdf(self, x):
        return Gaussian().cdf(self._border(x))

    def sf(self, x):
        return Gaussian().sf(self._border(x))

    def _at(self, z):
        return self.spacing * np.ceil(self.m + self.sd * z - 0.5) - self.base

    def ppf(self, p):
        return self._at(Gaussian().ppf(p))

    def isf(self, p):
        return self._at(Gaussian().isf(p))

    def mean(self) -> float:
        return 0.0

    def var(self) -> float:
        m, u = np.array([self.m]), np.array([self.sd])
        way = _by_waves if self.sd >= 1.0 else _by_borders
        return self.spacing**2 * float(way("", m, u, m, u, u * u)[0])


def _below(m: np.ndarray, sd: np.ndarray) -> np.ndarray:
    """E of round(x) - round(m) for x normal with a standard deviation below 1, by areas beyond borders."""
    k = np.arange(NEAR) + 0.5
    rest = (m - np.rint(m))[..., None]
    with np.errstate(divide="ignore", invalid="ignore"):
        up, down = (k - rest) / sd[..., None], (k + rest) / sd[..., None]
    norm = Gaussian()
    still = sd <= 0.0
    return np.where(still, 0.0, (norm.sf(np.where(still[..., None], 1.0, up)) - norm.sf(down)).sum(axis=-1))


def _wave(k: np.ndarray, sd: np.ndarray) -> np.ndarray:
    """(-1)^k exp(-(2 pi k sd)^2 / 2)."""
    return (-1.0) ** k * np.exp(-2.0 * (np.pi * k * sd[..., None]) ** 2)


def _error(m: np.ndarray, sd: np.ndarray) -> np.ndarray:
    """E of round(x) - x where the standard deviation is at least 1."""
    k = np.arange(1, 5)
    return (_wave(k, sd) * np.sin(2.0 * np.pi * k * m[..., None]) / (np.pi * k)).sum(axis=-1)


def _slope(m: np.ndarray, sd: np.ndarray) -> np.ndarray:
    """What a normal x moves E round(x) by: the density at all borders together."""
    k = np.arange(1, 5)
    fine = 1.0 + 2.0 * (_wave(k, np.maximum(sd, 1.0)) * np.cos(2.0 * np.pi * k * m[..., None])).sum(axis=-1)
    borders = np.rint(m)[..., None] + np.arange(-NEAR, NEAR) + 0.5
    with np.errstate(divide="ignore", invalid="ignore"):
        z = (borders - m[..., None]) / sd[..., None]
        coarse = Gaussian().pdf(z).sum(axis=-1) / sd
    return np.where(sd >= 1.0, fine, np.where(sd > 0.0, coarse, 0.0))


def _by_waves(name, m, u, n, v, c) -> np.ndarray:
    """Cov(round x, round y) for x and y with means m and n, standard deviations u and v >= 1, covariance c."""
    apart = 1.0 - np.minimum(np.abs(c) / (u * v), 1.0) ** 2
    settled = 0.5 * (2.0 * np.pi * WAVES * np.minimum(u, v)) ** 2 * apart
    if np.any((settled < REST) & (np.abs(u / v - 1.0) > 1e-3)):
        raise Unknown(f"{name}: two steps that are nearly in step, with other spreads, are not added up")
    total = c * (_slope(m, u) + _slope(n, v) - 1.0) - _error(m, u) * _error(n, v)
    for sign in (1.0, -1.0):
        apart = np.maximum(u * u + v * v - 2.0 * sign * c, 0.0)
        apart = np.where(apart <= SAME * (u * u + v * v), 0.0, apart)
        total = total + sign * 0.5 * (_together(m - sign * n, apart) + _crossed(m, u, n, v, c, sign)) / np.pi**2
    return total


def _together(d: np.ndarray, variance: np.ndarray) -> np.ndarray:
    """The sum over k of cos(2 pi k d) exp(-(2 pi k)^2 variance / 2) / k^2; where it is slow, by its dual series."""
    from scipy.special import erfc

    k, c = np.arange(1, 13), 2.0 * np.pi**2 * variance
    plain = (np.cos(2.0 * np.pi * k * d[..., None]) * np.exp(-c[..., None] * k * k) / k**2).sum(axis=-1)
    gone, root = np.abs(d - np.rint(d)) * 2.0 * np.pi, np.sqrt(np.maximum(c, 1e-300))
    dual = np.pi**2 / 6.0 - np.pi * gone / 2.0 + gone**2 / 4.0 + c / 2.0
    for turn in (0.0, 2.0 * np.pi, -2.0 * np.pi):
        far = np.abs(gone + turn)
        dual = dual - np.sqrt(np.pi) * root * np.exp(-((far / (2.0 * root)) ** 2))
        dual = dual + np.pi / 2.0 * far * erfc(far / (2.0 * root))
    return np.where(c >= 0.25, plain, dual)


def _crossed(m, u, n, v, c, sign) -> np.ndarray:
    """The sum over j other than k of (-1)^(j + k) E cos(2 pi (j x - sign k y)) / (j k).

    E cos is at most exp(-2 pi^2 (j u - k v)^2): with v >= 1 all but the five k nearest to j u / v are below 1e-53.
    """
    total, j = np.empty(len(c)), np.arange(1, WAVES + 1)[:, None]
    for first in range(0, len(c), CASES):
        part = slice(first, first + CASES)
        x, y, up, vp, cp = (a[part, None, None] for a in (m, n, u, v, c))
        k = np.rint(j * up / vp) + np.arange(-2, 3)
        meant = (k >= 1) & (k <= WAVES) & (k != j)
        k = np.where(meant, k, 1.0)
        left = (j * up) ** 2 - 2.0 * sign * j * k * cp + (k * vp) ** 2
        wave = np.exp(-2.0 * np.pi**2 * np.maximum(left, 0.0)) * (1.0 - 2.0 * ((j + k) % 2)) / (j * k)
        wave = wave * np.cos(2.0 * np.pi * (j * x - sign * k * y))
        total[part] = np.where(meant, wave, 0.0).sum(axis=(1, 2))
    return total


def _by_borders(name, m, u, n, v, c) -> np.ndarray:
    """The same where one of them spreads over less than a multiple: a pair of borders at a time."""
    a, b = _borders(m, u), _borders(n, v)
    if a.shape[1] * b.shape[1] > MOST_PAIRS:
        raise Unknown(f"{name}: rounding that is coarse at one step and fine at the other is not added up")
    r = np.clip(c / (u * v), -1.0, 1.0)
    r = np.where(np.abs(r) >= 1.0 - SAME, np.sign(r), r)
    out = np.empty(len(r))
    width = max(AT_ONCE // max(a.shape[1] * b.shape[1] * len(_legendre()[0]), 1), 1)
    for first in range(0, len(r), width):
        part = slice(first, first + width)
        out[part] = _areas(a[part], b[part], r[part])
    return out


def _borders(m: np.ndarray, sd: np.ndarray) -> np.ndarray:
    """The borders within reach in standard deviations, one row a step; inf beyond."""
    reach = int(np.ceil(REACH * np.max(sd, initial=0.0))) + 1
    z = (np.rint(m)[:, None] + np.arange(-reach, reach) + 0.5 - m[:, None]) / sd[:, None]
    return np.where(np.abs(z) <= REACH, z, np.inf)


def _areas(a: np.ndarray, b: np.ndarray, r: np.ndarray) -> np.ndarray:
    """The sum over pairs of borders of the integral of the bivariate density over the correlation, from 0 to r.

    With the sine of an angle for the correlation, in panels that shrink by halves towards the right angle, where the
    density of two borders that are near each other changes fast.
    """
    nodes, weights = _legendre()
    sign, b = np.sign(r), b * np.where(r < 0.0, -1.0, 1.0)[:, None]
    end, total, upper = np.arccos(np.abs(r)), np.zeros(len(r)), np.pi / 2.0
    with np.errstate(invalid="ignore", over="ignore"):
        between = np.where(np.isinf(a[:, :, None]) | np.isinf(b[:, None, :]), np.inf, a[:, :, None] - b[:, None, :])
        product = np.where(np.isinf(between), 0.0, a[:, :, None] * b[:, None, :])
    while len(rows := np.flatnonzero(end < upper)):
        low = np.maximum(end[rows], upper / 2.0 if upper > NARROWEST else 0.0)
        angle = low[:, None] + (upper - low)[:, None] * (nodes + 1.0) / 2.0
        # sine and cosine of what is left up to the right angle: both exact where it is small
        cosine, sine = np.sin(angle)[:, None, None, :], np.cos(angle)[:, None, None, :]
        square = between[rows][..., None] ** 2 / (2.0 * cosine**2) + product[rows][..., None] / (1.0 + sine)
        density = np.exp(-square).sum(axis=(1, 2)) / (2.0 * np.pi)
        total[rows] += (density * weights).sum(axis=1) * (upper - low) / 2.0
        upper = upper / 2.0 if upper > NARROWEST else 0.0
    return sign * total


@cache
def _legendre() -> tuple[np.ndarray, np.ndarray]:
    return np.polynomial.legendre.leggauss(24)
