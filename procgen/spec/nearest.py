"""The nearest correlation matrix to one that is none, on request."""

from __future__ import annotations

import numpy as np

LEAST = 1e-4  # the smallest eigenvalue a repaired matrix is given
DECIMALS = 6  # what is kept, so that the last bits of a machine's linear algebra decide nothing
_ROUNDS = 10_000
_STILL = 1e-9


def nearest(matrix: np.ndarray) -> np.ndarray:
    """Return the correlation matrix with eigenvalues of at least LEAST that is nearest in the sum of squares.

    By alternating projections with Dykstra's correction (Higham 2002, IMA J. Numer. Anal. 22, 329-343), then rounded.
    `matrix` is symmetric, (n, n), with 1 on the diagonal.
    """
    y, correction = np.array(matrix, float), np.zeros_like(matrix, float)
    for _ in range(_ROUNDS):
        before = y
        shifted = y - correction
        values, vectors = np.linalg.eigh(shifted)
        projected = (vectors * np.maximum(values, 2.0 * LEAST)) @ vectors.T
        correction = projected - shifted
        y = (projected + projected.T) / 2.0
        np.fill_diagonal(y, 1.0)
        if np.abs(y - before).max() <= _STILL:
            break
    return np.round(y, DECIMALS) + 0.0
