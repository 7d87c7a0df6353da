"""Whole numbers from one uniform: Poisson and negative binomial quantiles whose means move, and tables of fixed laws.

The count of a uniform u is the least k with P(X <= k) >= u, so counts rise with u. Small counts are found by adding up
chances from 0; large ones from the area beyond a close guess, taken on its own side: Temme's (1979) uniform expansion
for Poisson counts, the continued fraction of the incomplete beta function for negative binomial ones (Abramowitz &
Stegun 1964, 26.5.8). Areas are within 1e-9 of themselves down to the last uniform, for means up to 1e5.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from procgen.chance.blocks import BLOCK
from procgen.chance.elementary import exp, log, log1p
from procgen.chance.gamma import STIRLING, log_gamma
from procgen.chance.kernel import is_compiling, machine
from procgen.chance.normal import normal_quantile, normal_tail

Array = np.ndarray
Ratio = Callable[[Any, Array], Array]
LARGEST = 2.0**50  # a mean beyond is no count that float64 can hold
_SMALL = 26.0  # from this mean on a Poisson count is found from its areas
_CLIMB = 64  # counts that are reached by adding up; the rest is found from areas
LEFT = -1.0  # in place of a count that is not found by compiled adding up
_ABREAST = 512  # counts that are added up side by side there
_STEPS = np.arange(1.0, _CLIMB + 1.0)
_RARE = 1e-5  # an upper area below is added up by itself, for what is left of 1 has no digits there
_FOUND = 1e-15
_TINY = 1e-300
_NEWTON = 60
_LARGE = 16.0
_MOST_TERMS = 20_000
_HALF_LOG_2_PI = 0.9189385332046728
_TWO_PI = 6.283185307179586
_RATIO = (  # eta / (x/a - 1) in powers of eta, where eta^2 / 2 = x/a - 1 - log(x/a); from 22 to 0
    -1.392388722418162e-13,
    3.371763262400985e-13,
    1.1004392031956135e-13,
    -5.0276692801141755e-12,
    2.4361948020667415e-11,
    -5.830772132550426e-11,
    -2.5514193994946248e-11,
    9.14769958223679e-10,
    -4.382036018453353e-09,
    1.0261809784240309e-08,
    6.707853543401498e-09,
    -1.7665952736826078e-07,
    8.296711340953087e-07,
    -1.85406221071516e-06,
    -2.185448510679992e-06,
    3.919263178522438e-05,
    -0.0001787551440329218,
    0.0003527336860670194,
    0.0011574074074074073,
    -0.014814814814814815,
    0.08333333333333333,
    -0.3333333333333333,
    1.0,
)


def poisson(u: Array, mean: Array) -> Array:
    """Poisson counts of uniforms in (0, 1), elementwise; nan where the mean is not from 0 to 2**50."""
    return _by_blocks(_poisson, u, mean)


def negative_binomial(u: Array, mean: Array, size: float) -> Array:
    """Negative binomial counts with variance mean + mean^2 / size, elementwise; nan as for `poisson`."""
    return _by_blocks(lambda u, m, times: _negative_binomial(u, m, times, size), u, mean)


def _by_blocks(function: Callable[[Array, Array, int], Array], u: Array, mean: Array) -> Array:
    """function(uniforms, means, times) block by block; each mean is that of so many uniforms in a row."""
    u, mean = np.asarray(u), np.asarray(mean)
    times = u.shape[-1] if u.ndim == mean.ndim == 2 and mean.shape == (len(u), 1) else 1
    if not 0 < times <= BLOCK:
        times = 1
    if times == 1 and u.shape != mean.shape:
        u, mean = np.broadcast_arrays(u, mean)
    out = np.empty(u.shape)
    flat, uniforms, means = out.reshape(-1), u.reshape(-1), mean.reshape(-1)
    at_once = (max(BLOCK, u.size) if is_compiling() else BLOCK) // times  # tiles that are compiled stay in cache
    for start in range(0, len(means), at_once):
        m, part = means[start : start + at_once], slice(start * times, (start + at_once) * times)
        if m.min() >= 0.0 and m.max() <= LARGEST:  # as a rule; not where one is nan
            flat[part] = function(uniforms[part], m, times)
            continue
        sound = (m >= 0.0) & (m <= LARGEST)
        counts = function(uniforms[part], np.where(sound, m, 0.0), times)
        flat[part] = np.where(np.repeat(sound, times), counts, np.nan)
    return out


def _poisson(u: Array, mean: Array, times: int) -> Array:
    def summed(u: Array, mean: Array, times: int) -> tuple[Array, Array]:
        if is_compiling():
            return _summed("poisson", u, *_repeated(times, mean))
        nothing, m = _repeated(times, exp(-mean), mean)
        return _climbed(u, nothing, lambda k, i: m[i] / k)

    return _found(u, mean, times, summed, _poisson_by_area)


def _repeated(times: int, *parts: Array) -> tuple[Array, ...]:
    return parts if times == 1 else tuple([np.repeat(part, times) for part in parts])


def _found(
    u: Array,
    mean: Array,
    times: int,
    summed: Callable[[Array, Array, int], tuple[Array, Array]],
    by_area: Callable[[Array, Array], Array],
) -> Array:
    """Counts by adding up chances where the mean is small, and by areas elsewhere and where that was not enough."""
    if mean.max() < _SMALL:
        out, at = summed(u, mean, times)
    else:
        (mean,), times = _repeated(times, mean), 1
        out, small = np.empty(u.shape), mean < _SMALL
        at = np.flatnonzero(small)
        out[at], left = summed(u[at], mean[at], 1)
        at = np.concatenate([at[left], np.flatnonzero(~small)])
    if len(at):
        out[at] = by_area(u[at], mean[at // times])
    return out


def _summed(name: str, u: Array, *of: Any) -> tuple[Array, Array]:
    """`_climbed` by machine code, as far as that goes; `of` are the numbers that it is of."""
    if not u.size:
        return u, np.empty(0, np.int64)
    out = np.empty(u.shape)
    work = [*(np.empty(_ABREAST) for _ in range(5)), *(np.empty(_ABREAST, np.int64) for _ in range(2))]
    limits = _CLIMB, 1.0 - _RARE, 1.0 - 10.0 * _RARE, _FOUND, _MOST_TERMS
    machine("compiled_counts", name)(u, *of, *limits, *work, out)
    return out, np.flatnonzero(out == LEFT) if out.min() == LEFT else np.empty(0, np.int64)


def _climbed(u: Array, nothing: Array, ratio: Ratio) -> tuple[Array, Array]:
    """Counts by adding up chances from 0, and the places of those beyond reach; ratio(k, places) is p(k) / p(k - 1)."""
    out, at, wanted = np.empty(u.shape), np.arange(len(u)), u
    chance, below = nothing, nothing
    for k in range(_CLIMB):
        out[at] = k
        more = wanted > below
        rare = np.flatnonzero((wanted > 1.0 - _RARE) & (below > 1.0 - 10.0 * _RARE))
        if len(rare):
            more[rare] = _above(float(k), chance[rare], at[rare], ratio) > 1.0 - wanted[rare]
        at, wanted = at[more], wanted[more]
        if not len(at):
            break
        chance = chance[more] * ratio(k + 1.0, at)
        below = below[more] + chance
    return out, at


def _above(k: Any, chance: Array, at: Array, ratio: Ratio) -> Array:
    """The chance of more than k, from the chance of k."""
    total, term, adding = np.zeros(len(at)), chance, np.full(len(at), True)
    for _ in range(_MOST_TERMS):
        k = k + 1.0
        step = ratio(k, at)
        term = term * step
        total = np.where(adding, total + term, total)  # each ends by itself: what stands beside it moves no bit
        adding &= term > _FOUND * total * (1.0 - np.minimum(step, 1.0))
        if not adding.any():
            break
    return total


def _poisson_by_area(u: Array, mean: Array) -> Array:
    """From Cornish & Fisher's (1938) guess, and the area beyond it."""
    z = normal_quantile(u)
    root = np.sqrt(mean)
    guess = mean + root * z + (z * z - 1.0) / 6.0 + z * (1.0 - z * z) / (72.0 * np.maximum(root, 1.0))
    k = np.maximum(np.rint(guess - 0.5), 0.0)
    lower, upper, chance = _poisson_areas(k, mean)
    return _walked(k, u, lower, upper, chance, lambda k: mean / k)


