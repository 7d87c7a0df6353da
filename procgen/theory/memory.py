"""How long a series remembers: partial autocorrelations, half-life, and what a mean of many steps is worth."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from procgen.theory.expression import Expression
from procgen.theory.linear import At
from procgen.theory.spectrum import FEWEST, is_filtered, long_run_variance, longest, remembered
from procgen.theory.unknown import Unknown

LONGEST_PARTIAL = 20_000  # lags: the recursion takes the square of their number
LONGEST_SEARCH = 1 << 15  # lags among which a half-life is looked for where they do not die out
HALF = 0.5 + 1e-9  # what is one half but for rounding does not exceed it
LOST = 1e10  # magnification of rounding errors up to which partial autocorrelations are given


def partial_autocorrelation(x: Expression, lags: np.ndarray) -> np.ndarray:
    """Correlation of x(t + lag) and x(t) given all values between; 1 at lag 0."""
    last, known = int(np.max(lags, initial=0)), _of_autoregression(x)
    if known is not None:
        return np.array([1.0, *known, 0.0])[np.minimum(lags, len(known) + 1)]
    if last > LONGEST_PARTIAL:
        raise Unknown(f"partial autocorrelations are computed up to lag {LONGEST_PARTIAL}")
    steps = np.arange(last + 1)
    return _durbin_levinson(x.covariance(x, steps, np.zeros_like(steps)))[lags]


def _of_autoregression(x: Expression) -> list[float] | None:
    """The partial autocorrelations of a series that is one autoregression, by step-down; None for any other."""
    from procgen.terms.start import partial_autocorrelations

    if not is_filtered(x) or len(x.linear) != 1:
        return None
    (key,) = x.linear
    return partial_autocorrelations(key.base.phi) if isinstance(key, At) else None


def _durbin_levinson(gamma: np.ndarray) -> np.ndarray:
    """Partial autocorrelations from autocovariances (Durbin 1960, Rev. Int. Stat. Inst. 28, 233-244).

    Rounding grows at most by the product of (1 + abs(k)) / (1 - abs(k)) (Cybenko 1980, SIAM J. Sci. Stat. Comput. 1,
    303-319).
    """
    if gamma[0] <= 0.0:
        raise Unknown("the variance is 0")
    partials, predictor, left, growth = [1.0], np.zeros(0), float(gamma[0]), 1.0
    for n in range(1, len(gamma)):
        k = float(gamma[n] - predictor @ gamma[n - 1 : 0 : -1]) / left
        growth *= (1.0 + abs(k)) / max(1.0 - abs(k), 1e-300)
        if growth > LOST:
            raise Unknown(f"from lag {n} on it is known from its past but for rounding: digits cancel")
        predictor = np.concatenate([predictor - k * predictor[::-1], [k]])
        left *= 1.0 - k * k
        partials.append(k)
    return np.array(partials)


def half_life(x: Expression) -> int:
    """The first lag from which on no autocorrelation exceeds 1/2 in size; looked for up to lag LONGEST_SEARCH."""
    try:
        gamma = remembered(x)
    except Unknown:
        lags = np.arange(LONGEST_SEARCH + 1)
        gamma = x.covariance(x, lags, np.zeros_like(lags))
        _refuse_unsettled(gamma)
    return _half_life(gamma)


def searched_half_life(autocovariance: Callable[[np.ndarray], np.ndarray]) -> int:
    """The same of a function of int64 lags, in as few of its values as it needs."""
    count = FEWEST
    while True:
        gamma = autocovariance(np.arange(count + 1))
        try:
            _refuse_unsettled(gamma)
            return _half_life(gamma)
        except Unknown:
            if count >= LONGEST_SEARCH:
                raise
        count *= 8


def _half_life(gamma: np.ndarray) -> int:
    if gamma[0] <= 0.0:
        raise Unknown("the variance is 0")
    return int(np.flatnonzero(np.abs(gamma) > HALF * gamma[0])[-1]) + 1


def _refuse_unsettled(gamma: np.ndarray) -> None:
    """Lags that have not died out tell a half-life where the last half of them stays below 1/2."""
    if not np.isfinite(gamma).all():
        raise OverflowError
    late = np.abs(gamma[len(gamma) // 2 :])
    if late.max() > HALF * abs(gamma[0]):
        at = len(gamma) // 2 + int(np.flatnonzero(late > HALF * abs(gamma[0]))[-1])
        left = gamma[at] / gamma[0]
        raise Unknown(f"looked for up to lag {len(gamma) - 1}; at lag {at} the autocorrelation is still {left:.3g}")


def variance_of_mean(x: Expression, counts: np.ndarray, steady: bool) -> np.ndarray:
    """Variance of the mean of the steps 0 .. n - 1.

    For a series whose autocovariances depend on the lag alone it is 1/n times the sum over abs(h) < n of
    (1 - abs(h)/n) gamma(h) (Brockwell & Davis 1991, 7.1); for another, the variance of its running sum.
    """
    if steady:
        return _by_autocovariances(x, counts)
    total = x.lag(1).integrate()
    at = counts.ravel()
    return np.maximum(total.covariance(total, at, at).reshape(counts.shape), 0.0) / counts.astype(float) ** 2


def _by_autocovariances(x: Expression, counts: np.ndarray) -> np.ndarray:
    gamma, whole = _autocovariances(x, int(np.max(counts, initial=1)))
    sums, moments = np.cumsum(gamma[1:]), np.cumsum(np.arange(1, len(gamma)) * gamma[1:])
    n = counts.astype(float)
    ends = np.minimum(counts, len(gamma)) - 1
    at = [np.concatenate([[0.0], part])[ends] for part in (sums, moments)]
    total = n * (gamma[0] + 2.0 * at[0]) - 2.0 * at[1]
    if whole:  # the sum of all, which may be 0 in closed form, keeps digits that adding up loses
        total = np.where(counts > len(gamma), n * long_run_variance(x) - 2.0 * moments[-1], total)
    return np.maximum(total, 0.0) / n**2


def _autocovariances(x: Expression, count: int) -> tuple[np.ndarray, bool]:
    """The first `count` from lag 0 on, or those that have not died out; and whether these are all."""
    if count > FEWEST:
        try:
            return remembered(x), True
        except Unknown:
            if count > longest(x):
                raise
    lags = np.arange(count)
    return x.covariance(x, lags, np.zeros_like(lags)), False
