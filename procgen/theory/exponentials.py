"""Expectations of exponentials of linear forms of independent shocks, whatever their law.

With K(q) = log E exp(q z) of a shock and the weights w(u) of a form, log E exp(form) is the sum of K(w(u)) over the
shocks, and that of a product of two exponentials has the sums of both weights (Kendall & Stuart 1977, vol. 1, ch. 3).
"""

from __future__ import annotations

import math

import numpy as np

from procgen.theory.linear import Linear
from procgen.theory.sources import Source
from procgen.theory.unknown import Unknown
from procgen.theory.weights import over_distinct, weights_at

MOST_VALUES = 20_000  # of a sample, times shocks: what is added up for one pair of steps


def of_shocks(
    source: Source, tilts: tuple[Linear, Linear], t: np.ndarray, s: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """(E exp(a) E exp(b), Cov(exp(a), exp(b))) of two forms of one source, at steps of one shape."""
    forms = [(tilt, side) for side, tilt in enumerate(tilts) if tilt]

    def alone(steps: list[int]) -> float:
        return sum(_sum(source, weights, "mean") for weights in weights_at(forms, steps))

    def together(steps: list[int]) -> float:
        both = weights_at(forms, steps)
        met = both[:, (both != 0.0).all(axis=0)]
        spread = "variance" if steps[0] == steps[1] else "covariance"
        return _sum(source, met.sum(axis=0), spread) - sum(_sum(source, weights, "mean") for weights in met)

    apart = np.exp(over_distinct(forms, t, s, alone))
    gain = np.expm1(over_distinct(forms, t, s, together)) if len(forms) == 2 else np.zeros(t.shape)
    return apart, apart * gain


def order(source: Source, form: Linear) -> float:
    """The order below which moments of exp(form) exist."""
    if not form.is_plain:
        raise Unknown("which moments it has depends on the step")
    lower, upper = source.law.exponential_moments
    weights = source.unit * weights_at([(form, 0)], [0])[0]
    return min((upper / w if w > 0.0 else -lower / w for w in weights.tolist() if w), default=math.inf)


def _sum(source: Source, weights: np.ndarray, of_what: str) -> float:
    """Sum of K over the weights."""
    rates = source.unit * weights[weights != 0.0]
    values = len(getattr(source.law, "values", ()))  # of a sample, each of which counts for every shock
    if len(rates) * values > MOST_VALUES:
        raise Unknown(f"an exponential of {len(rates)} shocks of a sample of {values:,} values is not added up")
    grown = source.law.growth(rates)
    if grown is None:
        raise Unknown(f"the mean of an exponential of {source.key} is finite, but not worked out for its law")
    endless = np.flatnonzero(np.isinf(grown))
    if len(endless):
        rate = float(rates[endless[0]])
        end = source.law.exponential_moments[0 if rate < 0.0 else 1]
        tail = f"is finite below {end:.6g} only" if end else "is infinite for any q above 0"
        raise Unknown(
            f"infinite {of_what}: E exp({'−' if rate < 0.0 else ''}q z) of the {source.law} shocks z of {source.key} "
            f"{tail}, and here q is {abs(rate):.6g}"
        )
    return float(grown.sum())
