"""Expectations of products of linear forms and exponentials of them.

For jointly Gaussian forms, E[x_1 .. x_n exp(y)] is exp(Var y / 2) times E[(x_1 + Cov(x_1, y)) .. (x_n + Cov(x_n, y))],
and that is a sum over all ways to pair the factors or to leave them alone (Isserlis 1918, Biometrika 12, 134-139; the
tilt is the Cameron-Martin shift, for n = 1 the identity of Stein 1981).

Two values are carried through everything: `apart`, the product of the two expectations E M and E N, and `cross`, what
E[M N] exceeds it by, so that a small covariance of large means is not a difference of two nearly equal numbers.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import product as choices

import numpy as np

from procgen.theory import cumulants, exponentials
from procgen.theory.covariance import covariance
from procgen.theory.linear import At, Linear
from procgen.theory.sources import GARCH, IID, OPAQUE, PROCESS, Source, Space
from procgen.theory.unknown import Unknown

Pair = tuple[np.ndarray, np.ndarray]  # apart, cross
MOST_FACTORS = 12
MOST_CHOICES = 4096
EMPTY = Linear()


def joint(
    space: Space,
    m: tuple[Sequence[Linear], Linear],
    n: tuple[Sequence[Linear], Linear],
    t: np.ndarray,
    s: np.ndarray,
) -> Pair:
    """(E M(t) E N(s), Cov(M(t), N(s))) for M = product of forms times exp(form), N alike, at steps of one shape.

    Exact for Gaussian sources, and for others as far as second moments go. Raises Unknown with the reason.
    """
    factors = [(form, 0) for form in m[0]] + [(form, 1) for form in n[0]]
    exponents = (m[1], n[1])
    if len(factors) > MOST_FACTORS:
        raise Unknown(f"a moment of {len(factors)} factors; they are computed up to {MOST_FACTORS}")
    if len(m[0]) == len(n[0]) == 1 and not m[1] and not n[1]:
        return np.zeros(t.shape), covariance(space, m[0][0], n[0][0], t, s)
    sources: dict[Source, None] = {}
    for form in (*m[0], *n[0], *exponents):
        sources |= form.sources
    groups = _groups(space, sources)
    total = np.zeros(t.shape), np.zeros(t.shape)
    for assignment in _assignments(factors, groups):
        value = np.ones(t.shape), np.zeros(t.shape)
        for k, group in enumerate(groups):
            inside = [(f.only(group), side) for (f, side), g in zip(factors, assignment, strict=True) if g == k]
            tilts = tuple(e.only(group) for e in exponents)
            value = _times(value, _group(space, group, inside, tilts, t, s))
        total = total[0] + value[0], total[1] + value[1]
    return total


def mean(space: Space, factors: Sequence[Linear], exponent: Linear, t: np.ndarray) -> np.ndarray:
    """E of a product of forms times exp(form) at steps t."""
    return joint(space, (factors, exponent), ((), EMPTY), t, t)[0]


def _groups(space: Space, sources: dict[Source, None]) -> list[list[Source]]:
    """Independent groups, all wholly Gaussian ones as one: independent Gaussians are jointly Gaussian."""
    groups = space.components(sources)
    normal = [space.gaussian(g) for g in groups]
    gaussian = [source for g, is_normal in zip(groups, normal, strict=True) if is_normal for source in g]
    rest = [g for g, is_normal in zip(groups, normal, strict=True) if not is_normal]
    return ([gaussian] if gaussian else []) + rest


def _assignments(factors: Sequence[tuple[Linear, int]], groups: Sequence[Sequence[Source]]):
    """Every way to take, from each factor, its part in one group."""
    touched = [
        [k for k, group in enumerate(groups) if any(source in group for source in form.sources)] for form, _ in factors
    ]
    if np.prod([len(x) for x in touched], dtype=float) > MOST_CHOICES:
        raise Unknown("a product of sums with too many parts to expand")
    return choices(*touched)


def _times(a: Pair, b: Pair) -> Pair:
    return a[0] * b[0], a[1] * b[0] + (a[0] + a[1]) * b[1]


def _group(space, group, factors, tilts, t, s) -> Pair:
    if not factors and not any(tilts):
        return np.ones(t.shape), np.zeros(t.shape)
    _refuse_uncentred(group)
    if space.gaussian(group):
        return _gaussian(space, factors, tilts, t, s)
    return _few_moments(space, group, factors, tilts, t, s)


def _gaussian(space, factors, tilts, t, s) -> Pair:
    steps = (t, s)

    def cov(x: Linear, i: int, y: Linear, j: int) -> np.ndarray:
        return covariance(space, x, y, steps[i], steps[j]) if x and y else np.zeros(t.shape)

    own = [cov(f, side, tilts[side], side) for f, side in factors]
    crossed = [cov(f, side, tilts[1 - side], 1 - side) for f, side in factors]
    between = {
        (i, j): cov(f, side, g, other)
        for i, (f, side) in enumerate(factors)
        for j, (g, other) in enumerate(factors)
        if i < j
    }
    apart, cross = _pairings([side for _, side in factors], own, crossed, between, t.shape)
    if not any(tilts):
        return apart, cross
    with np.errstate(over="ignore", invalid="ignore"):
        level = np.exp((cov(tilts[0], 0, tilts[0], 0) + cov(tilts[1], 1, tilts[1], 1)) / 2.0)
        gain = np.expm1(cov(tilts[0], 0, tilts[1], 1))
        return level * apart, level * (cross + gain * (apart + cross))


def _pairings(sides, own, crossed, between, shape) -> Pair:
    """Sum over all pairings and singletons; `crossed` and pairs across sides count for the cross part only."""
    memo: dict[int, Pair] = {0: (np.ones(shape), np.zeros(shape))}

    def over(left: int) -> Pair:
        if left not in memo:
            i = (left & -left).bit_length() - 1
            rest = left & (left - 1)
            a, c = over(rest)
            apart, cross = own[i] * a, own[i] * c + crossed[i] * (a + c)
            for j in (j for j in range(i + 1, len(sides)) if rest >> j & 1):
                a, c = over(rest & ~(1 << j))
                if sides[i] == sides[j]:
                    apart, cross = apart + between[i, j] * a, cross + between[i, j] * c
                else:
                    cross = cross + between[i, j] * (a + c)
            memo[left] = apart, cross
        return memo[left]

    return over((1 << len(sides)) - 1)


def _few_moments(space, group, factors, tilts, t, s) -> Pair:
    """Moments of a group that is not Gaussian: orders 1 and 2, and 3 and 4 of a single source."""
    zero, order = np.zeros(t.shape), len(factors)
    if any(tilts):
        heavy = [source for tilt in tilts for source in tilt.sources if source.power_tailed]
        if heavy:
            raise Unknown(f"an exponential of {_names(heavy)} has no finite mean: its tails are power laws")
        if len(group) == 1 and group[0].kind == IID and not factors:
            return exponentials.of_shocks(group[0], tilts, t, s)
        raise Unknown(f"moments of {_names(group)} in or beside an exponential are not worked out")
    if order == 1 or (order % 2 and all(source.symmetric for source in group)):
        return zero, zero  # flipping all signs turns an odd product round
    one = group[0] if len(group) == 1 else None
    if order == 4 and one is not None and one.kind == GARCH:
        apart, cross = _gaussian(space, factors, tilts, t, s)
        return _split(apart + cross + cumulants.garch_product(space, one, factors, t, s), apart, factors)
    if order == 2:
        return _gaussian(space, factors, tilts, t, s)
    if all(source.kind == PROCESS for source in group):
        if any(not isinstance(key, At) for form, _ in factors for key in form):
            raise Unknown(f"moments of order {order} of running sums of {_names(group)} are not known in closed form")
        return group[0].detail.product(factors, t, s)
    if order > 4 or one is None or one.kind != IID:
        raise Unknown(f"moments of order {order} of {_names(group)} are not known in closed form")
    apart, cross = _gaussian(space, factors, tilts, t, s)
    return _split(apart + cross + cumulants.joint_cumulant(one, factors, t, s), apart, factors)


def _split(whole: np.ndarray, apart: np.ndarray, factors) -> Pair:
    """The whole moment, apart and cross: apart is at most a product of two second moments, as if Gaussian."""
    if len({side for _, side in factors}) == 1:
        return whole, np.zeros(whole.shape)
    return apart, whole - apart


def _refuse_uncentred(sources) -> None:
    for source in sources:
        if source.kind == OPAQUE and not source.centred:
            raise Unknown(source.reason)


def _names(group: Sequence[Source]) -> str:
    return ", ".join(dict.fromkeys(s.called for s in [s for s in group if not s.gaussian] or group))