def _walked(k: Array, u: Array, lower: Array, upper: Array, chance: Array, ratio: Callable[[Array], Array]) -> Array:
    """The least counts that are enough, near k, from P(X <= k), P(X > k) and P(X = k)."""
    low = u < 0.5
    wanted = np.where(low, u, 1.0 - u)
    area = np.where(low, lower, upper)
    sign = np.where(low, 1.0, -1.0)  # what the area gains with one count more, in chances
    moving = np.full(k.shape, True)
    for _ in range(_MOST_TERMS):  # up while it is not enough
        moving = moving & np.where(low, area < wanted, area > wanted)
        if not moving.any():
            break
        k = np.where(moving, k + 1.0, k)
        chance = np.where(moving, chance * ratio(np.maximum(k, 1.0)), chance)
        area = np.where(moving, area + sign * chance, area)
    moving = k > 0.0
    for _ in range(_MOST_TERMS):  # down while one less is enough, too
        before = area - sign * chance
        moving = moving & (k > 0.0) & np.where(low, before >= wanted, before <= wanted)
        if not moving.any():
            break
        area = np.where(moving, before, area)
        chance = np.where(moving, chance / ratio(np.maximum(k, 1.0)), chance)
        k = np.where(moving, k - 1.0, k)
    return k


def _poisson_areas(k: Array, mean: Array) -> tuple[Array, Array, Array]:
    """P(X <= k), P(X > k) and P(X = k), the areas by Temme's expansion with a = k + 1.

    Its coefficients come by the recursion of Gil, Segura & Temme (2012), SIAM J. Sci. Comput. 34, section 2.4.
    """
    a = k + 1.0
    gap = (mean - a) / a
    half = np.maximum(gap - log1p(gap), 0.0)  # eta^2 / 2
    eta = np.copysign(np.sqrt(2.0 * half), gap)
    total, now, later = np.zeros(a.shape), np.zeros(a.shape), np.zeros(a.shape)
    for n, ratio in zip(range(len(_RATIO) - 1, 0, -1), _RATIO, strict=False):
        now, later = ratio + (n + 1.0) * later / a, now  # b(n - 1) and b(n)
        total = total * eta + now
    height = exp(-a * half) / ((1.0 + later / a) * np.sqrt(_TWO_PI * a))  # e^-x x^a / Gamma(a + 1)
    rest, beyond = height * total, normal_tail(np.sqrt(2.0 * half * a))
    above, chance = eta > 0.0, height * a / mean
    lower = np.where(above, beyond, 1.0 - beyond) + rest
    upper = np.where(above, 1.0 - beyond, beyond) - rest
    far = np.flatnonzero(half > 0.5)  # there the series is of no use, and plain sums are short
    if len(far):
        k, m = k[far], mean[far]
        chance[far] = exp(k * log(m) - m - _log_gamma(k + 1.0))
        up = m > k
        lower[far] = np.where(up, _below(k, chance[far], m), 1.0)
        upper[far] = np.where(up, 1.0, _above(k, chance[far], m, lambda k, m: m / k))
    return lower, upper, chance


