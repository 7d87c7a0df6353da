"""Correlation of the values of two laws whose normals are correlated (a Gaussian copula)."""

from __future__ import annotations

from collections.abc import Iterator
from functools import cache, lru_cache
from typing import Any

import numpy as np

WIDEST = 37.5  # the normal density is still above the smallest double
LAST_SHOCK = 8.0  # beyond it lies 1e-15 of the probability
ACCURACY = 1e-9  # of the laws' own quantiles, as a share of the tail
SMALLEST_TAIL = 1e-200  # SciPy's quantiles of heavy tails hold to here
PANEL = 0.25
TERMS = 400


def law_correlation(first: Any, second: Any, correlation: float) -> tuple[float, float]:
    """E q1(z1) q2(z2) for standardised laws as functions of normals, and a bound on the numerical error.

    Parameters
    ----------
    first, second : laws
    correlation : correlation of the normals z1 and z2, in [-1, 1]

    With q(z) = sum of c_k He_k(z) / sqrt(k!), the answer is the sum of c_k d_k correlation^k (Mehler 1866; Cario &
    Nelson 1997 for its use between laws). What is left out is at most |correlation|^K sqrt(rest of c) sqrt(rest of d),
    where the rests follow from sum c_k^2 = 1.
    """
    if first.gaussian and second.gaussian:
        return correlation, 0.0
    if abs(correlation) == 1.0 and first == second and is_symmetric(first):
        return correlation, 0.0
    c, d = hermite_coefficients(first), hermite_coefficients(second)
    powers = correlation ** np.arange(TERMS)
    rests = [max(0.0, 1.0 - float((x * x).sum())) for x in (c, d)]
    bound = abs(correlation) ** TERMS * float(np.sqrt(rests[0] * rests[1])) + ACCURACY
    return float((c * d * powers).sum()), bound


@lru_cache(maxsize=64)
def is_symmetric(law: Any) -> bool:
    """Whether z and -z have the same law; asked of its quantiles, since a third moment need not exist."""
    z = np.array([0.3, 1.1, 2.5])
    upper, lower = law.shocks_from_normals(z.copy()), law.shocks_from_normals(-z)
    return bool(np.abs(upper + lower).max() <= 1e-12 * np.abs(upper).max())


def quantiles_of_normals(law: Any, z: np.ndarray) -> np.ndarray:
    """q(z): the value of the law with the rank of a standard normal z, from the tail on its side.

    A light tail is the law's own beyond the last uniform; a heavy one still counts there, and is SciPy's.
    """
    from scipy.special import ndtr

    if np.isinf(law.highest_moment):
        return law.shocks_from_normals(np.clip(z, -LAST_SHOCK, LAST_SHOCK))
    ideal = law.distribution()
    tail = np.maximum(ndtr(-np.abs(z)), SMALLEST_TAIL)
    return np.where(z < 0, ideal.ppf(tail), ideal.isf(tail))


@lru_cache(maxsize=64)
def hermite_coefficients(law: Any) -> np.ndarray:
    """c_k = E q(z) He_k(z) / sqrt(k!), k < TERMS: by Gauss-Legendre panels that meet at 0, where some laws bend."""
    if law.gaussian:
        return np.eye(1, TERMS, 1)[0]
    if law.points is not None:
        return _of_steps(law.points)
    z, weights = _panels()
    weighted = weights * quantiles_of_normals(law, z)
    out = np.empty(TERMS)
    for k, now in enumerate(_hermite(z)):
        out[k] = weighted @ now
    return out


@cache
def hermite_basis() -> tuple[np.ndarray, np.ndarray]:
    """Points z, and rows (TERMS, points) whose products with f(z) are the coefficients of f."""
    z, weights = _panels()
    return z, np.array(list(_hermite(z))) * weights


def _of_steps(points: Any) -> np.ndarray:
    """The same of a law of few values: E 1(z > a) He_k(z) = He_k-1(a) phi(a) at each step a of its quantile."""
    from scipy.special import ndtri

    upto = np.cumsum(points.chances)[:-1]
    at = np.where(upto < 0.5, ndtri(upto), -ndtri(np.cumsum(points.chances[::-1])[::-1][1:]))
    density = np.exp(-0.5 * at * at) / np.sqrt(2.0 * np.pi)
    rise, out = np.diff(points.values) * density, np.zeros(TERMS)
    for k, now in enumerate(_hermite(at)):
        if k + 1 < TERMS:
            out[k + 1] = rise @ now / np.sqrt(k + 1.0)
    return out


def _panels() -> tuple[np.ndarray, np.ndarray]:
    """Points, and weights under the normal density."""
    nodes, weights = np.polynomial.legendre.leggauss(16)
    edges = np.arange(0.0, WIDEST, PANEL)
    half = (edges[:, None] + PANEL * (nodes + 1.0) / 2.0).ravel()
    z = np.concatenate([-half[::-1], half])
    mass = np.tile(weights * PANEL / 2.0, len(edges))
    density = np.exp(-0.5 * z * z) / np.sqrt(2.0 * np.pi)
    return z, np.concatenate([mass[::-1], mass]) * density


def _hermite(z: np.ndarray) -> Iterator[np.ndarray]:
    """He_k(z) / sqrt(k!) for k < TERMS."""
    before, now = np.zeros_like(z), np.ones_like(z)
    for k in range(TERMS):
        yield now
        before, now = now, (z * now - np.sqrt(k) * before) / np.sqrt(k + 1.0)
