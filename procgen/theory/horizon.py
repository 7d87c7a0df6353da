"""How far ahead a series can be told: variances of forecast errors, and forecasts from given values.

A linear series is a sum of ratios N(B)/D(B) of its white sources. Given the past shocks of every part, the error h
steps ahead has variance

    sum over j < h, over sources a and b, of cov(a, b) psi_a(j) psi_b(j)       (Box & Jenkins 1970, ch. 5).

Given its own past values alone, it is sigma^2 times the sum of psi(j)^2, with psi and sigma^2 of the series' Wold
form: theta and sigma^2 factor the spectral density of the joint numerator (`theory.wold`). That is what a Kalman
filter settles to, whatever it started from (Harvey 1989, ch. 3); for components of a system it is computed as such
(`theory.filtering`). Where a series is no linear function of shocks its spectral density is added up from its
autocovariances. For Gaussian series these are the best forecasts there are, for others the best linear ones.

A series that leaves from a recorded past has steps 0, 1, .. ahead of it: its forecast error there is what its spec
leaves to chance, its variance at those steps.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import reduce

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.arma import PowerSeries
from procgen.theory.distributed import Distributed
from procgen.theory.expression import Expression
from procgen.theory.filtering import error_variance
from procgen.theory.linear import At
from procgen.theory.recursion import recursed
from procgen.theory.sources import PROCESS, Source
from procgen.theory.spectrum import remembered
from procgen.theory.system import system_of
from procgen.theory.unknown import Unknown
from procgen.theory.verdict import judge
from procgen.theory.wold import MOST_POINTS, Ratio, innovations, ratios, wold

FARTHEST = 1_000_000  # steps ahead
LONGEST_HISTORY = 2_000  # values: the work is their number cubed
FLATTEST = 1e-6  # share of its peak that a spectral density must keep everywhere
TOLERANCE = 1e-8  # of a variance from autocovariances
DETERMINED = 1e-12  # share of a variance that counts as nothing left


@dataclass(frozen=True)
class Forecast:
    """Mean and variance of a series at `steps`, given values before them; of the shape of the horizons asked for."""

    steps: np.ndarray
    mean: np.ndarray
    variance: np.ndarray

    def __post_init__(self) -> None:
        for name in ("steps", "mean", "variance"):  # one horizon gives numbers, and no arrays without an axis
            object.__setattr__(self, name, np.asarray(getattr(self, name))[()])


def variance_given_parts(x: Expression, horizons: np.ndarray) -> np.ndarray:
    """Variance of the forecast error at horizons >= 1, all past shocks of every source given."""
    last, (x, through) = _last(horizons), _within(x)
    own, bent = _long_memory(x), _bent(x)
    if own:
        return np.cumsum(through(own(last)) ** 2)[horizons - 1]
    if bent:
        raise Unknown(bent)
    if _has_components(x):
        return error_variance(system_of(x.space, (x.linear,)), horizons, "parts")
    psi: dict[Source, np.ndarray] = {}
    for source, ratio in ratios(x.linear):
        psi[source] = psi.get(source, 0.0) + through(_series(ratio).upto(last))
    total = np.zeros(last)
    for a, left in psi.items():
        for b, right in psi.items():
            total = total + x.space.covariance(a, b) * left * right
    return np.cumsum(total)[horizons - 1]


def variance_given_values(x: Expression, horizons: np.ndarray) -> np.ndarray:
    """Variance of the error of the best linear forecast at horizons >= 1, all past values of the series given."""
    last, whole, (x, through) = _last(horizons), x, _within(x)
    own, bent = _long_memory(x), _bent(x)
    if own:
        return np.cumsum(through(own(last)) ** 2)[horizons - 1]
    if bent:
        x = whole
    if bent and not judge(x).covariance_stationary:
        raise Unknown(f"{bent}, and its covariances depend on the step: so does the error of a forecast")
    if bent:
        return _by_spectrum(x, last)[horizons - 1]
    if not x.linear:
        return np.zeros(horizons.shape)
    if _has_components(x):
        return error_variance(system_of(x.space, (x.linear,)), horizons, "values")
    variance, ratio = wold(x.space, x.linear)
    return variance * np.cumsum(through(_series(ratio).upto(last)) ** 2)[horizons - 1]


def variance_given_record(x: Expression, horizons: np.ndarray) -> np.ndarray:
    """Variance of the forecast error at horizons >= 1 after the record that a series leaves from: at steps h - 1."""
    _last(horizons)
    return np.maximum(x.covariance(x, horizons - 1, horizons - 1), 0.0)


def _by_spectrum(x: Expression, last: int) -> np.ndarray:
    """The same at horizons 1 .. last from autocovariances alone, by the logarithm of their spectral density.

    Kolmogorov (1941).
    """
    gamma = remembered(x)
    if gamma[0] <= 0.0:
        return np.zeros(last)
    points, before = 1 << max(12, (4 * max(len(gamma), last)).bit_length()), None
    while points <= MOST_POINTS:
        density = 2.0 * np.fft.rfft(gamma, points).real - gamma[0]
        if density.min() < FLATTEST * density.max():
            raise Unknown("its spectral density comes too near to 0 for its logarithm to be added up")
        found = innovations(np.fft.irfft(np.log(density)), last)
        if before is not None and np.abs(found - before).max() <= 1e-3 * TOLERANCE * np.abs(found).max():
            return float(found[0]) * np.cumsum(found[1:] ** 2)[:last]
        before, points = found, 2 * points
    raise Unknown("its spectral density is too steep for its logarithm to be added up")


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


def _within(x: Expression) -> tuple[Expression, Callable[[np.ndarray], np.ndarray]]:
    """The body of a series that is a distributed lag of one, and what the lag makes of weights; itself otherwise.

    The lag has no root inside the circle: it takes nothing from what values tell, whatever its body is.
    """
    c, filters = 1.0, []
    while len(x.linear) == 1 and not x.terms:
        ((key, factor),) = x.linear.items()
        detail = key.base.source.detail if isinstance(key, At) and not key.delay else None
        if not isinstance(detail, Distributed) or _has_components(detail.body):
            break
        x, c = detail.body, c * factor
        filters.append(tuple(detail.phi))
    return x, lambda psi: c * reduce(lambda weights, phi: recursed(phi, weights), filters, psi)


def _series(ratio: Ratio) -> PowerSeries:
    return PowerSeries(ratio.numerator, tuple((-ratio.denominator[1:]).tolist()))


def _last(horizons: np.ndarray) -> int:
    """The farthest horizon."""
    last = int(np.max(horizons, initial=1))
    if last > FARTHEST:
        raise Unknown(f"forecasts are computed up to {FARTHEST} steps ahead")
    return last


def _bent(x: Expression) -> str:
    """Why a series is no linear function of shocks, or nothing."""
    if x.terms:
        return "what is to come depends on its parts through a product or an exponential"
    names = dict.fromkeys(s.detail.name for s in x.sources if s.kind == PROCESS and not _is_component(s))
    return f"what is to come depends on {', '.join(names)}, whose forecasts are not worked out" if names else ""


def _is_component(source: Source) -> bool:
    return getattr(source.detail, "system", None) is not None


def _has_components(x: Expression) -> bool:
    """Whether a component of a system of several series is among the sources."""
    return any(map(_is_component, x.sources))


def _long_memory(x: Expression) -> Callable[[int], np.ndarray] | None:
    """The weights on its shocks of a series that is one process with such weights, as a function of their number."""
    if len(x.linear) != 1:
        return None
    ((key, c),) = x.linear.items()
    if not isinstance(key, At) or key.delay or not hasattr(key.base.source.detail, "weights"):
        return None
    return lambda count: c * key.base.source.detail.weights(count)