def _below(k: Array, chance: Array, mean: Array) -> Array:
    """P(X <= k) of Poisson counts from P(X = k), for k far below the mean."""
    total, term = chance, chance
    while (adding := term > _FOUND * total).any():
        term = term * k / mean
        k = np.maximum(k - 1.0, 0.0)
        total = np.where(adding, total + term, total)  # each ends by itself, as above
    return total


def _negative_binomial(u: Array, mean: Array, times: int, size: float) -> Array:
    ratios = (_STEPS - 1.0 + size) / _STEPS

    def summed(u: Array, mean: Array, times: int) -> tuple[Array, Array]:
        share = mean / (mean + size)  # of the next chance in the last one, far up
        nothing, m = _repeated(times, exp(-size * log1p(mean / size)), share)
        if is_compiling():
            return _summed("negative_binomial", u, nothing, m, size, ratios)
        return _climbed(u, nothing, lambda k, i: (k - 1.0 + size) / k * m[i])

    return _found(u, mean, times, summed, lambda u, m: _negative_binomial_by_area(u, m, size))


def _negative_binomial_by_area(u: Array, mean: Array, size: float) -> Array:
    """Newton's method on the logarithm of the area, until it moves by no more than a count; then count by count."""
    spread = np.sqrt(mean + mean * mean / size)
    z = np.minimum(np.maximum(normal_quantile(u), -1.0), 3.0)
    k = np.maximum(np.rint(mean + spread * z), 0.0)
    low = u < 0.5
    wanted = log(np.where(low, u, 1.0 - u))
    at = np.arange(len(u))
    for _ in range(_NEWTON):
        lower, upper, chance = _negative_binomial_areas(k[at], mean[at], size)
        area = np.where(low[at], lower, upper)
        move = (wanted[at] - log(area)) * area / chance * np.where(low[at], 1.0, -1.0)
        bounded = np.maximum(np.minimum(move, 2.0 * k[at] + spread[at]), -0.75 * k[at])
        k[at] = np.maximum(np.rint(k[at] + bounded), 0.0)
        at = at[np.abs(bounded) > 2.0]
        if not len(at):
            break
    lower, upper, chance = _negative_binomial_areas(k, mean, size)
    share = mean / (mean + size)
    return _walked(k, u, lower, upper, chance, lambda k: (k - 1.0 + size) / k * share)


