"""Small matrices with the same bits everywhere: products in a fixed order, a factor, a doubling sum."""

from __future__ import annotations

import numpy as np

from procgen.chance.kernel import is_compiling, machine

_LARGE, _STRIP = 64, 32  # size from which on a compiled product repays; columns of a strip of `compiled_filter`
_ROUNDING = 2.0**-50
_DOUBLINGS = 64


def matmul(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """The product of (..., n, k) and (..., k, m), the k terms added in order."""
    a, b = np.asarray(a, np.float64), np.asarray(b, np.float64)
    if a.shape[-1] != b.shape[-2]:
        raise ValueError(f"expected inner sizes to agree, got shapes {a.shape} and {b.shape}")
    if a.ndim == b.ndim == 2 and min(*a.shape, *b.shape) >= _LARGE and is_compiling():
        return _product(np.ascontiguousarray(a), np.ascontiguousarray(b))
    total = np.zeros((*np.broadcast_shapes(a.shape[:-2], b.shape[:-2]), a.shape[-2], b.shape[-1]))
    for k in range(a.shape[-1]):
        total += a[..., :, k, None] * b[..., None, k, :]
    return total


def _product(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """The same bits, compiled."""
    count, out = len(b), np.empty((len(a), b.shape[1]))
    back, rows = np.arange(count, 0, -1), np.zeros(_STRIP * (count + 1))
    machine("compiled_filter", "product")(a, b, out, back, rows, np.empty(_STRIP))
    return out


def cholesky(s: np.ndarray) -> np.ndarray:
    """Lower L with L L' = s, for a symmetric positive semidefinite s of shape (n, n), or many of them (..., n, n).

    A pivot that is zero but for rounding gives a zero column: what it stands for is determined by the ones before.
    ValueError when a pivot is clearly negative.
    """
    rest = np.array(s, np.float64)
    if rest.ndim < 2 or rest.shape[-2] != rest.shape[-1]:
        raise ValueError(f"expected a square matrix, got shape {rest.shape}")
    if rest.ndim > 2:
        return _factors(rest)
    size = len(rest)
    bounds = _ROUNDING * size * np.abs(np.diagonal(rest))
    lower = np.zeros_like(rest)
    for j in range(size):
        pivot = rest[j, j]
        if not pivot >= -(2.0**20) * bounds[j]:
            raise ValueError(
                f"expected a positive semidefinite matrix, got pivot {pivot:.3g} in row {j}; "
                "its rows do not fit together as covariances"
            )
        if pivot <= bounds[j]:
            continue
        column = rest[j:, j] / np.sqrt(pivot)
        lower[j:, j] = column
        rest[j:, j:] -= column[:, None] * column[None, :]
    return lower


def _factors(rest: np.ndarray) -> np.ndarray:
    """`cholesky` of many matrices, each by the same operations; `rest` is used up."""
    size = rest.shape[-1]
    bounds = _ROUNDING * size * np.abs(np.diagonal(rest, axis1=-2, axis2=-1))
    lower = np.zeros_like(rest)
    for j in range(size):
        pivot = rest[..., j, j].copy()
        if not np.all(pivot >= -(2.0**20) * bounds[..., j]):
            raise ValueError(f"expected positive semidefinite matrices, got a pivot of {pivot.min():.3g} in row {j}")
        sound = pivot > bounds[..., j]
        root = np.sqrt(np.where(sound, pivot, 1.0))
        column = np.where(sound[..., None], rest[..., j:, j] / root[..., None], 0.0)
        lower[..., j:, j] = column
        rest[..., j:, j:] -= column[..., :, None] * column[..., None, :]
    return lower


def sum_doubling(a: np.ndarray, q: np.ndarray) -> np.ndarray:
    """The sum of a^j q a'^j over j = 0, 1, 2 ..., for a of spectral radius below 1; shapes (n, n).

    It solves s = a s a' + q by doubling (Smith 1968): s <- s + a s a', a <- a a, until nothing changes.
    ValueError when the sum does not settle.
    """
    power, total = np.array(a, np.float64), np.array(q, np.float64)
    for _ in range(_DOUBLINGS):
        with np.errstate(over="ignore", invalid="ignore"):
            more = total + matmul(matmul(power, total), power.swapaxes(-1, -2))
            power = matmul(power, power)
        if not np.isfinite(more).all():
            break
        if (more == total).all():
            return total
        total = more
    raise ValueError("expected a matrix with a spectral radius below 1, got one whose powers do not die out")
