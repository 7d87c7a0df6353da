"""What two shocks of one step have in common: under a normal copula, a t copula, or one that follows a chain.

A tie answers for one pair: the correlation of values of given laws, moments of the normal scores, and how often both
are far out together.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from functools import cached_property, lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.spec.records import dataclass
from procgen.theory.copula import TERMS, hermite_basis, is_symmetric, law_correlation, quantiles_of_normals
from procgen.theory.unknown import Unknown

STEP = 0.2  # of the logarithm of the chi-square
CUT = 70.0  # exp(-CUT) is left out at its lower end
TOO_COARSE = 1e-4  # a correlation is not given where more of the laws' variance than this lies further out
LEAST_TAIL = 1e-300
FORGOTTEN = 1e-15  # what is left of a chain that counts no more
RESOLVED = 1e-8  # what the rules leave of a correlation under a t copula, found where it is known otherwise


@dataclass(frozen=True)
class NormalTie:
    """Normals of this correlation."""

    rho: float

    def turned(self) -> NormalTie:
        """The tie when one of the two has its sign changed."""
        return NormalTie(-self.rho)

    def law_correlation(self, a: Any, b: Any) -> tuple[float, float]:
        """Correlation of the values of two standardised laws, and a bound on the numerical error."""
        return law_correlation(a, b, self.rho)

    @property
    def scores(self) -> tuple[float, float]:
        """E g1 g2 and E g1^2 g2^2 of the normal scores."""
        return self.rho, 1.0 + 2.0 * self.rho**2

    def joint_tail(self, share: float) -> float:
        """The chance that both ranks are below `share`."""
        from scipy.special import ndtri

        x = float(ndtri(share))
        return _over_angles(self.rho, lambda sine: np.exp(-x * x / (1.0 + sine)))


@dataclass(frozen=True)
class StudentTie:
    """Two of a multivariate t vector of `df` degrees of freedom, with this correlation (of its normals)."""

    df: float
    rho: float

    def __str__(self) -> str:
        return f"t copula with {self.df:g} degrees of freedom"

    def turned(self) -> StudentTie:
        """As for `NormalTie`."""
        return StudentTie(self.df, -self.rho)

    def law_correlation(self, a: Any, b: Any) -> tuple[float, float]:
        """As for `NormalTie`; exact where the laws are those of the vector itself."""
        if a == b and a.name == "student_t" and a.df == self.df:
            return self.rho, 0.0
        if self.rho == 0.0 and (is_symmetric(a) or is_symmetric(b)):
            return 0.0, 0.0  # the sign of one is as likely to be the other, whatever the other number
        for law in (a, b):
            if getattr(law, "points", None) is not None:
                raise Unknown(f"the correlation of {law}, a law of few values, under a t copula is not computed")
        (c, seen), (d, other) = t_coefficients(a, self.df), t_coefficients(b, self.df)
        weights = _mixing(self.df)[1]
        powers = self.rho ** np.arange(TERMS)
        rests = [max(0.0, whole - float((x * x).sum(axis=0) @ weights)) for x, whole in ((c, seen), (d, other))]
        beyond = float(np.sqrt(abs((1.0 - seen) * (1.0 - other))))
        if beyond > TOO_COARSE:
            raise Unknown(f"{a} and {b} under a t copula have tails too heavy for the correlation to be computed")
        bound = abs(self.rho) ** TERMS * float(np.sqrt(rests[0] * rests[1])) + beyond + RESOLVED
        return float((powers @ (c * d)) @ weights), bound

    @cached_property
    def scores(self) -> tuple[float, float]:
        """As for `NormalTie`."""
        (first, second), weights = _score_coefficients(self.df), _mixing(self.df)[1]
        powers = self.rho ** np.arange(TERMS)
        return float((powers @ first**2) @ weights) if self.rho else 0.0, float((powers @ second**2) @ weights)

    def joint_tail(self, share: float) -> float:
        """As for `NormalTie`."""
        from scipy.special import stdtrit

        x = float(stdtrit(self.df, share))
        return _over_angles(self.rho, lambda sine: (1.0 + 2.0 * x * x / (self.df * (1.0 + sine))) ** (-self.df / 2.0))


Pair = NormalTie | StudentTie


@dataclass(frozen=True)
class StateTie:
    """A tie of its own in every state of a stationary chain.

    `by` and `names` are what the chain and its states are called, `moves` its transitions between stages, the shares of
    these, and the states that they belong to; `behind` are the keys of the sources that drive it.
    """

    by: str
    names: tuple[str, ...]
    states: tuple[Pair, ...]
    moves: tuple[Any, Any, tuple[int, ...]]
    behind: frozenset[str] = frozenset()

    def __str__(self) -> str:
        values = ", ".join(f"{tie.rho:g} in {name}" for name, tie in zip(self.names, self.states, strict=True))
        copula = f"{self.states[0]}, " if isinstance(self.states[0], StudentTie) else ""
        return f"{copula}correlation follows {self.by} ({values})"

    @property
    def shares(self) -> NDArray:
        """The share of the time in each state."""
        return np.bincount(self.moves[2], weights=self.moves[1], minlength=len(self.states))

    @property
    def rho(self) -> float:
        return self._mean([tie.rho for tie in self.states])

    def turned(self) -> StateTie:
        """As for `NormalTie`."""
        return replace(self, states=tuple([tie.turned() for tie in self.states]))

    def law_correlation(self, a: Any, b: Any) -> tuple[float, float]:
        """As for `NormalTie`."""
        found = [tie.law_correlation(a, b) for tie in self.states]
        return self._mean([value for value, _ in found]), self._mean([error for _, error in found])

    @property
    def scores(self) -> tuple[float, float]:
        """As for `NormalTie`."""
        found = [tie.scores for tie in self.states]
        return self._mean([first for first, _ in found]), self._mean([second for _, second in found])

    def joint_tail(self, share: float) -> float:
        """As for `NormalTie`."""
        return self._mean([tie.joint_tail(share) for tie in self.states])

    def _mean(self, numbers: Sequence[float]) -> float:
        return float(np.dot(self.shares, numbers))

    # in a row of steps

    def spread_of_sum(self, numbers: Sequence[float], count: int) -> float:
        """Var of the sum, over `count` steps in a row, of a number of the state of each."""
        p, shares, owners = self.moves
        by_stage, left = np.take(numbers, owners), np.eye(len(owners)) - shares
        total, decay = 0.0, np.asarray(p) - shares
        for lag in range(count):
            part = float((shares * by_stage) @ left @ by_stage)
            total += part * (count if lag == 0 else 2 * (count - lag))
            left = left @ decay if lag else decay
            if np.abs(left).max() < FORGOTTEN:
                break
        return total

    def signs(self, count: int) -> tuple[float, float, float]:
        """Mean of c(t) c(t-1), c the sign of the product of both shocks; variances of its sum over `count` steps.

        They are that of the sum, and that of its mean given all states. Given the state the mean of c is
        2/pi asin(rho), under any elliptical law (Lindskog, McNeil & Schmock 2003).
        """
        p, shares, owners = self.moves
        c = np.take([2.0 / np.pi * np.arcsin(tie.rho) for tie in self.states], owners)
        before, after = ((shares * c) @ p) * c, c * (p @ c)
        mean = float(before.sum())
        total = count * (1.0 - mean * mean)
        total += 2 * (count - 1) * (float((shares * c) @ p @ p @ c) - mean * mean)
        between = count * (float((shares * c * c) @ p @ (c * c)) - mean * mean)
        between += 2 * (count - 1) * (float(before @ after) - mean * mean)
        row = before @ (np.asarray(p) - shares)
        for lag in range(2, count):
            part = float(row @ after)  # what is left of the mean of both products beside mean^2
            total, between = (x + 2 * (count - lag) * part for x in (total, between))
            row = row @ (np.asarray(p) - shares)
            if np.abs(row).max() < FORGOTTEN:
                break
        return mean, total, between


Tie = NormalTie | StudentTie | StateTie


def t_coefficients(law: Any, df: float) -> tuple[np.ndarray, float]:
    """Hermite coefficients (TERMS, nodes) of a law's values as functions of a normal z, at each divisor of z.

    Also how much of the variance, 1, the nodes see. A t vector is z / s with normals z and one s; so that E q1(x1)
    q2(x2) is, given s, Mehler's sum, and then a mean over s.
    """
    return _t_coefficients(law, float(df))


@lru_cache(maxsize=64)
def _t_coefficients(law: Any, df: float) -> tuple[np.ndarray, float]:
    z, weighted = hermite_basis()
    values = quantiles_of_normals(law, _normals(df, z))
    return weighted @ values, float((weighted[0] @ values**2) @ _mixing(df)[1])


@lru_cache(maxsize=16)
def _score_coefficients(df: float) -> tuple[np.ndarray, np.ndarray]:
    """The same of the normal score and of its square."""
    z, weighted = hermite_basis()
    g = _normals(df, z)
    return weighted @ g, weighted @ (g * g)


def _normals(df: float, z: np.ndarray) -> np.ndarray:
    """The normals of the ranks of z / s, (points, nodes)."""
    from scipy.special import ndtri, stdtr

    divisors, _ = _mixing(df)
    tail = np.maximum(stdtr(df, -np.abs(z)[:, None] / divisors), LEAST_TAIL)
    return np.copysign(ndtri(tail), z[:, None])


@lru_cache(maxsize=16)
def _mixing(df: float) -> tuple[np.ndarray, np.ndarray]:
    """Nodes s and weights of sqrt(chi-square / df): the trapezoidal rule for its logarithm, whose density is smooth."""
    from scipy.special import gammaln

    mode = np.log(df)
    low, high = mode - 2.0 * CUT / df - 2.0, mode + np.log1p(12.0 / np.sqrt(df) + 80.0 / df)
    step = min(STEP, 1.0 / np.sqrt(df))
    y = np.arange(low, high, step)
    log_density = df / 2.0 * (y - np.log(2.0)) - np.exp(y) / 2.0 - gammaln(df / 2.0)
    weights = np.exp(log_density) * step
    kept = weights > 1e-32
    return np.sqrt(np.exp(y[kept]) / df), weights[kept] / weights[kept].sum()


def _over_angles(rho: float, density: Any) -> float:
    """The chance of a corner, from its derivative in the correlation (Plackett 1954; for t: Dunnett & Sobel 1954)."""
    nodes, weights = np.polynomial.legendre.leggauss(200)
    end = float(np.arcsin(rho))
    half = (end + np.pi / 2.0) / 2.0
    angles = -np.pi / 2.0 + half * (nodes + 1.0)
    sine = np.sin(angles)
    with np.errstate(divide="ignore", under="ignore"):
        return float(half * weights @ density(sine)) / (2.0 * np.pi)
