"""Averages over a law of shocks by one rule for any function: Gauss-Legendre panels over its density.

Panels shrink by halves towards 0, towards the ends of the law and towards its landmarks, where it or a function may
bend or have a singularity that can be integrated, and grow by halves outwards, so that power tails are added up.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np

from procgen.theory.mixedlaw import Normal

POINTS, PARTS = 12, 2  # of a panel; panels of an octave
NEAREST, FURTHEST = -54, 300  # octaves
WHOLE = 1e-10


def average(law: Any, f: Callable[[np.ndarray], np.ndarray]) -> float:
    """E f(z) for an f of arrays, inf where it is too large."""
    z, weights = nodes_of(law)
    if abs(weights.sum() - 1.0) > WHOLE:  # an end that is too steep, or no density: its own quadrature
        return float(law.expect(lambda v: float(f(np.array(v)))))
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        values = np.where(weights > 0.0, f(z), 0.0)
        return float(values @ weights)


@lru_cache(maxsize=64)
def nodes_of(law: Any) -> tuple[np.ndarray, np.ndarray]:
    """Nodes and weights, which hold the density and add up to 1; of a law without one, a weight of 0."""
    distribution = Normal() if law.name == "normal" else law.distribution()
    if hasattr(distribution, "pmf"):
        return np.zeros(1), np.zeros(1)
    low, high = distribution.support()
    octaves = 2.0 ** (np.arange(PARTS * NEAREST, PARTS * FURTHEST) / PARTS)
    edges = [np.array([low, high])]
    for mark in {0.0, low, high, *getattr(law, "_landmarks", tuple)()}:
        if np.isfinite(mark):
            edges += [np.array([mark]), mark + octaves, mark - octaves]
    cuts = np.unique(np.concatenate(edges))
    cuts = cuts[np.isfinite(cuts) & (cuts >= low) & (cuts <= high)]
    x, w = np.polynomial.legendre.leggauss(POINTS)
    half = np.diff(cuts)[:, None] / 2.0
    z, weights = (cuts[:-1, None] + half * (x + 1.0)).ravel(), (half * w).ravel()
    with np.errstate(over="ignore", under="ignore", invalid="ignore", divide="ignore"):
        weights = weights * np.nan_to_num(distribution.pdf(z), posinf=0.0)
    kept = weights > 0.0
    return z[kept], weights[kept]
