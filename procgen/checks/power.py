"""Detectable sizes: the smallest departure that a check finds 9 times in 10 at a given level.

`level` is the two-sided level that one check works at (the family's level divided by the number of checks).
Departures are upward ones (of an evenness, and of a share above a half, downward), in the unit of the check's estimate.
"""

from __future__ import annotations

import math
from collections.abc import Callable

POWER = 0.9
Z_POWER = 1.2815515655446004  # normal quantile of 0.9
_BEYOND = 40.0  # standard errors


def needed(level: float) -> float:
    """The normal quantile that a two-sided check must pass at `level`."""
    from scipy.special import ndtri

    return float(-ndtri(level / 2))


def critical(level: float, skew: float = 0.0, excess: float = 0.0) -> float:
    """Upper critical point of a standardised statistic with small skewness and excess kurtosis.

    Cornish & Fisher (1938), to the order 1/n.
    """
    z = needed(level)
    return z + skew / 6 * (z * z - 1) + excess / 24 * (z**3 - 3 * z) - skew * skew / 36 * (2 * z**3 - 5 * z)


def shift(level: float, error: float, skew: float = 0.0, excess: float = 0.0) -> float:
    """Detectable shift of an estimate whose standard error does not change under the departure."""
    return error * (critical(level, skew, excess) + Z_POWER)


def passes(log_p: Callable[[float], float], level: float) -> float:
    """The smallest z above 0, to 1/100, at which a falling log p is down to `level`; infinite when it never is."""
    high = needed(level)
    while log_p(high) > math.log(level):
        high *= 1.25
        if high > _BEYOND:
            return math.inf
    low = 0.0
    while high - low > 0.01:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if log_p(middle) > math.log(level) else (low, middle)
    return high


def of_scale(shift: float, error: float, theory: float) -> float:
    """The detectable excess of a spread around `theory`, from that of an estimate whose error does not change.

    A spread that is larger by a factor is estimated with an error that is larger by the same factor.
    """
    grown = 1.0 - Z_POWER * error / theory
    return shift / grown if grown > 0 else math.inf


def self_normalised(level: float, gauge: float) -> float:
    """The self-normalised sum that passes `level` on its worse side, where the tail is raised by exp(gauge x^3)."""
    from scipy.special import log_ndtr, ndtri

    x = needed(level)
    for _ in range(60):
        aim = math.log(level / 2) - gauge * x**3
        if aim < -300:
            return math.inf
        x = -float(ndtri(math.exp(aim)))
    return x if abs(float(log_ndtr(-x)) + gauge * x**3 - math.log(level / 2)) < 0.01 else math.inf


def variance(level: float, sigma2: float, dof: int) -> float:
    """Detectable excess of a normal variance over `sigma2`, exactly."""
    from scipy.special import chdtri

    return sigma2 * (float(chdtri(dof, level / 2)) / float(chdtri(dof, POWER)) - 1)


def ratio(level: float, m: int, n: int) -> float:
    """Detectable excess over 1 of the ratio of two normal variances, exactly."""
    from scipy.special import betaincinv

    # m F / (n + m F) has a beta law, and so has what is left of 1.
    low, high = float(betaincinv(n / 2, m / 2, level / 2)), float(betaincinv(m / 2, n / 2, 1 - POWER))
    return (1 - low) * (1 - high) / (low * high) - 1


def evenness(level: float, m: int, n: int) -> float:
    """How far below 1 a ratio of two normal variances is found by its lower tail alone, exactly."""
    from scipy.special import betaincinv

    low, usual = (float(betaincinv(m / 2, n / 2, p)) for p in (level, POWER))
    return 1 - low * (1 - usual) / (usual * (1 - low))


def covariance(level: float, s1: float, s2: float, rho: float, n: int) -> float:
    """Detectable departure of a normal covariance, away from zero where it is not zero."""
    size = s1 * s2
    r = abs(rho)
    up, down = (1 + r) / 2, (1 - r) / 2
    error = math.sqrt((1 + r * r) / n)
    skew = 8 * (up**3 - down**3) / (2 * (up**2 + down**2)) ** 1.5 / math.sqrt(n)
    excess = 48 * (up**4 + down**4) / (2 * (up**2 + down**2)) ** 2 / n
    reach = error * critical(level, skew, excess)
    departure = reach
    for _ in range(60):
        departure = reach + Z_POWER * math.sqrt((1 + (r + departure) ** 2) / n)
    return size * departure


def chi_square(level: float, dof: int) -> float:
    """Detectable noncentrality of a sum of `dof` squares of unit normals (one-sided level)."""
    from scipy.special import chdtri, chndtrinc

    return float(chndtrinc(chdtri(dof, level), dof, 1 - POWER))


def gap(level: float, n: int) -> float:
    """The largest gap between two distribution functions that Kolmogorov's test finds 9 times in 10.

    How far the peak of a drift must lie above the critical point for a Brownian bridge with that drift to cross it with
    probability 0.9, by the crossing probabilities of its pieces at the critical points 1.8 to 3.5: 0.17 to 0.27 for a
    shift, or a change of scale, of a normal law; 0.46 to 0.54 for a tent. The size between them is found 0.86 to 0.96
    of the time.
    """
    point = math.sqrt(math.log(2 / level) / 2)
    return (point + 0.27 + 0.06 * point) / math.sqrt(n)


def share(level: float, p: float, n: int) -> float:
    """Detectable departure of a share from p, towards a half, among n independent cases."""
    p = min(p, 1.0 - p)
    error = math.sqrt(p * (1 - p) / n)
    reach = error * critical(level, (1 - 2 * p) / math.sqrt(n * p * (1 - p))) + 0.5 / n  # whole numbers of cases
    departure = reach
    for _ in range(60):
        other = min(1.0, p + departure)
        departure = reach + Z_POWER * math.sqrt(max(other * (1 - other), 0.0) / n)
    return departure
