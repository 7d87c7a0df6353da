"""Covariance of two linear forms at any pairs of steps."""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache

import numpy as np

from procgen.theory import longhand
from procgen.theory.arma import WEAK, CrossCovariance, cross_covariance
from procgen.theory.linear import At, Base, Linear, Season, Sum, base_of
from procgen.theory.running import mixed
from procgen.theory.sources import PROCESS, Space
from procgen.theory.system import LARGEST_STATE, System, state_size, system_of
from procgen.theory.unknown import Unknown
from procgen.theory.weights import covariance_by_weights

SPARSE = 256  # so many pairs of delays are multiplied one by one
CANCELLED = 1e4  # a sum smaller than its parts by this much has lost digits that count
NOTHING_LEFT = 1e11  # and by this much, all of them
Of = Callable[[np.ndarray], np.ndarray]
Delays = tuple[Base, dict[int, float]]
KEPT = 3_000_000  # elements of the transitions of all state spaces that are kept
DIRECT = 10**8  # up to so many products a convolution is added up as such


def covariance(space: Space, x: Linear, y: Linear, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    """Cov(x(t), y(s)) for int64 arrays of steps of one shape.

    Independent groups of sources are added up. A group without running sums and given pasts needs only
    autocovariances at lags; the others go through a small joint state space. Raises Unknown with the reason.
    """
    total = np.zeros(t.shape)
    shared = space.components(x.sources | y.sources)
    for group in shared:
        left, right = x.only(group), y.only(group)
        if not left or not right:
            continue
        if any(source.kind == PROCESS for source in group):
            total += mixed(space, left, right, t, s, covariance)
        elif left.is_plain and right.is_plain:
            total += _plain(space, left, right, t, s)
        else:
            total += _joint(space, left, right, t, s)
    return total


def _joint(space: Space, x: Linear, y: Linear, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    forms = (x,) if x == y else (x, y)
    if state_size(forms) > LARGEST_STATE:
        return covariance_by_weights(space, x, y, t, s)
    return _system(space, forms).covariance(0, len(forms) - 1, t.ravel(), s.ravel()).reshape(t.shape)


def _system(space: Space, forms: tuple[Linear, ...]) -> System:
    """The state space of some forms, kept with those asked before it as long as they are not large together."""
    if space.last != forms:  # many questions in a row are of one series; only its powers are kept
        for system in space.systems.values():
            system.rest()
        space.last = forms
    if forms not in space.systems:
        made = system_of(space, forms)
        while space.systems and sum(len(each.transition) ** 2 for each in (made, *space.systems.values())) > KEPT:
            del space.systems[next(iter(space.systems))]
        space.systems[forms] = made
    return space.systems[forms]


def condition(form: Linear) -> float:
    """The largest condition number met in the autocovariances of the bases of a form (1 for plain noise)."""
    phis = {base_of(key).phi for key in form if not base_of(key).started}
    return max((cross_covariance(phi, phi).condition for phi in phis), default=1.0)


def _plain(space: Space, x: Linear, y: Linear, t: np.ndarray, s: np.ndarray) -> np.ndarray:
    total = np.zeros(t.shape)
    for a, (delays_a, frozen_a) in by_base(x).items():
        for b, (delays_b, frozen_b) in by_base(y).items():
            scale = space.covariance(a.source, b.source)
            if scale == 0.0:
                continue
            gamma = cross_covariance(a.phi, b.phi)
            by, weights = _shifts_between(x, a, y, b)
            total += scale * _kept_digits(gamma, (a, delays_a), (b, delays_b), t - s, by, weights)
            for back, weight in frozen_b.items():
                for delay, c in delays_a.items():
                    total += (scale * weight * c) * gamma(t - delay + back)
            for back, weight in frozen_a.items():
                for delay, c in delays_b.items():
                    total += (scale * weight * c) * gamma(delay - s - back)
                for other, c in frozen_b.items():
                    total += scale * weight * c * float(gamma(np.array(other - back)))
    return total


def _kept_digits(
    gamma: CrossCovariance, x: Delays, y: Delays, gaps: np.ndarray, by: np.ndarray, weights: np.ndarray
) -> np.ndarray:
    """The same sum, in whole numbers where it cancels near a unit root."""
    found = _summed(gamma, gaps, by, weights)
    if gamma.condition <= WEAK or len(by) == 1 or not found.size:
        return found
    size = float(_summed(lambda lags: np.abs(gamma(lags)), gaps, by, np.abs(weights)).max())
    left = float(np.abs(found).max())
    if size <= CANCELLED * left:
        return found
    (a, delays), (b, others) = x, y
    distinct, which = np.unique(gaps, return_inverse=True)
    if not longhand.can_sum(a.phi, b.phi, len(delays) * len(others), distinct, int(np.abs(by).max())):
        if size > NOTHING_LEFT * left:
            raise Unknown(f"its digits cancel near a unit root (condition number {gamma.condition:.1g})")
        return found
    return longhand.summed(a.phi, b.phi, delays, others, distinct)[which].reshape(gaps.shape)


def _summed(gamma: Of, gaps: np.ndarray, by: np.ndarray, weights: np.ndarray) -> np.ndarray:
    """The sum over shifts `by` of their weights times Gamma(gap + shift)."""
    if len(by) <= SPARSE:
        total = np.zeros(gaps.shape)
        for shift, weight in zip(by.tolist(), weights.tolist(), strict=True):
            total += weight * gamma(gaps + shift)
        return total
    distinct, which = np.unique(gaps, return_inverse=True)
    return np.array([weights @ gamma(gap + by) for gap in distinct])[which].reshape(gaps.shape)


@lru_cache(maxsize=64)
def _shifts_between(x: Linear, a: Base, y: Linear, b: Base) -> tuple[np.ndarray, np.ndarray]:
    return _shifts(by_base(x)[a][0], by_base(y)[b][0])


def _shifts(a: dict[int, float], b: dict[int, float]) -> tuple[np.ndarray, np.ndarray]:
    """Shifts and weights of Gamma(h + shift) in the covariance of two sums of delays: a correlation of both."""
    if len(a) * len(b) <= SPARSE:  # perhaps far apart: each with each
        pairs: dict[int, float] = {}
        for d, c in a.items():
            for e, k in b.items():
                pairs[e - d] = pairs.get(e - d, 0.0) + c * k
        return np.array(list(pairs), np.int64), np.array(list(pairs.values()))
    low_a, low_b = min(a), min(b)
    first, second = np.zeros(max(a) - low_a + 1), np.zeros(max(b) - low_b + 1)
    first[np.array(list(a)) - low_a] = list(a.values())
    second[np.array(list(b)) - low_b] = list(b.values())
    weights = convolved(second, first[::-1])  # index k is the shift k - (len(first) - 1) + low_b - low_a
    (at,) = np.nonzero(weights)
    return at + (low_b - low_a - (len(first) - 1)), weights[at]


def convolved(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    """The product of two polynomials; by Fourier transforms where they are long."""
    if len(a) * len(b) <= DIRECT:
        return np.convolve(a, b)
    from scipy.signal import fftconvolve

    return fftconvolve(a, b)


@lru_cache(maxsize=64)
def by_base(form: Linear) -> dict[Base, tuple[dict[int, float], dict[int, float]]]:
    """For each base, the coefficients by delay and by frozen lag."""
    parts: dict[Base, tuple[dict[int, float], dict[int, float]]] = {}
    for key, c in form.items():
        assert not isinstance(key, Sum | Season)
        delays, frozen = parts.setdefault(key.base, ({}, {}))
        if isinstance(key, At):
            delays[key.delay] = c
        else:
            frozen[key.back] = c
    return parts
