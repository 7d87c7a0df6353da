"""Characteristic functions of sums of independent shocks: they exist where moments do not, and are products.

For y = sum of w z over independent shocks z, E exp(i u y) is the product of those of the shocks at u w, and several
steps of one series are such a sum, too (Lukacs 1970, Characteristic Functions). That of a law is a quadrature over its
quantiles.
"""

from __future__ import annotations

from functools import lru_cache
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.theory.expression import Expression
from procgen.theory.sources import IID
from procgen.theory.unknown import Unknown
from procgen.theory.weights import weights_at

_LAST, _NODES = 8.0, 1024  # normal score of the outermost node, and the number of nodes
_AT_ONCE = 512  # frequencies
_SMALL = 1e-4  # frequency up to which a law of variance 1 has 1 − u²/2, but for a few 1e-10


def refusal(x: Expression) -> str:
    """Why a series has no characteristic function in closed form; empty where it has."""
    if x.terms or not x.linear:
        return "it is no sum of shocks"
    for source in x.sources:
        if source.kind != IID or source.path is not None or source.law.needs_spread:
            return f"{source.called} is not made of independent shocks of one variance"
    if any(x.space.dependent(a, b) for a, b in combinations(x.sources, 2)):
        return "its sources depend on each other"
    return ""


def characteristic(x: Expression, steps: list[int], frequencies: list[float]) -> complex:
    """E exp(i sum of u d) of the deviations d of x from its mean at up to two steps, u their frequencies."""
    if reason := refusal(x):
        raise Unknown(reason)
    log = 0j
    for source in x.sources:
        form = x.linear.only([source])
        weights = weights_at([(form, side) for side in range(len(steps))], steps)
        u, times = np.unique(source.unit * (np.asarray(frequencies) @ weights), return_counts=True)
        log += times[u != 0.0] @ np.log(_of_law(source.law, u[u != 0.0]))
    return complex(np.exp(log))


def _of_law(law: Any, u: NDArray) -> NDArray:
    """E exp(i u z) of standardised shocks, at frequencies (n,)."""
    if law.gaussian:
        return np.exp(-0.5 * u * u) + 0j
    values, chances = _nodes(law)
    out = 1.0 - 0.5 * u * u + 0j
    (large,) = np.nonzero(np.abs(u) > _SMALL)
    for k in range(0, len(large), _AT_ONCE):
        at = large[k : k + _AT_ONCE]
        out[at] = np.exp(1j * np.outer(u[at], values)) @ chances
    return out


@lru_cache(maxsize=64)
def _nodes(law: Any) -> tuple[NDArray, NDArray]:
    """Values and their chances: those of a law of few values, else quantiles at normal scores."""
    if law.points is not None:
        return law.points.values, law.points.chances
    from scipy.special import ndtr

    g = np.linspace(-_LAST, _LAST, _NODES + 1)
    with np.errstate(over="ignore"):
        values = np.asarray(law.distribution().ppf(ndtr(g)), float)
    weights = np.exp(-0.5 * g * g) * np.isfinite(values)
    return np.where(np.isfinite(values), values, 0.0), weights / weights.sum()
