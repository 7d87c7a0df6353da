"""Weights of linear forms on single shocks, and covariances from them where a state space would be too large.

Sums over shocks are cut where what is left out is a share LEFT_OUT of the variance of a base; a form without
autoregressions is summed exactly.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import lru_cache
from math import comb

import numpy as np

from procgen.theory.arma import PowerSeries, cross_covariance, impulse_response
from procgen.theory.linear import At, Base, Frozen, Key, Linear, Season, Sum, base_of, below
from procgen.theory.sources import Space
from procgen.theory.unknown import Unknown

Sided = Sequence[tuple[Linear, int]]  # forms, each at the first (0) or the second (1) step
LEFT_OUT = 1e-13
LONGEST = 1 << 20
MOST_PAIRS = 4096
FEW = 16


def covariance_by_weights(space: Space, x: Linear, y: Linear, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """Cov(x(t), y(s)) as the sum over shocks of products of weights, for sources of constant variance."""
    if any(source.path is not None for source in x.sources | y.sources):
        raise Unknown("a long memory of a source whose variance changes")
    parts = []
    for a in x.sources:
        for b in y.sources:
            scale = space.covariance(a, b)
            if scale:
                parts.append((scale, ((x.only([a]), 0), (y.only([b]), 1))))
    return sum((scale * sums_of_products(forms, t, s) for scale, forms in parts), np.zeros(t.shape))


def over_distinct(forms: Sided, t: np.ndarray, s: np.ndarray, value: Callable[[list[int]], float]) -> np.ndarray:
    """A function of two steps at all pairs; it is asked once a lag where only the lag matters."""
    pairs = np.stack([t.ravel(), s.ravel()], axis=1)
    if _by_lag(forms):
        pairs = pairs - pairs.min(axis=1, keepdims=True)
    distinct, where = np.unique(pairs, axis=0, return_inverse=True)
    if len(distinct) > MOST_PAIRS:
        raise Unknown(f"it is added up shock by shock, and not for more than {MOST_PAIRS} pairs of steps at once")
    return np.array([value(steps) for steps in distinct.tolist()])[where.ravel()].reshape(t.shape)


def _by_lag(forms: Sided) -> bool:
    """Whether only the lag between two steps matters."""
    return all(form.is_plain and all(isinstance(k, At) for k in form) for form, _ in forms)


def sums_of_products(forms: Sided, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """The sum over shocks of the product of the weights of all forms, at all pairs of steps."""
    if not (_by_lag(forms) and t.size and {side for _, side in forms} == {0, 1}):
        return over_distinct(forms, t, s, lambda steps: float(np.prod(weights_at(forms, steps), axis=0).sum()))
    longest, depth = int(np.abs(t - s).max()), max(_depth(form) for form, _ in forms)
    if longest + depth > LONGEST:
        raise Unknown(f"weights on more than {LONGEST} shocks")
    made = {form: _weights(form, 0, 0, longest + depth + 1) for form, _ in forms}
    first, second = (np.prod([made[form] for form, side in forms if side == here], axis=0) for here in (0, 1))

    def value(steps: list[int]) -> float:
        """The later step has so many shocks of its own, and the ones that both have lie as much further back."""
        lag = steps[0] - steps[1]
        ahead, behind = (first, second) if lag >= 0 else (second, first)
        return float(np.dot(ahead[abs(lag) : abs(lag) + depth + 1], behind[: depth + 1]))

    return over_distinct(forms, t, s, value)


def weights_at(forms: Sided, steps: list[int]) -> np.ndarray:
    """Weights of each form on the shocks from the later step back, (forms, shocks)."""
    top, depth = max(steps), max(_depth(form) for form, _ in forms)
    if top + depth > LONGEST:
        raise Unknown(f"weights on more than {LONGEST} shocks")
    return np.stack([_weights(form, steps[side], top, top + depth + 1) for form, side in forms])


def weights_below(form: Linear, step: int, deeper: float) -> np.ndarray:
    """Weights of a form at a step on its shocks, newest first, as many times as far back as a variance needs."""
    depth = int(np.ceil(_depth(form) * deeper)) + 1
    if step + depth > LONGEST:
        raise Unknown(f"weights on more than {LONGEST} shocks")
    return _weights(form, step, step, step + depth)


def _weights(form: Linear, step: int, top: int, count: int) -> np.ndarray:
    """Weights of the form at `step` on the shocks of steps top, top - 1, .., top - count + 1."""
    total = np.zeros(count)
    delays: dict[Base, dict[int, float]] = {}
    for key, c in form.items():
        if isinstance(key, At):
            delays.setdefault(key.base, {})[key.delay] = c
        elif any(isinstance(part, Season) for part in below(key)):
            total += c * _seasonal_weights(key, step, top, count)
        else:
            response = impulse_response(base_of(key).phi).upto(count + step + 1)
            total += c * _before_step_0(base_of(key), _kept_weights(key, response, step, top, count), top)
    for base, weights in delays.items():
        if len(weights) <= FEW:  # delays that may lie far back are shifts of one response
            response = impulse_response(base.phi).upto(count + 1)
            for delay, c in weights.items():
                total += c * _before_step_0(base, _shifted(response, step - delay - top, count), top)
            continue
        numerator = np.zeros(max(weights) + 1)
        numerator[list(weights)] = list(weights.values())
        response = PowerSeries(numerator, base.phi).upto(count + 1)
        total += _before_step_0(base, _shifted(response, step - top, count), top)
    return total


def _before_step_0(base: Base, weights: np.ndarray, top: int) -> np.ndarray:
    """The same, without shocks before step 0 for a base that starts there."""
    if base.started:
        weights[top + 1 :] = 0.0
    return weights


def _seasonal_weights(key: Key, step: int, top: int, count: int) -> np.ndarray:
    """Weights of a seasonal sum, or of a running sum of one, summand by summand."""
    if isinstance(key, Season):
        summed, steps = key.of, range(step - key.delay, 0, -key.every)
    else:
        assert isinstance(key, Sum)
        summed, steps = Linear({key.of: 1.0}), range(1, step + 1)
    return sum((_weights(summed, at, top, count) for at in steps), np.zeros(count))


def _kept_weights(key: Key, response: np.ndarray, step: int, top: int, count: int) -> np.ndarray:
    """Weights of a running sum or a frozen value whose base has this response."""
    order = 0
    while isinstance(key, Sum):
        key, order = key.of, order + 1
    if isinstance(key, Frozen):  # summed `order` times
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
    ends = [part for key in form for part in below(key) if isinstance(part, At | Frozen)]
    return max(_base_depth(end.base) + (end.delay if isinstance(end, At) else end.back) for end in ends)


def _base_depth(base: Base) -> int:
    return 1 if base.started or not base.phi else _memory(base.phi, base.source.key)


@lru_cache(maxsize=256)
def _memory(phi: tuple[float, ...], name: str) -> int:
    """How many weights of a stationary autoregression hold all but a share LEFT_OUT of its variance."""
    gamma, series, count = cross_covariance(phi, phi), impulse_response(phi), 64
    left_out = max(LEFT_OUT, 10 * np.finfo(float).eps * gamma.condition)
    enough = (1.0 - left_out) * float(gamma(np.array(0)))
    while float((series.upto(count) ** 2).sum()) < enough:
        count *= 2
        if count > LONGEST:
            raise Unknown(f"{name} forgets too slowly to add up its weights")
    return count
