"""Linear recursions run forward, in blocks: a triangular band system each, solved by LAPACK.

The same numbers as scipy.signal.lfilter to rounding; that module alone takes longer to import than a theory to compute.
"""

from __future__ import annotations

import numpy as np

SHORTEST, LONGEST = 1024, 1 << 16  # steps of a block
SHORT = 4096  # products that are done sooner than SciPy's linear algebra is imported
BAND = 1 << 20  # numbers in the band of a block


def recursed(phi: tuple[float, ...], coming: np.ndarray) -> np.ndarray:
    """y(t) = coming(t) + sum of phi_i y(t - i) from y = 0 before the first; float64, (steps,)."""
    p, count = len(phi), len(coming)
    y = np.array(coming, float)
    if not p or not count:
        return y
    if p * count <= SHORT:
        return _one_by_one(phi, y)
    from scipy.linalg.lapack import dtbtrs

    size = min(count, max(SHORTEST, min(LONGEST, BAND // (p + 1))))
    rows = min(p, size - 1) + 1
    band = np.empty((rows, size), order="F")
    band[:] = np.array([1.0, *(-c for c in phi)])[:rows, None]
    weights = np.array(phi)
    for first in range(0, count, size):
        block = y[first : first + size]
        if first:  # what the values before the block add within it
            reach, past = min(p, len(block)), np.zeros(p)
            kept = min(p, first)
            past[p - kept :] = y[first - kept : first]
            block[:reach] += np.convolve(past, weights)[p - 1 : p - 1 + reach]
        block[:] = dtbtrs(band[:, : len(block)], block, uplo="L", diag="U")[0]
    return y


def _one_by_one(phi: tuple[float, ...], coming: np.ndarray) -> np.ndarray:
    y: list[float] = coming.tolist()
    for t in range(1, len(y)):
        for i, c in enumerate(phi[:t], start=1):
            y[t] += c * y[t - i]
    return np.array(y)
