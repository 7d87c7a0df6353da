"""Covariances between autoregressions of white noise.

Every stationary linear process here is a moving sum of autoregressions w = e / phi(B) of one source each, so one
function of the lag is enough: Gamma(h) = E w_i(t + h) w_j(t) for two autoregressions of the same unit white noise.

Its generating function 1 / (a(z) b(1/z)) splits into u(z)/a(z) + v(1/z)/b(1/z), where u and v solve the small linear
(Sylvester resultant) system u(z) b(1/z) + v(1/z) a(z) = 1. Then Gamma(h) for h >= 0 are the power series coefficients
of u/a, which is one recursion of the order of the model. For one process this is the method of Wilson (1979),
"Some efficient computational procedures for high order ARMA models", J. Stat. Comput. Simul. 8, 301-309; the split is
in Demeure & Mullis (1989), IEEE Trans. ASSP 37, 1226-1230.
"""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction
from functools import lru_cache

import numpy as np

from procgen.theory.recursion import recursed
from procgen.theory.unknown import Unknown

WEAK, HOPELESS = 1e6, 1e12  # condition numbers: beyond the first rational numbers are used while that is quick
LARGEST_RATIONAL = 24
SMALL = 64
LONGEST_RECURSION = 1 << 21  # beyond this lag single values come from powers of the companion matrix


def polynomial(phi: tuple[float, ...]) -> np.ndarray:
    """Coefficients of phi(B) = 1 - phi_1 B - ... - phi_p B^p, shape (p + 1,)."""
    return np.concatenate([[1.0], -np.asarray(phi, float)])


def companion(phi: tuple[float, ...], size: int | None = None) -> np.ndarray:
    """Transition of the lags (w_t, w_{t-1}, ...): phi in the first row, a shift below; `size` >= len(phi)."""
    size = max(len(phi), 1) if size is None else size
    step = np.eye(size, k=-1)
    step[0, : len(phi)] = phi
    return step


class PowerSeries:
    """Coefficients of numerator(z) / phi(z) at any lags >= 0, by recursion."""

    def __init__(self, numerator: np.ndarray, phi: tuple[float, ...]):
        self.numerator, self.phi = numerator, phi
        self._values = np.empty(0)

    def upto(self, count: int) -> np.ndarray:
        """The first `count` coefficients (count <= LONGEST_RECURSION)."""
        if len(self._values) < count:
            coming = np.zeros(max(count, 64, min(2 * len(self._values), LONGEST_RECURSION)))
            head = self.numerator[: len(coming)]
            coming[: len(head)] = head
            self._values = recursed(self.phi, coming)
        return self._values[:count]

    def at(self, lags: np.ndarray) -> np.ndarray:
        """Coefficients at `lags` (int64, >= 0, any shape)."""
        far = lags >= LONGEST_RECURSION
        if not far.any():
            return self.upto(int(lags.max(initial=0)) + 1)[lags]
        values = np.empty(lags.shape)
        values[~far] = self.at(lags[~far])
        distinct, where = np.unique(lags[far], return_inverse=True)
        values[far] = np.array([self._far(int(lag)) for lag in distinct])[where]
        return values

    def _far(self, lag: int) -> float:
        if not self.phi:
            return 0.0
        order, known = len(self.phi), len(self.numerator) + len(self.phi)
        state = self.upto(known)[-1 : -order - 1 : -1].copy()
        power, left = companion(self.phi), lag - (known - 1)
        with np.errstate(under="ignore", over="ignore", invalid="ignore"):
            while left:
                if left & 1:
                    state = power @ state
                power, left = power @ power, left >> 1
        return float(state[0])


@lru_cache(maxsize=16)
def impulse_response(phi: tuple[float, ...]) -> PowerSeries:
    """1 / phi(z); kept, since every sum over shocks asks for it again."""
    return PowerSeries(np.ones(1), phi)


class CrossCovariance:
    """Gamma(h) = E w_i(t + h) w_j(t), w_i and w_j stationary autoregressions of one unit white noise.

    `condition` is the 1-norm condition number of the linear system solved: the relative error of Gamma is of
    the order of the machine precision times it.
    """

    def __init__(self, first: tuple[float, ...], second: tuple[float, ...]):
        ahead, behind, self.condition = _split(polynomial(first), polynomial(second))
        self._ahead = PowerSeries(ahead, first)
        self._behind = PowerSeries(behind, second)

    def __call__(self, lags: np.ndarray) -> np.ndarray:
        lags = np.asarray(lags, np.int64)
        if not (lags < 0).any():
            return self._ahead.at(lags)
        return np.where(lags >= 0, self._ahead.at(np.maximum(lags, 0)), self._behind.at(np.maximum(-lags, 0)))


