"""How far ahead a series can be told: variances of forecast errors, and forecasts from given values.

A linear series is a sum of ratios N(B)/D(B) of its white sources. Given the past shocks of every part, the error h
steps ahead has variance

    sum over j < h, over sources a and b, of cov(a, b) psi_a(j) psi_b(j)       (Box & Jenkins 1970, ch. 5).

Given its own past values alone, it is sigma^2 times the sum of psi(j)^2, with psi and sigma^2 of the series' Wold
form: theta and sigma^2 factor the spectral density of the joint numerator (`theory.wold`). That is what a Kalman
filter settles to, whatever it started from (Harvey 1989, ch. 3). For Gaussian series both are the best forecasts
there are, for others the best linear ones.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from procgen.theory.arma import PowerSeries
from procgen.theory.expression import Expression
from procgen.theory.linear import At
from procgen.theory.sources import PROCESS, Source
from procgen.theory.unknown import Unknown
from procgen.theory.wold import Ratio, ratios, wold

FARTHEST = 1_000_000  # steps ahead
LONGEST_HISTORY = 2_000  # values: the work is their number cubed
DETERMINED = 1e-12  # share of a variance that counts as nothing left


@dataclass(frozen=True)
class Forecast:
    """Mean and variance of a series at `steps`, given values before them; float64 of the shape of `steps`."""

    steps: np.ndarray
    mean: np.ndarray
    variance: np.ndarray


def variance_given_parts(x: Expression, horizons: np.ndarray) -> np.ndarray:
    """Variance of the forecast error at horizons >= 1, all past shocks of every source given."""
    last, own = _last(x, horizons), _long_memory(x)
    if own:
        return np.cumsum(own(last) ** 2)[horizons - 1]
    psi: dict[Source, np.ndarray] = {}
    for source, ratio in ratios(x.linear):
        psi[source] = psi.get(source, 0.0) + _series(ratio).upto(last)
    total = np.zeros(last)
    for a, left in psi.items():
        for b, right in psi.items():
            total = total + x.space.covariance(a, b) * left * right
    return np.cumsum(total)[horizons - 1]


def variance_given_values(x: Expression, horizons: np.ndarray) -> np.ndarray:
    """Variance of the forecast error at horizons >= 1, all past values of the series itself given."""
    last, own = _last(x, horizons), _long_memory(x)
    if own:
        return np.cumsum(own(last) ** 2)[horizons - 1]
    if not x.linear:
        return np.zeros(horizons.shape)
    variance, ratio = wold(x.space, x.linear)
    return variance * np.cumsum(_series(ratio).upto(last) ** 2)[horizons - 1]


def forecast(x: Expression, horizons: np.ndarray, history: Sequence[float], from_step: int) -> Forecast:
    """Best linear forecast of the steps after a stretch of values that begins at `from_step`.

    Without a history it is what the spec alone says of the steps from `from_step` on: its `before`, if it has one.
    Raises ValueError for a history that the spec rules out.
    """
    values = np.asarray(history, float)
    if values.ndim != 1 or not np.isfinite(values).all() or len(values) > LONGEST_HISTORY:
        raise ValueError(f"expected up to {LONGEST_HISTORY:,} finite values, one a step; got shape {values.shape}")
    past = from_step + np.arange(len(values))
    steps = from_step + len(values) - 1 + horizons
    mean, variance = x.mean(steps), x.covariance(x, steps, steps)
    if not len(values):
        return Forecast(steps, mean, variance)
    from scipy.linalg import cho_factor, cho_solve

    deviations, spread = values - x.mean(past), x.covariance(x, past, past)
    random = spread > DETERMINED * spread.max(initial=0.0)
    _refuse_impossible(past, deviations, values, random)
    past, deviations = past[random], deviations[random]
    joint = x.covariance(x, *np.meshgrid(past, past, indexing="ij"))
    reached = x.covariance(x, *np.meshgrid(steps.ravel(), past, indexing="ij"))
    try:
        weights = cho_solve(cho_factor(joint, lower=True), reached.T).T
    except np.linalg.LinAlgError:
        raise Unknown("the given values determine each other: their covariance is singular") from None
    left = variance - (weights * reached).sum(axis=1).reshape(steps.shape)
    return Forecast(steps, mean + (weights @ deviations).reshape(steps.shape), np.maximum(left, 0.0))


def _refuse_impossible(past: np.ndarray, deviations: np.ndarray, values: np.ndarray, random: np.ndarray) -> None:
    wrong = ~random & (np.abs(deviations) > 1e-9 * (1.0 + np.abs(values)))
    if wrong.any():
        at = int(np.argmax(wrong))
        raise ValueError(f"expected {values[at] - deviations[at]:.10g} at step {past[at]}, which is known; "
                         f"got {values[at]:.10g}")  # fmt: skip


def _series(ratio: Ratio) -> PowerSeries:
    return PowerSeries(ratio.numerator, tuple((-ratio.denominator[1:]).tolist()))


def _last(x: Expression, horizons: np.ndarray) -> int:
    """The farthest horizon, for a series whose forecasts have variances in closed form."""
    if x.terms or (any(source.kind == PROCESS for source in x.sources) and not _long_memory(x)):
        raise Unknown("it is no sum of linear recursions of white noise: its forecasts have no variance in closed form")
    last = int(np.max(horizons, initial=1))
    if last > FARTHEST:
        raise Unknown(f"forecasts are computed up to {FARTHEST} steps ahead")
    return last


def _long_memory(x: Expression) -> Callable[[int], np.ndarray] | None:
    """The weights on its shocks of a series that is one process with such weights, as a function of their number."""
    if len(x.linear) != 1:
        return None
    ((key, c),) = x.linear.items()
    if not isinstance(key, At) or key.delay or not hasattr(key.base.source.detail, "weights"):
        return None
    return lambda count: c * key.base.source.detail.weights(count)
