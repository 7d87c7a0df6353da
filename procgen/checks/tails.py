"""Tail probabilities: exact laws of the statistics, as logarithms so that no departure is too large to rank.

Every function returns natural logarithms. A two-sided p is twice the smaller tail, never above 1.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray

_LOG2 = math.log(2.0)
SAFE = 1.6
_FAR = 1e4  # standard deviations
_NEAR = 1e-6  # of a saddle point, in standard deviations of the tilted law there
_CLEAR = 1.5  # over the standard deviation: contours nearer to the pole at 0 need more points, and gain nothing
_INSIDE = 1 - 1e-12  # of the way to the pole: as far as any number that is compared needs
_RANKS = -1e4  # logarithm of a tail, below which it only ranks: Chernoff's bound is enough


def two_sided(log_upper: float, log_lower: float) -> float:
    """log p of a two-sided test from the logs of both tails."""
    return min(0.0, _LOG2 + min(log_upper, log_lower))


def normal(z: float) -> float:
    """log two-sided p of a standard normal statistic."""
    from scipy.special import log_ndtr

    return min(0.0, _LOG2 + float(log_ndtr(-abs(z))))


def chi_square(q: float, dof: float) -> tuple[float, float]:
    """(log P(X > q), log P(X < q)) for a chi-square of `dof` degrees of freedom."""
    from scipy.special import gammainc, gammaincc

    if q <= 0.0:
        return 0.0, -math.inf
    return (
        _log_or(float(gammaincc(dof / 2, q / 2)), q, dof, above=True),
        _log_or(float(gammainc(dof / 2, q / 2)), q, dof, above=False),
    )


def ratio_below(f: float, m: float, n: float) -> float:
    """log P(F < f) of Fisher's ratio of two chi-squares, m and n degrees of freedom, each divided by these."""
    from scipy.special import betainc, betaln

    x = max(m * f / (n + m * f), 1e-300)
    tail = float(betainc(m / 2, n / 2, x))
    if tail > 1e-290:
        return math.log(tail)
    lead = 0.5 * m * math.log(x) + 0.5 * n * math.log1p(-x) - math.log(m / 2) - float(betaln(m / 2, n / 2))
    return min(0.0, lead)  # the first term of its series: where it underflows, only ranks need it


def _log_or(tail: float, q: float, dof: float, above: bool) -> float:
    """log of a chi-square tail; where it underflows, the exponent of Chernoff's bound (only ranks need it)."""
    if tail > 1e-290:
        return math.log(tail)
    ratio = q / dof
    beyond = ratio > 1 if above else ratio < 1
    return -0.5 * dof * (ratio - 1 - math.log(ratio)) if beyond else 0.0


def pearson3(z: float, skew: float) -> tuple[float, float]:
    """(log upper, log lower) tail of a standardised sum with skewness `skew`, by a matched chi-square.

    Exact for sums of gamma variables; the error is of the order of the next cumulant
    (Hall 1983, Chi squared approximations to the distribution of a sum of independent random variables).
    """
    from scipy.special import log_ndtr

    if abs(skew) < 1e-6:
        return float(log_ndtr(-z)), float(log_ndtr(z))
    dof = 8.0 / skew**2
    q = dof + math.copysign(math.sqrt(2 * dof), skew) * z
    upper, lower = chi_square(q, dof)
    return (upper, lower) if skew > 0 else (lower, upper)


def lift(z: float, excess: float) -> float:
    """log of the factor by which an excess kurtosis above 0 raises the tail of a standardised sum beyond z.

    Edgeworth's term excess/24 (z^3 - 3 z) phi(z) against the tail itself, as an exponent, which is where it grows to
    far out (Cramer 1938).
    """
    from scipy.special import log_ndtr

    z = abs(z)
    if excess <= 0.0 or z * z <= 3.0:
        return 0.0
    # Mills' ratio is 1/z far out, where the difference of two large logarithms would lose it
    hazard = math.exp(-0.5 * z * z - 0.9189385332046727 - float(log_ndtr(-z))) if z < _FAR else z
    return excess / 24 * (z * z - 3) * z * hazard


