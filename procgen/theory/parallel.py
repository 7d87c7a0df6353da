"""Markov-switching garch in its parallel form: a variance for each state, each moved by the shocks that are realised.

With h the vector of the K variances, s the state (a stage of one, where stays have stages) and e_s its unit vector,

    e(t)^2 = h_s(t) z(t)^2,   h(t+1) = omega + (beta + alpha e_s' z(t)^2) h(t),

so that m_j = E h 1(s = j) moves by m_l <- sum over j of p_jl (omega q_j + C_j m_j) with C_j = beta + alpha e_j'. This
is the matrix M of Haas, Mittnik & Paolella (2004), J. Financial Econometrics 2, 493-530: there is a stationary solution
with a variance when its spectral radius is below 1. Second moments E h h' 1(s = j) move alike by the means of the
Kronecker squares, and squares at a distance follow from E e(t)^2 h(t+k) 1(s(t+k) = j).
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cached_property, reduce
from typing import Any

import numpy as np

from procgen.theory.chains import States, Steps, Switching
from procgen.theory.unknown import Unknown

LARGEST = 700  # elements of the moments of an order that are solved for
HIGHEST = 8  # powers of the variances that are looked at


class ParallelGarch(Switching):
    """Shocks whose variance is that of the state of a stationary chain, as one white source."""

    def __init__(
        self,
        law: Any,
        omega: Sequence[float],
        alpha: Sequence[float],
        beta: Sequence[float],
        chain: States,
        owners: Sequence[int],
    ):
        self.law, self.chain, self.owners = law, chain, tuple(owners)
        self.omega, self.alpha, self.beta = (np.asarray(x, float) for x in (omega, alpha, beta))
        self.variance = float(sum(self.first[j, k] for j, k in enumerate(self.owners)))
        self.mean_spread = 0.0  # E sqrt(h) has no closed form
        self.strictly_stationary = (
            True,
            f"the spectral radius of the means of its variances is {self.radius:.6g}, below 1 "
            "(Haas, Mittnik & Paolella 2004)",
        )

    def _power(self, j: int, order: int) -> np.ndarray:
        """E of the order-th Kronecker power of beta + alpha e_j' z^2."""
        fixed, random = np.diag(self.beta), np.zeros((len(self.beta),) * 2)
        random[:, self.owners[j]] = self.alpha
        total = np.zeros((len(self.beta) ** order,) * 2)
        for chosen in range(2**order):
            picks = [chosen >> i & 1 for i in range(order)]
            moment = self.law.moment(2 * sum(picks)) if any(picks) else 1.0
            if moment is None:
                raise Unknown(f"infinite moment of order {2 * sum(picks)} of the law of z")
            total = total + moment * reduce(np.kron, [random if pick else fixed for pick in picks])
        return total

    def _moves(self, order: int) -> np.ndarray:
        """The matrix by which E h x .. x h 1(s = j), one below the other, moves."""
        return np.block(
            [
                [self.chain.p[j, row] * self._power(j, order) for j in range(len(self.owners))]
                for row in range(len(self.owners))
            ]
        )

    @cached_property
    def radius(self) -> float:
        """The spectral radius of M."""
        return _radius(self._moves(1))

    @property
    def condition(self) -> float:
        """What rounding is multiplied by in its moments, near where one of them ends."""
        return 1.0 / max(1.0 - self.radius, 1e-300)

    @cached_property
    def first(self) -> np.ndarray:
        """E h 1(s = j), (stages, K)."""
        return self._solved(1, np.outer(self.chain.shares, self.omega))

    @cached_property
    def second(self) -> np.ndarray:
        """E h h' 1(s = j), (stages, K, K); Unknown where it is infinite."""
        if self.law.excess_kurtosis is None or _radius(self._moves(2)) >= 1.0:
            raise Unknown("infinite fourth moment: the mean Kronecker squares of its variances grow")
        k = len(self.omega)
        ahead = np.array([self._power(j, 1) @ self.first[j] for j in range(len(self.owners))])
        constant = [
            np.kron(self.omega, self.omega) * share + np.kron(self.omega, x) + np.kron(x, self.omega)
            for share, x in zip(self.chain.shares, ahead, strict=True)
        ]
        return self._solved(2, np.array(constant)).reshape(-1, k, k)

    def _solved(self, order: int, constant: np.ndarray) -> np.ndarray:
        """What does not change when it moves and a constant (by stage, before the chain moves) is added."""
        moves, pushed = self._moves(order), self.chain.p.T @ constant
        return np.linalg.solve(np.eye(len(moves)) - moves, pushed.ravel()).reshape(pushed.shape)

    @cached_property
    def orders(self) -> tuple[float, float]:
        """All moments below the first order exist, none from the second on (inf: not known).

        By the growth r(k) of the k-th powers of the variances, at whole k. It is convex in k: where it is below 0 at k
        and not at k + 1, the moments below the zero of the chord between them exist.
        """
        law = float(self.law.highest_moment)
        if not self.alpha.any():
            return law, law
        found, last = 2.0, float(np.log(self.radius))
        for order in range(2, HIGHEST + 1):
            if len(self.owners) * len(self.omega) ** order > LARGEST:
                break
            if self.law.moment(2 * order) is None:
                return min(found, law), law
            now = float(np.log(_radius(self._moves(order))))
            if now >= 0.0:
                return min(2.0 * (order - 1 - last / (now - last)), law), min(2.0 * order, law)
            found, last = float(np.nextafter(2.0 * order, np.inf)), now
        return min(found, law), law

    @property
    def highest_moment(self) -> float:  # type: ignore[override]
        """The order below which moments are known to exist."""
        return self.orders[0]

    @property
    def power_tailed(self) -> bool:  # type: ignore[override]
        """Whether its tails are known to be power laws, so that its exponential has no finite mean."""
        return bool(np.isfinite(self.orders[1]))

    def square_covariance(self, lags: Steps) -> np.ndarray:
        """Cov(e(t + lag)^2, e(t)^2)."""
        kurtosis = self.law.moment(4)
        second = self.second
        stages = range(len(self.owners))
        own = [second[j, k, k] for j, k in enumerate(self.owners)]
        last = int(np.max(lags, initial=0))
        out = np.empty(last + 1)
        out[0] = kurtosis * sum(own)
        past = np.array([self.first[j, k] for j, k in enumerate(self.owners)])  # E e(t)^2 1(s = j)
        joint = []
        for j, k in enumerate(self.owners):  # E e(t)^2 h(t+1) 1(s(t) = j)
            joint.append(self.omega * past[j] + self.beta * second[j, k] + kurtosis * self.alpha * own[j])
        coming = self.chain.p.T @ np.array(joint)
        ahead = np.array([self._power(j, 1) for j in stages])
        for lag in range(1, last + 1):
            past = past @ self.chain.p
            out[lag] = sum(coming[j, k] for j, k in enumerate(self.owners))
            coming = self.chain.p.T @ (past[:, None] * self.omega + np.einsum("jab,jb->ja", ahead, coming))
        return out[lags] - self.variance**2


def _radius(matrix: np.ndarray) -> float:
    return float(np.abs(np.linalg.eigvals(matrix)).max())
