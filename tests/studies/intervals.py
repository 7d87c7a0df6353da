"""Intervals of shares."""

from __future__ import annotations


def interval(count: int, runs: int, level: float = 0.999) -> tuple[float, float]:
    """Clopper & Pearson (1934) interval of a share."""
    from scipy.stats import beta

    tail = (1 - level) / 2
    low = beta.ppf(tail, count, runs - count + 1) if count else 0.0
    high = beta.isf(tail, count + 1, runs - count) if count < runs else 1.0
    return float(low), float(high)
