"""Values of drawn parameters from uniforms, with the same bits on every processor."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import lru_cache
from itertools import pairwise
from typing import Any

import numpy as np

from procgen.chance.areas import Areas
from procgen.chance.blocks import Scratch, blockwise
from procgen.chance.elementary import exp, log
from procgen.chance.inversion import Inverse
from procgen.chance.normal import normal_quantile, normal_tail
from procgen.spec.draws import BetaDraw, ChoiceDraw, DrawLaw, LognormalDraw, NormalDraw, UniformDraw

Array = np.ndarray


def values(law: DrawLaw, u: Array) -> Array:
    """Draws of a law from uniforms in (0, 1), elementwise and non-decreasing; never outside its bounds."""
    x = _QUANTILES[type(law)](law, u)
    low, high = law.ends
    if not law.closed:  # an open end is never met, also by rounding
        low, high = np.nextafter(low, np.inf), np.nextafter(high, -np.inf)
    return np.minimum(np.maximum(x, low), high)


def _uniform(law: UniformDraw, u: Array) -> Array:
    return law.low + (law.high - law.low) * u


def _normal(law: NormalDraw, u: Array) -> Array:
    if law.within is None:
        return law.location + law.sd * normal_quantile(u)
    low, high = ((end - law.location) / law.sd for end in law.within)
    return law.location + law.sd * _cut(low, high, u)


def _lognormal(law: LognormalDraw, u: Array) -> Array:
    if law.within is None:
        return law.median * exp(law.sigma * normal_quantile(u))
    low, high = (float(log(end / law.median)) / law.sigma for end in law.within)
    return law.median * exp(law.sigma * _cut(low, high, u))


def _cut(low: float, high: float, u: Array) -> Array:
    """Quantiles of the standard normal law between two ends, by areas on the side where they are small."""
    if low + high > 0.0:
        return -_cut(-high, -low, 1.0 - u)
    below, up_to = _below(low), _below(high)
    return normal_quantile(np.maximum(below + (up_to - below) * u, 2.0**-1000))


def _below(x: float) -> float:
    """The area of the standard normal law below x."""
    tail = float(normal_tail(np.array([abs(x)]))[0])
    return tail if x < 0.0 else 1.0 - tail


def _choice(law: ChoiceDraw, u: Array) -> Array:
    """The values in increasing order, each over its share of the uniforms."""
    weights = law.weights or (1.0,) * len(law.values)
    pairs = sorted(zip(law.values, weights, strict=True))
    total = 0.0
    for _, weight in pairs:
        total = total + weight
    x, reached = np.full(u.shape, pairs[0][0]), 0.0
    for (_, weight), (value, _) in pairwise(pairs):
        reached = reached + weight
        x = np.where(u * total >= reached, value, x)
    return x


def _beta(law: BetaDraw, u: Array) -> Array:
    """By the logit of the draw, whose law is smooth on the whole line."""
    inverse, centre, scale = _logit(law.alpha, law.beta)

    def quantile(u: Array, out: Array, scratch: Scratch) -> None:
        side, p = np.subtract(u, 0.5), np.minimum(u, np.subtract(1.0, u))
        inverse.quantile(p, side, out, scratch)

    y = centre + scale * blockwise(quantile, u, None)
    share = np.where(y < 0.0, exp(np.minimum(y, 0.0)), 1.0) / (1.0 + exp(-np.abs(y)))
    return law.low + (law.high - law.low) * share


@lru_cache(maxsize=64)
def _logit(alpha: float, beta: float) -> tuple[Inverse, float, float]:
    """Of log(x / (1 − x)) for a beta variable x, about its mode and in units of its width there."""
    total = alpha + beta
    centre = float(log(alpha / beta))
    scale = float(np.sqrt(1.0 / alpha + 1.0 / beta))
    peak = alpha * float(log(alpha / total)) + beta * float(log(beta / total))

    def density(z: Array, sign: float) -> Array:
        y = centre + sign * scale * z
        # x^α (1 − x)^β of the logistic x, by logarithms of 1 + exp(−|y|), over its value at the mode
        one = log(1.0 + exp(-np.abs(y)))
        below, above = np.where(y < 0.0, y, 0.0) - one, np.where(y > 0.0, -y, 0.0) - one
        return exp(np.maximum(alpha * below + beta * above - peak, -700.0))

    reach = 13.0 + 80.0 / (scale * min(alpha, beta))
    return Inverse(Areas(lambda z: density(z, 1.0), reach), Areas(lambda z: density(z, -1.0), reach)), centre, scale


_QUANTILES: Mapping[type, Callable[[Any, Array], Array]] = {
    UniformDraw: _uniform,
    NormalDraw: _normal,
    LognormalDraw: _lognormal,
    ChoiceDraw: _choice,
    BetaDraw: _beta,
}
