"""Expectations over two correlated normals by Gauss-Legendre rules between the bends of what is averaged."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from scipy.stats import norm

NODES, WEIGHTS = np.polynomial.legendre.leggauss(48)
END = 12.0  # standard deviations


def _pieces(cuts: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Nodes and weights between ascending cuts, (…, n), on the last axis."""
    low, high = cuts[..., :-1, None], cuts[..., 1:, None]
    z, w = low + (high - low) * (NODES + 1) / 2, (high - low) / 2 * WEIGHTS
    return z.reshape(*z.shape[:-2], -1), w.reshape(*w.shape[:-2], -1)


def over_one(f: Callable, bends: Sequence[float] = ()) -> float:
    """E f(X) of a standard normal X."""
    cuts = np.array(sorted({-END, END, *np.clip(bends, -END, END), *np.arange(-END + 3, END, 3)}))
    z, w = _pieces(cuts)
    return float((f(z) * norm.pdf(z) * w).sum())


def over_two(f: Callable, r: float, bends: Sequence[float] = (), others: Sequence[float] = ()) -> float:
    """E f(X, Y) of standard normals with correlation r; f bends where X is in `bends` and where Y is in `others`."""
    rest = np.sqrt(1.0 - r * r)
    met = [c / r + k * rest / abs(r) for c in others for k in (-8, -3, 0, 3, 8)] if r else []
    cuts = sorted({-END, END, *np.clip([*bends, *met], -END, END), *np.arange(-END + 3, END, 3)})
    z, w = _pieces(np.array(cuts))
    inner = [np.full(z.shape, edge) for edge in np.arange(-END, END + 1, 4)]
    inner += [np.clip((c - r * z) / rest, -END, END) for c in others]
    v, u = _pieces(np.sort(np.stack(inner, axis=-1), axis=-1))
    values = f(z[:, None], r * z[:, None] + rest * v)
    return float(((values * norm.pdf(v) * u).sum(axis=1) * norm.pdf(z) * w).sum())
