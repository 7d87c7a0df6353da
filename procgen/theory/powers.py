"""Which moments a garch of any order has.

Its state v = (h(t), .., h(t - q + 1), e^2(t - 1), .., e^2(t - p + 1)) moves as v(t + 1) = c + A(z(t)^2) v(t) with
entries that are not negative. E h^s is finite for a whole s exactly when the spectral radius r(s) of E A^(s), the s-th
Kronecker power, is below 1 (Ling & McAleer 2002, Econometric Theory 18, 722-729; s = 2: He & Terasvirta 1999). Such
powers act on products of s elements of v, and equal products are taken once.

log r(s) is the growth of log E |A .. A|^s and convex in s: where it is below 0 at s and not at s + 1, the moments below
the zero of the chord between them exist.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from itertools import combinations_with_replacement
from math import comb, factorial, log, prod

import numpy as np

LARGEST = 330  # products of s elements whose matrix is built
HIGHEST = 8  # whole s that are looked at
SQUARINGS = 40
ROUNDING = 1e-12
TINY = 1e-140


def existing_orders(
    alpha: Sequence[float], beta: Sequence[float], even_moment: Callable[[int], float | None]
) -> tuple[float, float]:
    """Orders of moments of e: all below the first exist, and none from the second on does (inf: not known).

    Parameters
    ----------
    alpha, beta : coefficients, sums below 1
    even_moment : E z^(2k) for k, None where it is infinite
    """
    last = log(sum(alpha) + sum(beta))
    for s in range(2, HIGHEST + 1):
        if even_moment(s) is None:
            return _just_above(2 * (s - 1)), 2.0 * s
        if comb(max(len(beta), 1) + len(alpha) - 2 + s, s) > LARGEST:
            return _just_above(2 * (s - 1)), np.inf
        now = log_radius(alpha, beta, s, even_moment)
        if now >= -ROUNDING:
            return 2.0 * (s - 1 - last / (now - last)), 2.0 * s
        last = now
    return _just_above(2 * HIGHEST), np.inf


def log_radius(
    alpha: Sequence[float], beta: Sequence[float], s: int, even_moment: Callable[[int], float | None]
) -> float:
    """log r(s), from the mean of the s-th Kronecker power of A on products of s elements of the state."""
    q = max(len(beta), 1)
    size = q + len(alpha) - 1
    states = list(combinations_with_replacement(range(size), s))
    place = {state: i for i, state in enumerate(states)}
    fixed = [*beta, *[0.0] * (q - len(beta)), *alpha[1:]]  # h(t + 1) is this times v plus alpha_1 z^2 h(t)
    matrix = np.zeros((len(states), len(states)))
    for state, row in place.items():
        fresh, squares = state.count(0), state.count(q) if len(alpha) > 1 else 0
        moved = [i - 1 for i in state if i not in (0, q)] + [0] * squares
        for hit in range(fresh + 1):
            weight = comb(fresh, hit) * alpha[0] ** hit * _at_least_0(even_moment(hit + squares))
            for others, c in _multinomial(fixed, fresh - hit):
                matrix[row, place[tuple(sorted((*moved, *[0] * hit, *others)))]] += weight * c
    return _growth(matrix)


def _growth(matrix: np.ndarray) -> float:
    """log of the spectral radius of a matrix without negative elements: of its power 2^40, by squaring."""
    total = 0.0
    for k in range(SQUARINGS):
        size = float(matrix.max())
        if size == 0.0:
            return -np.inf
        matrix = np.where(matrix < TINY * size, 0.0, matrix / size)  # numbers below the normal range are slow
        matrix, total = matrix @ matrix, total + log(size) / 2.0**k
    return total


def _multinomial(weights: Sequence[float], power: int) -> Iterator[tuple[tuple[int, ...], float]]:
    """The products in (sum of weights times elements)^power, with their coefficients."""
    used = [i for i, w in enumerate(weights) if w]
    for chosen in combinations_with_replacement(used, power):
        ways = factorial(power) // prod(factorial(chosen.count(i)) for i in set(chosen))
        yield chosen, ways * prod(weights[i] for i in chosen)


def _at_least_0(moment: float | None) -> float:
    return np.inf if moment is None else moment


def _just_above(order: int) -> float:
    """What says that the moment of this order exists, as an order below which all do."""
    return float(np.nextafter(float(order), np.inf))
