"""Kurtosis, and autocovariances of squares: covariances of the squared deviation as a series of its own."""

from __future__ import annotations

import numpy as np

from procgen.theory import known
from procgen.theory.expression import Expression, product
from procgen.theory.laws import is_gaussian
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import Stationarity

CANCELLED = 1e-9  # relative accuracy that has to be left when terms cancel


def excess_kurtosis(x: Expression, step: int) -> float:
    """Excess kurtosis at a step; 0 for a Gaussian series."""
    at = np.array([step], np.int64)
    variance = float(x.covariance(x, at, at)[0])
    if variance <= 0.0:
        raise Unknown("the variance is 0 at that step")
    if is_gaussian(x):
        return 0.0
    shape = _lognormal_spread(x, at)
    if shape is not None:  # Aitchison & Brown (1957), section 2.3, arranged to keep digits for a small spread
        return float(np.expm1(4 * shape) + 2 * np.expm1(3 * shape) + 3 * np.expm1(2 * shape))
    return float(_square_covariance(x, at, at)[0]) / variance**2 - 2.0


def steady_excess_kurtosis(x: Expression, stationarity: Stationarity) -> float:
    """Excess kurtosis of a series whose law around its mean is the same at every step."""
    if is_gaussian(x) and x.parts:
        return 0.0
    if not stationarity.covariance_stationary:
        raise Unknown("it may change with the step; excess_kurtosis_at gives it at one")
    return excess_kurtosis(x, 0)


def autocovariance_of_squares(x: Expression, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """Cov((x - E x)^2 at t, the same at s)."""
    return _square_covariance(x, t, s)


def _square_covariance(x: Expression, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    squared = _squared_deviation(x)
    total, size = np.zeros(t.shape), np.zeros(t.shape)
    for c, m in _each(squared):
        for k, n in _each(squared):
            part = c * k * m.covariance(n, t, s)
            total, size = total + part, size + np.abs(part)
    if len(squared.parts) > 1 and np.any(size * np.finfo(float).eps > CANCELLED * np.abs(total)):
        raise Unknown("its digits cancel: the spread is too small beside the mean")
    return total


def _each(x: Expression):
    """The random parts, each as an expression of its own."""
    for term, c in x.terms.items():
        yield c, Expression(x.space, known.constant(0.0), terms={term: 1.0})
    if x.linear:
        yield 1.0, Expression(x.space, known.constant(0.0), x.linear)


def _squared_deviation(x: Expression) -> Expression:
    level = known.constant(0.0)
    if x.terms:
        bare = Expression(x.space, level, x.linear, x.terms)
        some = bare.mean(np.array([0, 1, 2, 7, 100], np.int64))
        if np.ptp(some) > 1e-14 * np.abs(some).max():
            raise Unknown("the mean of its random parts moves")
        level = known.constant(-float(some[0]))
    deviation = Expression(x.space, level, x.linear, x.terms)
    return product(x.space, (deviation, deviation))


def _lognormal_spread(x: Expression, at: np.ndarray) -> float | None:
    """Variance of g when the series is known + known exp(g) with Gaussian g."""
    if x.linear or len(x.terms) != 1:
        return None
    (term,) = x.terms
    if term.factors or term.summed or not x.space.gaussian(term.sources):
        return None
    g = Expression(x.space, known.constant(0.0), term.exponent)
    return float(g.covariance(g, at, at)[0])
