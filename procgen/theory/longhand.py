"""Sums of autocovariances that cancel, in whole numbers of many digits.

The difference of a series near a unit root is small beside the series: its variance is a sum of autocovariances that
nearly cancel, and rounded ones leave nothing of it. Coefficients are taken as the exact numbers that they are, the
autocovariances as multiples of 2^-BITS from the rational solution of their linear system.
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from functools import lru_cache

import numpy as np

from procgen.theory.arma import LARGEST_RATIONAL, rational_split

BITS = 512  # of what follows the point
LONGEST, MOST_PAIRS, MOST_SUMS = 8192, 1 << 14, 1 << 17


def can_sum(first: Sequence[float], second: Sequence[float], pairs: int, gaps: np.ndarray, reach: int) -> bool:
    """Whether a sum is short enough: its system small, its lags near, its products few."""
    small = len(first) + len(second) <= LARGEST_RATIONAL + 1 and pairs <= MOST_PAIRS
    return small and int(np.abs(gaps).max(initial=0)) + reach <= LONGEST and len(gaps) * pairs <= MOST_SUMS


def summed(
    first: tuple[float, ...],
    second: tuple[float, ...],
    delays: dict[int, float],
    others: dict[int, float],
    gaps: np.ndarray,
) -> np.ndarray:
    """The sum over delays d, e of c(d) k(e) Gamma(gap + e - d) at one-dimensional gaps, rounded once."""
    weights: dict[int, int] = {}
    for d, c in delays.items():
        for e, k in others.items():
            weights[e - d] = weights.get(e - d, 0) + _whole(c) * _whole(k)
    reach = int(np.abs(gaps).max(initial=0)) + max(map(abs, weights), default=0)
    ahead, behind = _covariances(first, second, 1 << reach.bit_length())
    out = []
    for gap in gaps.tolist():
        lags = ((gap + shift, weight) for shift, weight in weights.items() if weight)
        out.append(sum(weight * (ahead[lag] if lag >= 0 else behind[-lag]) for lag, weight in lags))
    return np.array([total / (1 << 3 * BITS) for total in out])


@lru_cache(maxsize=16)
def _covariances(first: tuple[float, ...], second: tuple[float, ...], count: int) -> tuple[list[int], list[int]]:
    """Gamma at the lags 0 .. count, and at minus these, in units of 2^-BITS."""
    ahead, behind = rational_split(first, second)
    return _recursed(first, ahead, count), _recursed(second, behind, count)


def _recursed(phi: tuple[float, ...], numerator: list[Fraction], count: int) -> list[int]:
    weights, out = [_whole(c) for c in phi], list[int]()
    for lag in range(count + 1):
        coming = _whole(numerator[lag]) if lag < len(numerator) else 0
        back = min(lag, len(weights))
        out.append(coming + (sum(weights[i] * out[lag - 1 - i] for i in range(back)) >> BITS))
    return out


def _whole(x: float | Fraction) -> int:
    """x in units of 2^-BITS."""
    exact = Fraction(x)
    return round(exact * (1 << BITS))
