"""The stationary law of a variance that feeds on its own shocks, h(t+1) = 1 + f(z(t)) h(t), by quadrature.

With f(z) = beta + (alpha + gamma I(z < 0)) z^2 this is garch and its threshold kin at order (1,1), omega being the
unit. The law is the one that the operator (T p)(h) = E p(1 + f(z) h) leaves as it is. Functions p are polynomials
through Chebyshev's points in u = sqrt(c / (c + h)), which runs from 0 at infinity to where h is least: averages of
bounded functions of sqrt(h) z are smooth in it at both ends. The average over z is a rule of Gauss-Legendre panels, so
that T is a matrix, and the stationary average its left eigenvector to the eigenvalue 1 (for the existence of the law:
Nelson 1990; for the way: Nystrom 1930, collocation as in Atkinson 1997, The Numerical Solution of Integral Equations of
the Second Kind, ch. 3).

Errors fall geometrically with the number of points. `settled` takes twice as many until what is asked for does not
move by more than 1e-6: where 48 points are right to that, 96 are to 1e-10, but where there is hardly a variance, or
beta is small, to 1e-7. Where a closed law is known it is met to 1e-8: arch(1) with alpha = 1 / (n - 2) and
t(n) shocks has values of a t(n - 1) law, for h - 1 is then a ratio of gamma variables (Chamayou & Letac 1991, J.
Theoretical Probability 4, 3-36).
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.theory.averages import WHOLE, nodes_of
from procgen.theory.copula import is_symmetric
from procgen.theory.unknown import Unknown

SIZES = (48, 96, 192)  # points, one after the other until answers settle
ALLOWED = 1e-6  # by which an answer may move from one size to the next, which is taken: its own error is far smaller
NEAR = -14  # octave below which shocks count as one, with their mean square: what they add to h is below 1e-8 of it
NEAREST = -40  # the same where nothing but the shock keeps the variance up
NOTHING = 1e-22  # weight of shocks that are left out

Function = Callable[[NDArray], NDArray]  # of values sqrt(h) z


class Perpetuity:
    """The law at one number of points.

    `variances` (n,) are the points in units of omega, and `weights` (n,) the stationary law: the mean of p(h) is their
    product with p at the points, for every p that is smooth in u. They are no chances, and may be negative.
    """

    def __init__(self, law: Any, alpha: float, gamma: float, beta: float, points: int):
        self.z, self.chances = _shocks(law, gamma == 0.0 and is_symmetric(law), NEAR if beta > 0.0 else NEAREST)
        factors = beta + (alpha + np.where(self.z < 0.0, gamma, 0.0)) * self.z * self.z
        least = 1.0 / (1.0 - beta)
        x = np.cos(np.pi * (np.arange(points) + 0.5) / points)
        half = 0.5 * np.sqrt(0.5)  # c is the least variance, where u is sqrt(1/2)
        self.variances = least * (1.0 / np.square(half * (1.0 + x)) - 1.0)
        later = 1.0 + self.variances[:, None] * factors
        self._x = np.sqrt(least / (least + later)) / half - 1.0
        waves = np.cos(np.arange(points)[:, None] * np.pi * (np.arange(points) + 0.5) / points)
        self._coefficients = waves * np.where(np.arange(points) == 0, 1.0, 2.0)[:, None] / points
        self.operator = self._averaged(np.broadcast_to(self.chances, self._x.shape))
        system, one = self.operator.T - np.eye(points), np.zeros(points)
        system[-1], one[-1] = 1.0, 1.0
        self.weights = np.linalg.solve(system, one)

    def mean(self, function: Function) -> float:
        """E of a bounded function of a value sqrt(h) z."""
        return float(self.weights @ self.given(function))

    def given(self, function: Function) -> NDArray:
        """(n,) the same given the variance."""
        return self._of_values(function) @ self.chances

    def products(self, function: Function, lags: tuple[int, ...]) -> NDArray:
        """E of a bounded function of a value times the same of the one `lag` >= 1 steps later."""
        before = self.weights @ self._averaged(self._of_values(function) * self.chances)
        ahead, found = self.given(function), {}
        for lag in range(1, max(lags) + 1):
            found[lag] = float(before @ ahead)
            ahead = self.operator @ ahead
        return np.array([found[lag] for lag in lags])

    def _of_values(self, function: Function) -> NDArray:
        return function(np.sqrt(self.variances)[:, None] * self.z)

    def _averaged(self, weights: NDArray) -> NDArray:
        """The matrix that makes the weighted averages of p(1 + f(z) h) of p at the points; weights (n, shocks)."""
        columns, now, after = [], np.ones_like(self._x), self._x
        for _ in self.variances:
            columns.append(np.einsum("ij,ij->i", now, weights))
            now, after = after, 2.0 * self._x * after - now
        return np.array(columns).T @ self._coefficients


def settled(wanted: Callable[[Perpetuity], NDArray], law: Any, alpha: float, gamma: float, beta: float) -> Perpetuity:
    """The law at the first number of points where what is wanted of it has settled, numbers of size 1 or more."""
    before = None
    for points in SIZES:
        found = perpetuity(law, alpha, gamma, beta, points)
        now = np.asarray(wanted(found))
        if before is not None and np.all(np.abs(now - before) <= ALLOWED * np.maximum(np.abs(before), 1.0)):
            return found
        before = now
    raise Unknown(f"the law of its variance is not known to {ALLOWED:g} from {SIZES[-1]} points")


@lru_cache(maxsize=16)
def perpetuity(law: Any, alpha: float, gamma: float, beta: float, points: int) -> Perpetuity:
    """The law at a number of points; Unknown where the rule over z does not hold its law."""
    return Perpetuity(law, alpha, gamma, beta, points)


def _shocks(law: Any, even: bool, nearest: int) -> tuple[NDArray, NDArray]:
    """Shocks and their chances, which add up to 1; of one sign where only squares count."""
    z, weights = nodes_of(law)
    if abs(weights.sum() - 1.0) > WHOLE:
        raise Unknown("its shocks have few values, or a density too steep for the law of their variance")
    z, weights = z[weights > NOTHING], weights[weights > NOTHING]
    if even:
        z, weights = z[z > 0.0], weights[z > 0.0]
    parts = [(z[np.abs(z) >= 2.0**nearest], weights[np.abs(z) >= 2.0**nearest])]
    for side in (-1.0, 1.0):
        near = (np.abs(z) < 2.0**nearest) & (np.sign(z) == side)
        if near.any():
            chance = weights[near].sum()
            parts.append((side * np.sqrt([weights[near] @ z[near] ** 2 / chance]), np.array([chance])))
    z, weights = (np.concatenate(each) for each in zip(*parts, strict=True))
    return z, weights / weights.sum()