def self_normalised(x: float, skew: float, n: int) -> tuple[float, float]:
    """(log upper, log lower) tail at x of sum(y)/sqrt(sum(y^2)) for n independent y of mean 0, on the safe side.

    The normal tail times exp(-x^3 skew / (3 sqrt n)) (Wang 2005, Limit theorems for self-normalized large
    deviation). Where that raises the tail, 1.6 times the exponent is taken, since a skewness seen in the same sample
    is too small just when the sample misses its long tail; where it lowers the tail, none.
    """
    from scipy.special import log_ndtr

    push = SAFE * abs(x) ** 3 * skew / (3 * math.sqrt(n))
    return min(0.0, float(log_ndtr(-x)) + max(-push, 0.0)), min(0.0, float(log_ndtr(x)) + max(push, 0.0))


def weighted_chi_squares(x: float, weights: ArrayLike, dof: ArrayLike) -> tuple[float, float]:
    """(log P(X > x), log P(X < x)) for X = sum of weights[i] * chi-square(dof[i]), independent, weights of any sign.

    The inversion integral of the moment generating function along a contour through the saddle point
    (Daniels 1954; Rice 1980), so the error is relative to the tail, however small it is.
    """
    w = np.asarray(weights, dtype=float).ravel()
    d = np.broadcast_to(np.asarray(dof, dtype=float), w.shape)
    keep = (w != 0) & (d > 0)
    w, d = w[keep], d[keep]
    mean = float(np.dot(w, d))
    if x >= mean:
        tail = _upper(x, w, d)
        return tail, _log_one_minus(tail)
    tail = _upper(-x, -w, d)
    return _log_one_minus(tail), tail


def _log_one_minus(log_tail: float) -> float:
    return math.log1p(-math.exp(log_tail)) if log_tail < 0 else -math.inf


def _upper(x: float, w: NDArray, d: NDArray) -> float:
    """log P(X > x) for x at or above the mean."""
    if w.size == 0:
        return 0.0 if x < 0 else -math.inf
    top = float(w.max())
    if top <= 0 and x >= 0:
        return -math.inf
    s_max = 0.5 / top if top > 0 else math.inf
    sd = math.sqrt(float(np.sum(2 * d * w * w)))
    s0 = max(_saddle(x, w, d, s_max, sd), min(_CLEAR / sd, 0.5 * s_max), 0.3 / sd)
    if s0 > 0.95 * s_max:
        s0 = max(0.95 * s_max, _saddle(x, w, d, s_max, sd))
    return _contour(x, w, d, s0, s_max)


def _saddle(x: float, w: NDArray, d: NDArray, s_max: float, sd: float) -> float:
    """s > 0 with K'(s) = x, by Newton's steps within halving bounds; any s near it gives the same integral.

    They begin where a normal variable would have it: s_max is as good as infinite where all weights above 0 are tiny.
    """
    twice, weights = 2 * w, d * w
    low, high = 0.0, s_max * _INSIDE
    if not math.isfinite(s_max):
        high = 1.0 / sd
        while float(np.dot(weights, 1 / (1 - twice * high))) < x and high < 1e12 / sd:
            high *= 2
    s = min(0.5 * (low + high), max((x - float(np.sum(weights))) / sd**2, 0.01 / sd))
    for _ in range(60):
        each = 1 / (1 - twice * s)
        above = float(np.dot(weights, each)) - x
        low, high = (s, high) if above < 0 else (low, s)
        curvature = float(np.dot(weights * twice, each * each))
        if abs(above) < _NEAR * math.sqrt(curvature):  # in its own unit: near a pole every step is small
            return s
        step = above / curvature
        s = s - step if low < s - step < high else 0.5 * (low + high)
    return low