@lru_cache(maxsize=256)
def cross_covariance(first: tuple[float, ...], second: tuple[float, ...]) -> CrossCovariance:
    """Gamma(h) of the autoregressions with coefficients `first` (at t + h) and `second` (at t), both stationary."""
    return CrossCovariance(first, second)


def _split(a: np.ndarray, b: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """u, v (v_0 = 0) with u(z) b(1/z) + v(1/z) a(z) = 1, and the condition number of the system."""
    system, one, ahead = _system(a, b)
    size = len(system)
    solve, condition = _solver(system)
    solution = solve(one)
    # One refinement with a long residual: it costs a product and removes most of the error of elimination.
    residual = one - system.astype(np.longdouble) @ solution.astype(np.longdouble)
    solution = solution + solve(residual.astype(float))
    if condition > HOPELESS and size > LARGEST_RATIONAL:
        raise Unknown(f"its coefficients are too near to a unit root (condition number {condition:.1g})")
    if condition > WEAK and size <= LARGEST_RATIONAL:
        solution = np.array([float(x) for x in _rational_solution(system, one)])
    return solution[: ahead + 1], np.concatenate([[0.0], solution[ahead + 1 :]]), condition


def _solver(system: np.ndarray) -> tuple[Callable[[np.ndarray], np.ndarray], float]:
    """What solves a linear system, and its condition number; SciPy is imported for what NumPy would be slow at only."""
    size = np.abs(system).sum(axis=0).max()
    if len(system) <= SMALL:
        try:
            inverse = np.linalg.inv(system)
        except np.linalg.LinAlgError:
            return (lambda right: np.full(right.shape, np.nan)), 1e18
        return (lambda right: inverse @ right), min(float(size * np.abs(inverse).sum(axis=0).max()), 1e18)
    from scipy.linalg import lapack, lu_factor, lu_solve

    factors = lu_factor(system)
    return (lambda right: lu_solve(factors, right)), 1.0 / max(float(lapack.dgecon(factors[0], size)[0]), 1e-18)


def rational_split(first: tuple[float, ...], second: tuple[float, ...]) -> tuple[list[Fraction], list[Fraction]]:
    """Numerators of Gamma at lags from 0 on over phi of `first`, and below 0 over that of `second`, as they are."""
    system, one, ahead = _system(polynomial(first), polynomial(second))
    solution = _rational_solution(system, one)
    return solution[: ahead + 1], [Fraction(0), *solution[ahead + 1 :]]


def _system(a: np.ndarray, b: np.ndarray) -> tuple[np.ndarray, np.ndarray, int]:
    """The linear system of u and v, its right side, and the degree of u."""
    behind, ahead = len(b) - 1, max(len(a) - 2, 0)  # highest powers of 1/z and z that occur
    size = ahead + behind + 1
    system = np.zeros((size, size))
    for i in range(ahead + 1):  # u_i b_l stands at the power i - l
        system[behind + i - np.arange(len(b)), i] = b
    for m in range(1, behind + 1):  # v_m a_l stands at the power l - m
        system[behind + np.arange(len(a)) - m, ahead + m] = a
    one = np.zeros(size)
    one[behind] = 1.0
    return system, one, ahead


def _rational_solution(system: np.ndarray, right: np.ndarray) -> list[Fraction]:
    """The solution in exact rational arithmetic; for a small system near a unit root."""
    rows = [[Fraction(x) for x in (*row, b)] for row, b in zip(system.tolist(), right.tolist(), strict=True)]
    size = len(rows)
    for i in range(size):
        pivot = next((r for r in range(i, size) if rows[r][i]), None)
        if pivot is None:
            raise Unknown("its coefficients have a root on the unit circle")
        rows[i], rows[pivot] = rows[pivot], rows[i]
        scale = rows[i][i]
        rows[i] = [x / scale for x in rows[i]]
        for r in range(size):
            if r != i and rows[r][i]:
                factor = rows[r][i]
                rows[r] = [x - factor * y for x, y in zip(rows[r], rows[i], strict=True)]
    return [row[-1] for row in rows]


def spectral_radius(phi: tuple[float, ...]) -> float:
    """Largest modulus of the roots of z^p - phi_1 z^{p-1} - ... - phi_p; below 1 when stationary."""
    return float(np.abs(np.linalg.eigvals(companion(phi))).max()) if phi else 0.0