def _negative_binomial_areas(k: Array, mean: Array, size: float) -> tuple[Array, Array, Array]:
    """P(X <= k), P(X > k) and P(X = k): the smaller area by its continued fraction, the other as what is left."""
    x, y = size / (size + mean), mean / (size + mean)
    log_next = _log_gamma_gap(k + 2.0, size - 1.0) - log_gamma(size)
    following = exp(log_next - size * log1p(mean / size) - (k + 1.0) * log1p(size / mean))  # P(X = k + 1)
    few = y * (k + size + 3.0) < k + 2.0  # whether k lies above the middle: then what is above is small
    above = following * _fraction(np.where(few, k + 1.0, size), np.where(few, size, k + 1.0), np.where(few, y, x))
    small = np.where(few, above, above * (k + 1.0) / size)
    chance = following * (k + 1.0) / ((k + size) * y)
    return np.where(few, 1.0 - small, small), np.where(few, small, 1.0 - small), chance


def _fraction(a: Array, b: Array, x: Array) -> Array:
    """The continued fraction behind the incomplete beta function I_x(a, b), by Lentz's method (1976)."""
    out, at = np.empty(a.shape), np.arange(len(a))
    c: Array = np.ones(a.shape)
    d: Array = 1.0 / _away(1.0 - (a + b) * x / (a + 1.0))
    total = d
    for n in range(1, _MOST_TERMS):
        for step in (
            n * (b - n) * x / ((a + (2.0 * n - 1.0)) * (a + 2.0 * n)),
            -(a + n) * (a + b + n) * x / ((a + 2.0 * n) * (a + (2.0 * n + 1.0))),
        ):
            d = 1.0 / _away(1.0 + step * d)
            c = _away(1.0 + step / c)
            total = total * (d * c)
        moved = np.abs(d * c - 1.0) > _FOUND
        out[at] = total
        if not moved.any():
            break
        at = at[moved]
        a, b, x, c, d, total = (part[moved] for part in (a, b, x, c, d, total))
    return out


def _away(x: Array) -> Array:
    """x, kept off 0."""
    return np.where(np.abs(x) < _TINY, _TINY, x)


def _log_gamma_gap(x: Array, more: float) -> Array:
    """log Gamma(x + more) - log Gamma(x), elementwise for both above 0, by Stirling's series, without large numbers."""
    shift = np.ones(x.shape)
    while (few := np.minimum(x, x + more) < _LARGE).any():
        shift, x = np.where(few, shift * (x / (x + more)), shift), np.where(few, x + 1.0, x)
    top = x + more
    main = (top - 0.5) * log1p(more / x) + more * (log(x) - 1.0)
    return main + _stirling(top) - _stirling(x) + log(shift)


def _log_gamma(x: Array) -> Array:
    """log Gamma, elementwise for x > 0, as `gamma.log_gamma`."""
    below = np.ones(x.shape)
    while (few := x < _LARGE).any():
        below, x = np.where(few, below * x, below), np.where(few, x + 1.0, x)
    return (x - 0.5) * log(x) - x + _HALF_LOG_2_PI + _stirling(x) - log(below)


def _stirling(x: Array) -> Array:
    series, square = np.zeros(x.shape), 1.0 / (x * x)
    for coefficient in STIRLING:
        series = series * square + coefficient
    return series / x
