"""Sums of independent stable shocks, which are stable again: a filter, a walk, several noises of one index."""

from __future__ import annotations

from itertools import combinations
from typing import Any

import numpy as np

from procgen.theory.expression import Expression
from procgen.theory.unknown import Unknown
from procgen.theory.weights import weights_below


def stable_sum(x: Expression, step: int) -> Any:
    """The law of a linear form of stable shocks of one index alpha at a step, all of them independent.

    With weights w on shocks of unit c and skewness beta: unit^alpha = sum of abs(w c)^alpha, and the skewness is the
    mean of beta sign w, weighted by these (Samoradnitsky & Taqqu 1994, properties 1.2.1 and 1.2.3).
    """
    from procgen.chance.laws import Stable
    from procgen.theory.laws import Affine

    sources = list(x.linear.sources)
    alphas = {getattr(source.law, "alpha", None) for source in sources}
    if len(alphas) > 1 or None in alphas:
        raise Unknown("a sum of shocks without a variance that are not stable with one index has no closed law")
    if any(x.space.dependent(a, b) for a, b in combinations(sources, 2)):
        raise Unknown("a sum of stable shocks that depend on each other has no closed law")
    alpha = float(sources[0].law.alpha)
    size = skew = 0.0
    for source in sources:
        weights = source.unit * weights_below(x.linear.only([source]), step, 2.0 / alpha)
        powers = np.abs(weights) ** alpha
        size += float(powers.sum())
        skew += source.law.beta * float(np.sign(weights) @ powers)
    if size == 0.0:
        raise Unknown("the value at that step is known, not random")
    beta = min(max(skew / size, -1.0), 1.0)
    at = np.array([step], np.int64)
    return Affine(Stable(alpha, _whole(beta)).distribution(), float(x.mean_path(at)[0]), size ** (1.0 / alpha))


def _whole(beta: float) -> float:
    """A skewness that is 1 but for rounding is 1: then one side has no tail."""
    return float(np.rint(beta)) if abs(beta - np.rint(beta)) < 1e-12 else beta
