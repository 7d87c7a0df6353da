"""Moments of order 3 and 4 of linear forms of one source that is not Gaussian.

For independent shocks with cumulant k_n, the joint cumulant of forms with weights w_i(u) on the shock of step u is k_n
times the sum over u of the product of the weights (Brillinger 1975, ch. 2). For a garch whose signs are free, the
mean of a product of shocks is 0 unless each step occurs an even number of times.
"""

from __future__ import annotations

import numpy as np

from procgen.theory.covariance import convolved, covariance
from procgen.theory.garch import Garch
from procgen.theory.linear import At, Base, Linear
from procgen.theory.sources import Source, Space
from procgen.theory.transient import square_products
from procgen.theory.unknown import Unknown
from procgen.theory.weights import Sided, over_distinct, sums_of_products, weights_at

SPARSE = 4096  # so many pairs of shocks are added up one by one


def joint_cumulant(source: Source, forms: Sided, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """Joint cumulant of 3 or 4 forms of independent shocks, at steps of one shape."""
    order = len(forms)
    cumulant = source.law.skewness if order == 3 else source.law.excess_kurtosis
    if cumulant is None or not np.isfinite(cumulant):
        raise Unknown(f"{source.key} has no finite moment of order {order}")
    if cumulant == 0.0:
        return np.zeros(t.shape)
    delays = [_single_delay(form) for form, _ in forms]
    if None not in delays:
        steps = [(s if side else t) - delay for delay, (_, side) in zip(delays, forms, strict=True)]
        same = np.all([step == steps[0] for step in steps[1:]], axis=0)
        return float(cumulant) * source.variance ** (order / 2) * _scale(forms) * same
    return float(cumulant) * source.variance ** (order / 2) * sums_of_products(forms, t, s)


def garch_product(space: Space, source: Source, forms: Sided, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """What E of a product of 4 forms of a garch exceeds the Gaussian pairings by.

    With S(u - v) = E e(u)^2 e(v)^2 the whole is the sum over u, v of S(u - v) times the three ways to put two of the
    weights at u and two at v; that counts u = v three times instead of once. Where signs matter this holds for forms of
    one shock each, at two steps.
    """
    if source.path is not None:
        return _started_product(source, forms, t, s)
    if (single := _squares_of_single_shocks(space, source, forms, t, s)) is not None:
        return single
    covariances = square_covariance(space, source, np.arange(1))

    def excess(steps: list[int]) -> float:
        nonlocal covariances
        weights = a, b, c, d = weights_at(forms, steps)
        _refuse_signs(source, weights)
        if len(covariances) < len(a):
            covariances = square_covariance(space, source, np.arange(len(a)))
        paired = sum(_quadratic(p, q, covariances) for p, q in ((a * b, c * d), (a * c, b * d), (a * d, b * c)))
        return paired - 2.0 * float((a * b * c * d).sum()) * (float(covariances[0]) + source.variance**2)

    return over_distinct(forms, t, s, excess)


def _squares_of_single_shocks(
    space: Space, source: Source, forms: Sided, t: np.ndarray, s: np.ndarray
) -> np.ndarray | None:
    """The same at once where two forms are of one shock u and two of another one, v; None where they are not.

    It is Cov(e(u)^2, e(v)^2), less the 2 Var(e)^2 that two more pairings have where u = v.
    """
    delays = [_single_delay(form) for form, _ in forms]
    sides = [{delay for delay, (_, side) in zip(delays, forms, strict=True) if side == here} for here in (0, 1)]
    if None in delays or any(len(each) != 1 for each in sides) or sum(side for _, side in forms) != 2:
        return None
    (first,), (second,) = sides
    lags = np.abs((t - first) - (s - second))
    beyond = square_covariance(space, source, lags.ravel()).reshape(lags.shape)
    return _scale(forms) * (beyond - 2.0 * source.variance**2 * (lags == 0))


def _single_delay(form: Linear) -> int | None:
    """How many steps ago the one shock was that a form is of; None where it is of more."""
    (key, *others) = form
    if others or not isinstance(key, At) or key.base.phi or key.base.started:
        return None
    return key.delay


def _scale(forms: Sided) -> float:
    """Product of the weights of forms of one shock each."""
    return float(np.prod([weight for form, _ in forms for weight in form.values()]))


def _started_product(source: Source, forms: Sided, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """The same where the variance leaves from a given one: S(u, v) depends on both steps."""

    path = source.path
    assert path is not None

    def excess(steps: list[int]) -> float:
        weights = weights_at(forms, steps)[:, max(steps) :: -1]  # on the shocks of steps 0, 1, ..
        _refuse_signs(source, weights)
        (used,) = np.nonzero(weights.any(axis=0))
        if not len(used):
            return 0.0
        a, b, c, d = weights[:, used]
        products, means = square_products(source.detail, used), path(used)
        beyond = products - np.outer(means, means)
        paired = sum(float(p @ beyond @ q) for p, q in ((a * b, c * d), (a * c, b * d), (a * d, b * c)))
        return paired - 2.0 * float((a * b * c * d) @ np.diag(products))

    return over_distinct(forms, t, s, excess)


def _refuse_signs(source: Source, weights: np.ndarray) -> None:
    if not source.symmetric and not _in_pairs(weights):
        raise Unknown(f"signs of {source.key} move its variance: an odd product of its shocks has a mean")


def _in_pairs(weights: np.ndarray) -> bool:
    """Whether each of the four forms is of one shock, and these are two and two the same."""
    if (np.count_nonzero(weights, axis=1) > 1).any():
        return False
    at = np.sort(np.argmax(weights != 0.0, axis=1))
    return bool(at[0] == at[1] and at[2] == at[3])


def _quadratic(p: np.ndarray, q: np.ndarray, covariances: np.ndarray) -> float:
    """Sum over u, v of p(u) q(v) c(|u - v|)."""
    (u,), (v,) = np.nonzero(p), np.nonzero(q)
    if len(u) * len(v) <= SPARSE:  # few shocks, perhaps far apart
        return float(p[u] @ covariances[np.abs(u[:, None] - v[None, :])] @ q[v])
    by_lag = convolved(p, q[::-1])
    middle = len(q) - 1
    return float(by_lag[middle:] @ covariances[: len(p)] + by_lag[middle - 1 :: -1] @ covariances[1 : len(q)])


def square_covariance(space: Space, source: Source, lags: np.ndarray) -> np.ndarray:
    """Cov(e(t + lag)^2, e(t)^2) of a source with a moving variance in its stationary law."""
    process = source.detail
    if not isinstance(process, Garch):
        return process.square_covariance(lags)
    if not np.isfinite(process.shock_variance):
        raise Unknown(f"infinite fourth moment of {source.key}")
    base = Base(Source("squares", "squares", process.shock_variance, owner=source), process.persistence)
    form = Linear({At(base, delay): c for delay, c in process.square_weights.items()})
    return covariance(space, form, form, lags, np.zeros_like(lags))