def _contour(x: float, w: NDArray, d: NDArray, s0: float, s_max: float) -> float:
    """The integral along s0 + i v + bend v^2: it opens to the side on which exp(-s x) decays, so even one
    degree of freedom converges fast; the trapezoidal rule is exponentially accurate on it."""
    width = 1 / math.sqrt(float(np.sum(2 * d * w * w / (1 - 2 * w * s0) ** 2)))
    gap = s_max - s0
    step = min(min(s0, gap) / 6, width / 2)
    scale = s_max if x > 0 else max(s0, 0.5 / float(np.abs(w).max()))
    bend = math.copysign(1 / (4 * scale), x)
    base = -0.5 * float(np.sum(d * np.log1p(-2 * w * s0))) - s0 * x
    if base < _RANKS:
        return base
    total, start, chunk = 0.0, 0, 40
    while start < 400_000:
        v = step * np.arange(start, start + chunk)
        s = s0 + 1j * v + bend * v * v
        re, im = 1 - np.multiply.outer(s.real, 2 * w), -np.multiply.outer(v, 2 * w)
        # the logarithm of a complex number in parts: several times as fast as the library's
        exponent = -0.25 * np.log(re * re + im * im) @ d - 0.5j * (np.arctan2(im, re) @ d) - s * x - base
        value = np.exp(exponent) * (1j + 2 * bend * v) / s
        if start == 0:
            value[0] *= 0.5
        total += float(value.imag.sum())
        if np.abs(value[-1]) < 1e-15 * max(abs(total), 1e-300):
            break
        start, chunk = start + chunk, min(2 * chunk, 128)
    return min(0.0, base + math.log(max(total * step / math.pi, 1e-300)))


def covariance(c: float, s1: float, s2: float, rho: float, n: int) -> tuple[float, float]:
    """(log upper, log lower) tail of a sample covariance c = sum(x y)/n of n jointly normal pairs of mean 0.

    n c = s1 s2 [(1 + rho)/2 chi2_n - (1 - rho)/2 chi2_n'], with independent chi-squares.
    """
    if s1 == 0 or s2 == 0:
        return (0.0, -math.inf) if c <= 0 else (-math.inf, 0.0)
    rho = min(1.0, max(-1.0, rho))
    return weighted_chi_squares(n * c / (s1 * s2), [(1 + rho) / 2, -(1 - rho) / 2], n)


_ONE_SIDED = 10_000  # numbers for which the one-sided law is summed in a blink
_AD_TERMS = 60


def anderson_darling(a2: float) -> float:
    """log P(A^2 > a2), limit law with all parameters known: A^2 = sum of chi2_1 / (j (j + 1)).

    Anderson & Darling (1952). Good from a handful of observations on.
    """
    j = np.arange(1, _AD_TERMS + 1)
    rest = 1 / (_AD_TERMS + 1)  # the mean of the terms left out; their variance is 3e-6
    if a2 <= rest:
        return 0.0
    return weighted_chi_squares(a2 - rest, 1 / (j * (j + 1.0)), 1.0)[0]


def anderson_darling_statistic(u: NDArray) -> float:
    """A^2 of uniforms u (any order, shape (n,))."""
    u = np.sort(np.clip(u, 1e-300, 1 - 2.0**-53))
    n = u.size
    weights = 2 * np.arange(1, n + 1) - 1
    return float(-n - np.mean(weights * (np.log(u) + np.log1p(-u[::-1]))))


def kolmogorov(distance: float, n: int) -> float:
    """log P(D_n > distance), two-sided, to 0.2 % of p from 0.1 down to 1e-6; of larger p to 1 %.

    Up to 10,000 numbers it is twice the exact one-sided law (Smirnov 1944), less what lies on both sides, which the
    limit law tells: nothing to speak of in the tail. Above it is the limit law, its argument moved by 1/(6 √n) (Pelz &
    Good 1976).
    """
    from scipy.special import kolmogorov as limit
    from scipy.special import smirnov

    root = math.sqrt(n)
    moved = root * distance + 1 / (6 * root)
    p = float(limit(moved))
    if n <= _ONE_SIDED and p > 0.0:
        p = min(1.0, p * float(smirnov(n, distance)) / math.exp(-2 * moved**2))
    return math.log(p) if p > 1e-290 else min(0.0, _LOG2 - 2 * n * distance**2)
