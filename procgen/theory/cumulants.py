"""Moments of order 3 and 4 of linear forms of one source that is not Gaussian.

For independent shocks with cumulant k_n, the joint cumulant of forms with weights w_i(u) on the shock of step u is k_n
times the sum over u of the product of the weights (Brillinger 1975, ch. 2). For a garch with a symmetric law, the
mean of a product of shocks is 0 unless each step occurs an even number of times.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from math import comb

import numpy as np

from procgen.theory.arma import PowerSeries, cross_covariance
from procgen.theory.covariance import covariance
from procgen.theory.linear import At, Base, Key, Linear, Sum, base_of
from procgen.theory.sources import Source, Space
from procgen.theory.unknown import Unknown

Sided = Sequence[tuple[Linear, int]]  # forms, each at the first (0) or the second (1) step
LEFT_OUT = 1e-10  # share of a base's variance beyond the weights that are added up
LONGEST = 1 << 20


def joint_cumulant(source: Source, forms: Sided, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """Joint cumulant of 3 or 4 forms of independent shocks, at steps of one shape."""
    order = len(forms)
    cumulant = source.law.skewness if order == 3 else source.law.excess_kurtosis
    if cumulant is None or not np.isfinite(cumulant):
        raise Unknown(f"{source.key} has no finite moment of order {order}")
    if cumulant == 0.0:
        return np.zeros(t.shape)
    depth = max(_depth(form) for form, _ in forms)
    sums = _over_distinct(forms, t, s, lambda steps: float(np.prod(_weights_at(forms, steps, depth), axis=0).sum()))
    return float(cumulant) * source.variance ** (order / 2) * sums


def garch_product(space: Space, source: Source, forms: Sided, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """What E of a product of 4 forms of a garch with a symmetric law exceeds the Gaussian pairings by.

    With S(u - v) = E e(u)^2 e(v)^2 the whole is the sum over u, v of S(u - v) times the three ways to put two of the
    weights at u and two at v; that counts u = v three times instead of once.
    """
    if source.path is not None:
        raise Unknown(f"fourth moments of {source.key}, which leaves from a given past")
    depth = max(_depth(form) for form, _ in forms)
    covariances = square_covariance(space, source, np.arange(1))

    def excess(steps: list[int]) -> float:
        nonlocal covariances
        a, b, c, d = _weights_at(forms, steps, depth)
        if len(covariances) < len(a):
            covariances = square_covariance(space, source, np.arange(len(a)))
        paired = sum(_quadratic(p, q, covariances) for p, q in ((a * b, c * d), (a * c, b * d), (a * d, b * c)))
        return paired - 2.0 * float((a * b * c * d).sum()) * (float(covariances[0]) + source.variance**2)

    return _over_distinct(forms, t, s, excess)


def _quadratic(p: np.ndarray, q: np.ndarray, covariances: np.ndarray) -> float:
    """Sum over u, v of p(u) q(v) c(|u - v|)."""
    from scipy.signal import correlate

    by_lag = correlate(p, q)
    middle = len(q) - 1
    return float(by_lag[middle:] @ covariances[: len(p)] + by_lag[middle - 1 :: -1] @ covariances[1 : len(q)])


def square_covariance(space: Space, source: Source, lags: np.ndarray) -> np.ndarray:
    """Cov(e(t + lag)^2, e(t)^2) of a garch that is in its stationary law."""
    process = source.detail
    if not np.isfinite(process.shock_variance):
        raise Unknown(f"infinite fourth moment of {source.key}")
    base = Base(Source("squares", "squares", process.shock_variance, owner=source), process.persistence)
    form = Linear({At(base, delay): c for delay, c in process.square_weights.items()})
    return covariance(space, form, form, lags, np.zeros_like(lags))


def _over_distinct(forms: Sided, t: np.ndarray, s: np.ndarray, value: Callable[[list[int]], float]) -> np.ndarray:
    """A function of two steps at all pairs; it is asked once a lag where only the lag matters."""
    pairs = np.stack([t.ravel(), s.ravel()], axis=1)
    if all(form.is_plain and all(isinstance(k, At) for k in form) for form, _ in forms):
        pairs = pairs - pairs.min(axis=1, keepdims=True)
    distinct, where = np.unique(pairs, axis=0, return_inverse=True)
    return np.array([value(steps) for steps in distinct.tolist()])[where.ravel()].reshape(t.shape)


def _weights_at(forms: Sided, steps: list[int], depth: int) -> np.ndarray:
    """Weights of each form on the shocks from the later step back, (forms, shocks)."""
    top = max(steps)
    if top + depth > LONGEST:
        raise Unknown(f"weights on more than {LONGEST} shocks")
    return np.stack([_weights(form, steps[side], top, top + depth + 1) for form, side in forms])


def _weights(form: Linear, step: int, top: int, count: int) -> np.ndarray:
    """Weights of the form at `step` on the shocks of steps top, top - 1, .., top - count + 1."""
    total = np.zeros(count)
    for key, c in form.items():
        base = base_of(key)
        response = PowerSeries(np.ones(1), base.phi).upto(count + step + 1)
        one = _key_weights(key, response, step, top, count)
        if base.started:
            one[top + 1 :] = 0.0
        total += c * one
    return total


def _key_weights(key: Key, response: np.ndarray, step: int, top: int, count: int) -> np.ndarray:
    if isinstance(key, At):
        return _shifted(response, step - key.delay - top, count)
    order = 0
    while isinstance(key, Sum):
        key, order = key.of, order + 1
    if not isinstance(key, At):  # a frozen value, summed `order` times
        return _times_chosen(step, order) * _shifted(response, -key.back - top, count)
    sums = [response]
    for _ in range(order):
        sums.append(np.cumsum(sums[-1]))
    total = _shifted(sums[order], step - top, count)
    for i in range(order):
        total = total - _times_chosen(step, i) * _shifted(sums[order - i], -top, count)
    return total


def _times_chosen(n: int, order: int) -> float:
    """Sums from step 1 to n of 1, `order` times over: binomial(n - 1 + order, order)."""
    return 1.0 if order == 0 else float(comb(n - 1 + order, order)) if n else 0.0


def _shifted(values: np.ndarray, first: int, count: int) -> np.ndarray:
    """values[first], values[first + 1], ..; 0 before the beginning."""
    index = np.arange(first, first + count)
    return np.where(index >= 0, values[np.clip(index, 0, len(values) - 1)], 0.0)


def _depth(form: Linear) -> int:
    """How many shocks before the oldest step matter to a form."""
    return max(_base_depth(base_of(key)) + (key.delay if isinstance(key, At) else _back(key)) for key in form)


def _back(key: Key) -> int:
    while isinstance(key, Sum):
        key = key.of
    return 0 if isinstance(key, At) else key.back


def _base_depth(base: Base) -> int:
    if base.started or not base.phi:
        return 1
    whole, count = float(cross_covariance(base.phi, base.phi)(np.array(0))), 64
    series = PowerSeries(np.ones(1), base.phi)
    while float((series.upto(count) ** 2).sum()) < (1.0 - LEFT_OUT) * whole:
        count *= 2
        if count > LONGEST:
            raise Unknown(f"{base.source.key} forgets too slowly to add up its weights")
    return count
