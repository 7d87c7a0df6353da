"""Laws at a step of what two series make together: the larger of two, and a product in which one has few values.

The larger of two independent X and Y has the distribution function F(x) G(x); that of two jointly normal ones is the
bivariate normal one, by Owen's T (Owen 1956), with the density of Clark (1961).
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.theory.expression import Expression
from procgen.theory.laws import Affine, is_gaussian, jointly_gaussian, marginal
from procgen.theory.lumps import Bounded, Lumped, Measured, Point, atoms_of, chance_of, on_atoms
from procgen.theory.unknown import Unknown

KNOWN = "the value at that step is known, not random"
TINY = 1e-300
SURE = 1e-9  # what may be missing where the chances of a few values are added up


def larger_law(x: Expression, y: Expression, sign: float, step: int) -> Any:
    """The law of max(x, y) at a step; of min(x, y) where the sign is negative."""
    one, other = (_law_or_value(part, step) for part in (x, y))
    if isinstance(one, float) and isinstance(other, float):
        raise Unknown(KNOWN)
    if isinstance(one, float) or isinstance(other, float):
        free, bound = (other, one) if isinstance(one, float) else (one, other)
        return Bounded(free, low=bound) if sign > 0 else Bounded(free, high=bound)
    law: Any = None
    if jointly_gaussian(x, y) and x.space.linked(x.sources, y.sources):
        at = np.array([step], np.int64)
        covariance = float(x.covariance(y, at, at)[0])
        law = LargerNormal(sign * one.mean(), sign * other.mean(), one.std(), other.std(), covariance)
    elif x.space.linked(x.sources, y.sources):
        raise Unknown("the two have chance in common and are not jointly normal: the law of the larger is not computed")
    else:
        law = Larger(*((one, other) if sign > 0 else (Affine(one, 0.0, -1.0), Affine(other, 0.0, -1.0))))
    return law if sign > 0 else Affine(law, 0.0, -1.0)


def product_law(parts: Sequence[Expression], step: int) -> Any:
    """The law of a product of parts at a step: one random, or two that are independent, one of few values."""
    factor, laws, random = 1.0, [], []
    for part in parts:
        found = _law_or_value(part, step)
        if isinstance(found, float):
            factor *= found
        else:
            laws.append(found)
            random.append(part)
    if not laws or factor == 0.0:
        raise Unknown(KNOWN)
    if len(laws) == 1:
        return Affine(laws[0], 0.0, factor)
    if len(laws) > 2 or random[0].space.linked(random[0].sources, random[1].sources):
        raise Unknown("a product of two that have chance in common, or of more, has no law that is computed")
    for few, other in (laws, laws[::-1]):
        values = np.array(atoms_of(few))
        chances = few.chance(values) if len(values) else values
        if len(values) and abs(float(chances.sum()) - 1.0) < SURE:
            return _mixed([(value * factor, chance) for value, chance in zip(values, chances, strict=True)], other)
    raise Unknown("a product of two that both spread over many values has no law that is computed")


def _mixed(cases: Sequence[tuple[float, float]], law: Any) -> Any:
    """The law of a factor times what has a law, given the factors and their chances."""
    spacing = getattr(law, "spacing", 0.0)
    if spacing:
        raise Unknown("a product with what has many values with a chance of their own has no law that is computed")
    parts = [Affine(law, 0.0, float(factor)) if factor else Point(0.0) for factor, _ in cases]
    return Lumped([float(chance) for _, chance in cases], parts)


def _law_or_value(x: Expression, step: int) -> Any:
    """The law at a step, or the value where nothing is left to chance there."""
    at = np.array([step], np.int64)
    if not x.sources or (x.law is None and is_gaussian(x) and float(x.covariance(x, at, at)[0]) <= 0.0):
        return float(x.mean(at)[0])
    return marginal(x, step)


class _Maximum(Measured):
    """What laws of a maximum share: quantiles by halving between those of the parts, moments from areas."""

    spacing = 0.0
    atoms: Sequence[float] = ()

    def cdf(self, x: Any) -> NDArray:
        raise NotImplementedError

    def sf(self, x: Any) -> NDArray:
        raise NotImplementedError

    def chance(self, x: Any) -> NDArray:
        return np.zeros(np.shape(x))

    def _ends(self, p: NDArray) -> tuple[NDArray, NDArray]:
        raise NotImplementedError

    def ppf(self, p: Any) -> NDArray:
        p = np.asarray(p, float)
        return self._where(lambda x: np.where(p < 0.5, self.cdf(x) < p, self.sf(x) > 1.0 - p), p)

    def isf(self, p: Any) -> NDArray:
        p = np.asarray(p, float)
        return self._where(lambda x: np.where(p > 0.5, self.cdf(x) < 1.0 - p, self.sf(x) > p), 1.0 - p)

    def _where(self, beyond: Any, p: NDArray) -> NDArray:
        from procgen.chance.laws.mixture import halved

        low, high = self._ends(p)
        return on_atoms(self, p, halved(beyond, low, high))


class Larger(_Maximum):
    """The law of the larger of two independent numbers."""

    def __init__(self, one: Any, other: Any):
        self.one, self.other = one, other
        steps = {float(getattr(law, "spacing", 0.0)) for law in (one, other)}
        if len(steps) > 1 or not np.isfinite(max(steps)):
            raise Unknown("the larger of what lies on a lattice and what does not has no law that is computed")
        self.spacing = steps.pop()
        if self.spacing:
            apart = (float(one.ppf(0.5)) - float(other.ppf(0.5))) / self.spacing
            if abs(apart - round(apart)) > 1e-6:
                raise Unknown("they lie on two lattices: the larger one has no law that is computed")

    @cached_property
    def atoms(self) -> tuple[float, ...]:  # type: ignore[override]
        found = sorted({*atoms_of(self.one), *atoms_of(self.other)})
        return tuple(value for value in found if float(self.chance(value)) > 0.0)

    def cdf(self, x: Any) -> NDArray:
        return self.one.cdf(x) * self.other.cdf(x)

    def sf(self, x: Any) -> NDArray:
        a, b = self.one.sf(x), self.other.sf(x)
        return a + b - a * b

    def pdf(self, x: Any) -> NDArray:
        return self.one.pdf(x) * self.other.cdf(x) + self.other.pdf(x) * self.one.cdf(x)

    def chance(self, x: Any) -> NDArray:
        a, b = chance_of(self.one, x), chance_of(self.other, x)
        return self.one.cdf(x) * b + self.other.cdf(x) * a - a * b

    def _ends(self, p: NDArray) -> tuple[NDArray, NDArray]:
        root = np.sqrt(p)
        ends = [np.maximum(self.one.ppf(q), self.other.ppf(q)) for q in (p, root)]
        return ends[0], np.maximum(*ends)


class LargerNormal(_Maximum):
    """The law of the larger of two jointly normal numbers."""

    def __init__(self, m: float, n: float, u: float, v: float, covariance: float):
        self.m, self.n, self.u, self.v = m, n, u, v
        self.rho = min(max(covariance / (u * v), -1.0), 1.0)
        if 1.0 - abs(self.rho) < 1e-12:
            raise Unknown("the two are one line apart, or nearly: the law of the larger is not computed")
        self._root = np.sqrt((1.0 - self.rho) * (1.0 + self.rho))

    def _scaled(self, x: Any) -> tuple[NDArray, NDArray]:
        x = np.asarray(x, float)
        return (x - self.m) / self.u, (x - self.n) / self.v

    def _both_below(self, h: NDArray, k: NDArray) -> NDArray:
        from scipy.special import ndtr, owens_t

        h, k = (np.where(z == 0.0, TINY, z) for z in (h, k))
        ratio = np.clip(k / h, -1e300, 1e300), np.clip(h / k, -1e300, 1e300)
        areas = owens_t(h, (ratio[0] - self.rho) / self._root) + owens_t(k, (ratio[1] - self.rho) / self._root)
        return np.maximum(0.5 * (ndtr(h) + ndtr(k)) - areas - np.where((h < 0.0) != (k < 0.0), 0.5, 0.0), 0.0)

    def cdf(self, x: Any) -> NDArray:
        return self._both_below(*self._scaled(x))

    def sf(self, x: Any) -> NDArray:
        from scipy.special import ndtr

        h, k = self._scaled(x)
        return ndtr(-h) + ndtr(-k) - self._both_below(-h, -k)

    def pdf(self, x: Any) -> NDArray:
        from scipy.special import ndtr

        h, k = self._scaled(x)
        one = np.exp(-0.5 * h * h) / self.u * ndtr((k - self.rho * h) / self._root)
        other = np.exp(-0.5 * k * k) / self.v * ndtr((h - self.rho * k) / self._root)
        return (one + other) / np.sqrt(2.0 * np.pi)

    def _ends(self, p: NDArray) -> tuple[NDArray, NDArray]:
        from scipy.special import ndtri

        def furthest(q: NDArray) -> NDArray:
            return np.maximum(self.m + self.u * ndtri(q), self.n + self.v * ndtri(q))

        return furthest(p), furthest(0.5 * (1.0 + p))
