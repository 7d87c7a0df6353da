"""Integration over the law of a drawn parameter: nodes and weights whose sum replaces the integral.

Gauss's rules with respect to the law itself, so that polynomials up to degree 2n − 1 in the parameter are exact:
Legendre, Hermite and Jacobi (Golub & Welsch 1969, Math. Comp. 23), and by Lanczos's recurrence on a fine rule where
a law is cut off (Gautschi 2004, Orthogonal Polynomials, sec. 2.2.3). Laws of few values are summed.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from procgen.spec.draws import BetaDraw, ChoiceDraw, DrawLaw, LognormalDraw, NormalDraw, TableDraw, UniformDraw

Rule = tuple[NDArray, NDArray]  # nodes and weights, which sum to 1

PANELS, A_PANEL = 80, 20  # of the rule that stands for the law itself where it is cut off
REACH = 9.0  # standard deviations beyond which a normal law has nothing to add to 1e-9


def exact(law: DrawLaw) -> bool:
    """Whether the rule is a finite sum over all values of the law."""
    return isinstance(law, ChoiceDraw | TableDraw)


@lru_cache(maxsize=256)
def rule(law: DrawLaw, points: int) -> Rule:
    """Nodes and weights for a law; a law of few values has them all, whatever `points`."""
    if isinstance(law, ChoiceDraw):
        weights = np.array(law.weights or (1.0,) * len(law.values))
        return np.array(law.values), weights / weights.sum()
    if isinstance(law, TableDraw):
        values, counts = np.unique(np.array(law.numbers), return_counts=True)
        return values, counts / counts.sum()
    if isinstance(law, UniformDraw):
        x, w = np.polynomial.legendre.leggauss(points)
        return 0.5 * (law.low + law.high) + 0.5 * (law.high - law.low) * x, w / 2
    if isinstance(law, BetaDraw):
        return _beta(law, points)
    if isinstance(law, NormalDraw):
        z, w = _normal(points, None if law.within is None else tuple((end - law.mean) / law.sd for end in law.within))
        return law.mean + law.sd * z, w
    assert isinstance(law, LognormalDraw)
    ends = None if law.within is None else tuple(np.log(end / law.median) / law.sigma for end in law.within)
    z, w = _normal(points, ends)
    return law.median * np.exp(law.sigma * z), w


def _normal(points: int, ends: tuple[float, ...] | None) -> Rule:
    if ends is None:
        from scipy.special import roots_hermitenorm

        z, w = roots_hermitenorm(points)
        return z, w / w.sum()
    low, high = ends
    peak = min(max(0.0, low), high)  # where the law is highest within its ends
    low, high = max(low, min(peak - REACH, -REACH)), min(high, max(peak + REACH, REACH))
    x, w = np.polynomial.legendre.leggauss(A_PANEL)
    width = (high - low) / PANELS
    z = (low + width * (np.arange(PANELS)[:, None] + 0.5 * (1 + x))).ravel()
    return lanczos(z, np.tile(w, PANELS) * np.exp(-0.5 * (z * z - peak * peak)), points)


def _beta(law: BetaDraw, points: int) -> Rule:
    """By Jacobi's recurrence: nodes are eigenvalues of its matrix, weights squares of the first components."""
    a, b = law.beta - 1.0, law.alpha - 1.0
    n = np.arange(points, dtype=float)
    s = 2 * n + a + b
    with np.errstate(divide="ignore", invalid="ignore"):
        diagonal = (b * b - a * a) / (s * (s + 2))
        off = 4 * n * (n + a) * (n + b) * (n + a + b) / (s * s * (s + 1) * (s - 1))
    diagonal[0] = (b - a) / (a + b + 2)
    if points > 1:
        off[1] = 4 * (1 + a) * (1 + b) / ((2 + a + b) ** 2 * (3 + a + b))
    x, w = _from_recurrence(diagonal, np.sqrt(off[1:]))
    return law.low + (law.high - law.low) * 0.5 * (1 + x), w


def lanczos(x: NDArray, w: NDArray, points: int) -> Rule:
    """Gauss's rule of few points for the discrete law with weights w at x."""
    w = w / w.sum()
    v, before, beta = np.sqrt(w), np.zeros_like(x), 0.0
    basis, diagonal, off = [], [], []
    for _ in range(points):
        basis.append(v)
        u = x * v - beta * before
        diagonal.append(float(u @ v))
        u = u - diagonal[-1] * v
        for older in basis:  # rounding alone would bring found directions back
            u = u - (older @ u) * older
        beta = float(np.sqrt(u @ u))
        off.append(beta)
        before, v = v, u / beta
    return _from_recurrence(np.array(diagonal), np.array(off[:-1]))


def _from_recurrence(diagonal: NDArray, off: NDArray) -> Rule:
    from scipy.linalg import eigh_tridiagonal

    if len(diagonal) == 1:
        return diagonal, np.ones(1)
    x, vectors = eigh_tridiagonal(diagonal, off)
    w = vectors[0] ** 2
    return x, w / w.sum()
