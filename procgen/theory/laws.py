"""Laws at one step: whether a series is Gaussian, its marginal law, and how many moments it has."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy.special import ndtr

from procgen.chance.laws.distributions import Gaussian, Lognormal
from procgen.terms.base import LEAST_LOG
from procgen.theory import exponentials
from procgen.theory.covariance import covariance
from procgen.theory.expression import Expression
from procgen.theory.linear import At, Linear
from procgen.theory.lumps import atoms_of, chance_of, nearest
from procgen.theory.monomials import Term
from procgen.theory.sources import GARCH, IID, OPAQUE, PROCESS, SQUARES, Source, Space
from procgen.theory.unknown import Unknown

ROUNDING = 2e-15  # of the numbers that are subtracted
LOST = 1e-9  # chance of values whose digits are lost, from which on the law is not that of what is stored


def is_gaussian(x: Expression) -> bool:
    """Whether the values at any steps are jointly Gaussian (a known series counts as such)."""
    linear = all(len(t.factors) == 1 and not t.exponent and t.summed is None for t in x.terms)
    return linear and x.space.gaussian(x.sources)


def jointly_gaussian(x: Expression, y: Expression) -> bool:
    """Whether the values of two series at any steps are jointly Gaussian."""
    return is_gaussian(x) and is_gaussian(y) and x.space.gaussian(x.sources | y.sources)


def marginal(x: Expression, step: int) -> Any:
    """The law of x at a step, with pdf, cdf, sf, ppf, mean and var."""
    at = np.array([step], np.int64)
    if x.law is not None:
        return x.law(step)
    if is_gaussian(x):
        variance = float(x.covariance(x, at, at)[0])
        if variance <= 0.0:
            raise Unknown("the value at that step is known, not random")
        return Gaussian(float(x.mean(at)[0]), float(np.sqrt(variance)))
    if not x.linear and len(x.terms) == 1 and next(iter(x.terms)).exponent:
        (term, c), level = next(iter(x.terms.items())), float(x.mean_path(at)[0])
        return _lognormal(x.space, term, c * float(term.coefficient(at)[0]), level, at)
    if not x.terms and len(x.linear) == 1:
        (key, c), level = next(iter(x.linear.items())), float(x.mean_path(at)[0])
        source = key.base.source if isinstance(key, At) and not key.base.phi else None
        if isinstance(key, At) and source is not None and source.kind == PROCESS:
            return Affine(source.detail.marginal(step - key.delay), level, c)
        if source is not None and source.kind == IID:
            return Affine(source.law.distribution(), level, c * source.unit)
    if not x.terms and x.linear and all(source.kind == IID and source.law.needs_spread for source in x.sources):
        from procgen.theory.stable import stable_sum

        return stable_sum(x, step)
    for source in x.sources:
        if source.kind == OPAQUE:
            raise Unknown(source.reason)
    if x.branches is not None or any(source.kind == PROCESS and source.detail.discrete for source in x.sources):
        from procgen.theory.mixtures import mixture_at

        return mixture_at(x, step)
    raise Unknown(f"a combination of shocks that are not normal ({_names(x)}) has no closed law")


def highest_moment(x: Expression) -> float:
    """The order below which absolute moments are known to exist."""
    orders = [np.inf]
    for term, _ in x.parts:
        orders += _orders(x.space, term)
    return float(min(orders))


class Affine:
    """The law of location + scale z, for a standardised law of z and a scale that may be negative."""

    def __init__(self, law: Any, location: float, scale: float):
        self.law, self.location, self.scale = law, location, scale

    @property
    def spacing(self) -> float:
        """The distance of neighbouring values where only such have a chance, else 0."""
        return abs(self.scale) * getattr(self.law, "spacing", 0.0)

    @property
    def atoms(self) -> tuple[float, ...]:
        """The values with a chance of their own beside others."""
        found = (self.location + self.scale * x for x in atoms_of(self.law))
        return tuple(sorted(0.0 if abs(x) <= ROUNDING * abs(self.location) else x for x in found))

    def chance(self, x):
        """P(X = x)."""
        return chance_of(self.law, self._z(x))

    def _z(self, x):
        """What x is of z; where that is an atom but for rounding, the atom."""
        x = np.asarray(x, float)
        z = (x - self.location) / self.scale
        if not (atoms := atoms_of(self.law)):
            return z
        atom = nearest(atoms, z)
        off = np.abs(z - atom) * abs(self.scale)
        return np.where(off <= ROUNDING * (np.abs(x) + abs(self.location)), atom, z)

    def pdf(self, x):
        return self.law.pdf(self._z(x)) / abs(self.scale)

    def cdf(self, x):
        z = self._z(x)
        return self.law.cdf(z) if self.scale > 0 else self.law.sf(z) + chance_of(self.law, z)

    def sf(self, x):
        z = self._z(x)
        return self.law.sf(z) if self.scale > 0 else self.law.cdf(z) - chance_of(self.law, z)

    def ppf(self, p):
        p = np.asarray(p, float)
        return self.location + self.scale * (self.law.ppf(p) if self.scale > 0 else self.law.isf(p))

    def isf(self, p):
        p = np.asarray(p, float)
        return self.location + self.scale * (self.law.isf(p) if self.scale > 0 else self.law.ppf(p))

    def mean(self) -> float:
        return self.location + self.scale * float(self.law.mean())

    def var(self) -> float:
        return self.scale**2 * float(self.law.var())

    def std(self) -> float:
        return float(np.sqrt(self.var()))


def _lognormal(space: Space, term: Term, scale: float, level: float, at: np.ndarray) -> Any:
    if term.factors or term.summed or not space.gaussian(term.sources):
        raise Unknown("a product, or an exponential of what is not Gaussian, has no closed law")
    variance = float(covariance(space, term.exponent, term.exponent, at, at)[0])
    if variance <= 0.0:
        raise Unknown("the value at that step is known, not random")
    small = (LEAST_LOG - np.log(abs(scale))) / np.sqrt(variance) if scale else np.inf
    if ndtr(small) > LOST:
        raise Unknown("some values are smaller than double precision tells: they are stored as 0, or with few digits")
    sigma = float(np.sqrt(variance))
    return Lognormal(sigma, scale, level) if scale > 0 else Affine(Lognormal(sigma, abs(scale)), level, -1.0)


def _orders(space: Space, term: Term) -> list[float]:
    if term.summed is not None:
        return _orders(space, term.summed)
    orders = [_exponential_order(space, term.exponent.only(group)) for group in space.components(term.exponent.sources)]
    for group in space.components(term.sources):
        degree = sum(bool(form.only(group)) for form in term.factors)
        orders += [_order(source) / max(degree, 1) for source in group]  # Hoelder, for dependent factors
    return orders


def _exponential_order(space: Space, form: Linear) -> float:
    """The order below which moments of exp(form) exist, for a form of sources that depend on each other."""
    if space.gaussian(form.sources):
        return float(np.inf)
    if len(form.sources) > 1 or any(source.kind != IID for source in form.sources):
        raise Unknown("an exponential of what is not Gaussian may have no moments")
    (source,) = form.sources
    return exponentials.order(source, form)


def _order(source: Source) -> float:
    if source.kind == OPAQUE:
        if source.highest is None:
            raise Unknown(source.reason)
        return source.highest
    if source.kind == PROCESS:
        return float(source.detail.highest_moment)
    if source.kind in (GARCH, SQUARES):
        order = source.detail.highest_moment
        return order if source.kind == GARCH else order / 2.0
    return float(source.law.highest_moment)


def _names(x: Expression) -> str:
    behind = [source.owner or source for source in x.sources]
    return ", ".join(source.key for source in [s for s in behind if not s.gaussian] or behind)
