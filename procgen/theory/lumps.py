"""Laws in which some values have a chance of their own: what is held between bounds, spikes beside a density.

They have the calls of a frozen SciPy distribution, and beside these `atoms`, the values with a chance of their own in
ascending order, and `chance(x)`, that of x. `pdf` is the density of the rest.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from functools import cached_property, partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.theory.mixedlaw import MixedLaw
from procgen.theory.unknown import Unknown

ROUNDING = 1e-12  # of the largest value
ROUGH = 1e-7  # error of a quadrature against its value, from which on it is not known
EDGES = 30  # values with a chance of their own between which a quadrature is done piece by piece
ROUNDING_OF_CHANCES = 1e-12
NEAR = BESIDE = 1e-6  # of the distance of two values of a lattice: what is as near to a value is it


def chance_of(law: Any, x: Any) -> NDArray:
    """P(X = x) for a law of any kind; 0 where only a density is known."""
    x = np.asarray(x, float)
    if hasattr(law, "chance"):
        return law.chance(x)
    width = BESIDE * getattr(law, "spacing", 0.0)
    return law.cdf(x + width) - law.cdf(x - width) if width else np.zeros(x.shape)


def nearest(values: Sequence[float], x: Any) -> NDArray:
    """The one of the ascending values that is nearest to each x."""
    x, table = np.asarray(x, float), np.asarray(values, float)
    after = np.clip(np.searchsorted(table, x), 1, max(len(table) - 1, 1))
    low, high = table[after - 1], table[np.minimum(after, len(table) - 1)]
    return np.where(np.abs(x - low) <= np.abs(x - high), low, high)


def atoms_of(law: Any) -> tuple[float, ...]:
    """The values of a law that have a chance of their own beside others; none where all values are of a lattice."""
    return getattr(law, "atoms", ())


def on_atoms(law: Any, p: NDArray, x: NDArray) -> NDArray:
    """Quantiles x at p that were found by halving, each on the value that has its chance where one has."""
    for value in law.atoms:
        upto = float(law.cdf(value))
        x = np.where((p > upto - float(law.chance(value))) & (p <= upto), value, x)
    return x


class Point:
    """One value, for certain: a part of a mixture."""

    spacing = 0.0

    def __init__(self, value: float):
        self.value, self.atoms = float(value), (float(value),)

    def cdf(self, x: Any) -> NDArray:
        return 1.0 * (np.asarray(x, float) >= self.value)

    def sf(self, x: Any) -> NDArray:
        return 1.0 * (np.asarray(x, float) < self.value)

    def pdf(self, x: Any) -> NDArray:
        return np.zeros(np.shape(x))

    def ppf(self, p: Any) -> NDArray:
        return np.full(np.shape(p), self.value)

    isf = ppf

    def chance(self, x: Any) -> NDArray:
        return 1.0 * (np.asarray(x, float) == self.value)

    def mean(self) -> float:
        return self.value

    def var(self) -> float:
        return 0.0


class Few:
    """One of a few values, each with its chance."""

    spacing = 0.0

    def __init__(self, values: Sequence[float], chances: Sequence[float]):
        order = np.argsort(values)
        self._values, self._chances = np.asarray(values, float)[order], np.asarray(chances, float)[order]
        self._upto = np.concatenate([[0.0], np.cumsum(self._chances)])
        self._beyond = np.concatenate([np.cumsum(self._chances[::-1])[::-1], [0.0]])
        self.atoms = tuple(self._values.tolist())

    def cdf(self, x: Any) -> NDArray:
        return self._upto[np.searchsorted(self._values, x, side="right")]

    def sf(self, x: Any) -> NDArray:
        return self._beyond[np.searchsorted(self._values, x, side="right")]

    def pdf(self, x: Any) -> NDArray:
        return np.zeros(np.shape(x))

    def chance(self, x: Any) -> NDArray:
        at = np.minimum(np.searchsorted(self._values, x), len(self._values) - 1)
        return np.where(self._values[at] == x, self._chances[at], 0.0)

    def ppf(self, p: Any) -> NDArray:
        return self._values[np.minimum(np.searchsorted(self._upto[1:], p), len(self._values) - 1)]

    def isf(self, p: Any) -> NDArray:
        return self.ppf(1.0 - np.asarray(p, float))

    def mean(self) -> float:
        return float(self._values @ self._chances)

    def var(self) -> float:
        return float((self._values - self.mean()) ** 2 @ self._chances)

    def std(self) -> float:
        return float(np.sqrt(self.var()))


class Lumped(MixedLaw):
    """A finite mixture of laws and of single values."""

    @cached_property
    def atoms(self) -> tuple[float, ...]:
        return tuple(sorted({value for law in self.laws for value in atoms_of(law)}))

    def chance(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        found = [w * chance_of(law, x) for w, law in zip(self.weights, self.laws, strict=True)]
        return np.sum(found, axis=0)

    def _ends(self, p: NDArray) -> tuple[NDArray, NDArray]:
        """Between two values with a chance of their own, or on one."""
        low, high = super()._ends(p)
        for value in self.atoms:
            upto = float(self.cdf(value))
            beyond, below = p > upto, p <= upto - float(self.chance(value))
            low = np.where(below, low, np.where(beyond, np.maximum(low, value), value))
            high = np.where(beyond, high, np.where(below, np.minimum(high, value), value))
        return low, high


def parts_of(law: Any) -> list[tuple[float, Any]]:
    """The parts of a mixture, or of a law of few values, with their shares; any other law has one."""
    if isinstance(law, MixedLaw):
        return list(zip(law.weights, law.laws, strict=True))
    shares = chance_of(law, atoms := atoms_of(law)) if atoms_of(law) else np.zeros(0)
    if float(shares.sum()) < 1.0 - ROUNDING_OF_CHANCES:
        return [(1.0, law)]
    return [(float(share), Point(value)) for share, value in zip(shares, atoms, strict=True)]


class Measured:
    """What laws share whose moments come from their own areas, by quadrature."""

    def mean(self) -> float:
        return self._moments[0]

    def var(self) -> float:
        return self._moments[1]

    def std(self) -> float:
        return float(np.sqrt(self.var()))

    @cached_property
    def _moments(self) -> tuple[float, float]:
        return moments(self)


class Bounded(Measured):
    """A law of which all that is beyond `low` or `high` is put on it (Tobin 1958)."""

    def __init__(self, law: Any, low: float = -np.inf, high: float = np.inf):
        self.law, self.low, self.high = law, float(low), float(high)
        self.spacing = getattr(law, "spacing", 0.0)
        ends = [end for end in (self.low, self.high) if np.isfinite(end)]
        if self.spacing and not all(abs(_off(end - float(law.ppf(0.5)), self.spacing)) <= NEAR for end in ends):
            raise Unknown("its bounds are no values of its body: what lies on two lattices has no law that is computed")

    @cached_property
    def atoms(self) -> tuple[float, ...]:
        if self.spacing:
            return ()
        ends = [end for end in (self.low, self.high) if np.isfinite(end) and float(self.chance(end)) > 0.0]
        return tuple(sorted({*ends, *(x for x in atoms_of(self.law) if self._inside(x))}))

    @cached_property
    def _rounding(self) -> float:
        """What is as near to a bound is it: values with a chance of their own come out of sums and products."""
        return ROUNDING * max((abs(x) for x in atoms_of(self.law)), default=0.0)

    def _inside(self, x: Any) -> Any:
        return (x > self.low + self._rounding) & (x < self.high - self._rounding)

    def chance(self, x: Any) -> NDArray:
        x, off = np.asarray(x, float), self._rounding
        inside = np.where(self._inside(x), chance_of(self.law, x), 0.0)
        upper, lower = 0.0, self.law.cdf(self.low + off) if np.isfinite(self.low) else 0.0
        if np.isfinite(self.high):
            upper = self.law.sf(self.high - off) + (0.0 if off else chance_of(self.law, self.high))
        return np.where(x == self.low, lower, np.where(x == self.high, upper, inside))

    def cdf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        return np.where(x < self.low, 0.0, np.where(x >= self.high, 1.0, self.law.cdf(x)))

    def sf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        return np.where(x < self.low, 1.0, np.where(x >= self.high, 0.0, self.law.sf(x)))

    def pdf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        return np.where((x > self.low) & (x < self.high), self.law.pdf(x), 0.0)

    def ppf(self, p: Any) -> NDArray:
        return np.clip(self.law.ppf(p), self.low, self.high)

    def isf(self, p: Any) -> NDArray:
        return np.clip(self.law.isf(p), self.low, self.high)


class Folded(Measured):
    """The law of |X| for an X that has a density, and maybe atoms (Leone, Nelson & Nottingham 1961)."""

    spacing = 0.0

    def __init__(self, law: Any):
        if getattr(law, "spacing", 0.0):
            raise Unknown("the size of what lies on a lattice has no law that is computed")
        self.law, self.atoms = law, tuple(sorted({abs(x) for x in atoms_of(law)}))

    def chance(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        return np.where(x > 0.0, chance_of(self.law, -x), 0.0) + np.where(x < 0.0, 0.0, chance_of(self.law, x))

    def cdf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        inside = self.law.cdf(np.abs(x)) - self.law.cdf(-np.abs(x)) + chance_of(self.law, -np.abs(x))
        return np.where(x < 0.0, 0.0, inside)

    def sf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        beyond = self.law.sf(np.abs(x)) + self.law.cdf(-np.abs(x)) - chance_of(self.law, -np.abs(x))
        return np.where(x < 0.0, 1.0, beyond)

    def pdf(self, x: Any) -> NDArray:
        x = np.asarray(x, float)
        return np.where(x >= 0.0, self.law.pdf(x) + self.law.pdf(-x), 0.0)

    def ppf(self, p: Any) -> NDArray:
        return self._where(p, lambda x, p: np.where(p < 0.5, self.cdf(x) < p, self.sf(x) > 1.0 - p))

    def isf(self, p: Any) -> NDArray:
        return self._where(1.0 - np.asarray(p, float), lambda x, q: self.sf(x) > np.asarray(p, float))

    def _where(self, p: Any, beyond: Any) -> NDArray:
        from procgen.chance.laws.mixture import halved

        p = np.asarray(p, float)
        ends = np.abs([self.law.ppf((1.0 - p) / 2.0), self.law.isf((1.0 - p) / 2.0)])
        return on_atoms(self, p, halved(lambda x: beyond(x, p), np.zeros(p.shape), ends.max(axis=0)))

    def var(self) -> float:
        return float(self.law.var()) + float(self.law.mean()) ** 2 - self.mean() ** 2


class Mapped(Measured):
    """The law of f(X) for an f that rises; `back` undoes it, `rise` is the derivative of `back`."""

    spacing = 0.0

    def __init__(self, law: Any, f: Any, back: Any, rise: Any, ends: Sequence[float] = (-np.inf, np.inf)):
        if getattr(law, "spacing", 0.0):
            raise Unknown("a curve of what lies on a lattice has no law that is computed")
        self.law, self.f, self._undone, self._rise, (self.low, self.high) = law, f, back, rise, ends
        self._atoms = atoms_of(law)
        self.atoms = tuple(float(x) for x in f(np.array(self._atoms)))

    def _back(self, y: Any) -> NDArray:
        """What y is made of; where that is an atom but for rounding, the atom."""
        x = self._undone(y)
        return np.where(np.isin(y, self.atoms), nearest(self._atoms, x), x) if self._atoms else x

    def chance(self, x: Any) -> NDArray:
        return self._of(x, lambda y: chance_of(self.law, self._back(y)), 0.0, 0.0)

    def _of(self, x: Any, what: Any, below: float, above: float) -> NDArray:
        x = np.asarray(x, float)
        inside = (x > self.low) & (x < self.high)
        with np.errstate(divide="ignore", invalid="ignore"):
            found = what(np.where(inside, x, self.f(0.0)))
        return np.where(inside, found, np.where(x <= self.low, below, above))

    def cdf(self, x: Any) -> NDArray:
        return self._of(x, lambda y: self.law.cdf(self._back(y)), 0.0, 1.0)

    def sf(self, x: Any) -> NDArray:
        return self._of(x, lambda y: self.law.sf(self._back(y)), 1.0, 0.0)

    def pdf(self, x: Any) -> NDArray:
        return self._of(x, lambda y: self.law.pdf(self._back(y)) * self._rise(y), 0.0, 0.0)

    def ppf(self, p: Any) -> NDArray:
        return self.f(np.asarray(self.law.ppf(p), float))

    def isf(self, p: Any) -> NDArray:
        return self.f(np.asarray(self.law.isf(p), float))


def powered(law: Any, n: int) -> Mapped:
    """The law of X to the whole power n."""
    even = n % 2 == 0

    def back(y: NDArray) -> NDArray:
        return np.sign(y) * np.abs(y) ** (1.0 / n)

    def rise(y: NDArray) -> NDArray:
        return np.abs(y) ** (1.0 / n - 1.0) / n

    ends = (np.nextafter(0.0, -1.0), np.inf) if even else (-np.inf, np.inf)
    return Mapped(Folded(law) if even else law, lambda x: x**n, back, rise, ends)


def moments(law: Any) -> tuple[float, float]:
    """Mean and variance about the median, from the areas beyond: exact but for the quadrature, some 1e-10.

    Raises Unknown where the quadrature does not come to that, as where there is no variance.
    """
    middle, low, high = (float(law.ppf(p)) for p in (0.5, 0.0, 1.0))
    spread = abs(float(law.ppf(0.9)) - float(law.ppf(0.1)))
    edges = [abs(x - middle) for x in atoms_of(law)[:EDGES]]
    parts = []
    for end, beyond in ((high, lambda d: law.sf(middle + d)), (low, lambda d: law.cdf(middle - d))):
        reach = abs(end - middle) if end == end else np.inf  # what overflows on its way is far away
        scale = spread or reach
        cuts = [c for c in sorted({0.0, scale, 8.0 * scale, *edges}) if c < reach]
        once = twice = 0.0
        for a, b in zip(cuts, [*cuts[1:], reach][: len(cuts)], strict=True):  # none where the median is the end
            once += integral(partial(_beyond, beyond), a, b)
            twice += 2.0 * integral(partial(_farther, beyond), a, b)
        parts.append((once, twice))
    (up, up2), (down, down2) = parts
    return middle + up - down, up2 + down2 - (up - down) ** 2


def _beyond(chance: Callable[[float], Any], d: float) -> float:
    return float(chance(d))


def _farther(chance: Callable[[float], Any], d: float) -> float:
    return d * float(chance(d))


def integral(f: Callable[[float], float], a: float, b: float) -> float:
    """∫ f over a stretch of distances where it has no sign but one; if that has no end, over their logarithms.

    There the tails of powers and exponentials fall as fast as others do over distances.
    """
    from scipy.integrate import quad

    def over_logarithm(s: float) -> float:
        d = a * np.exp(min(s, 600.0))
        height = f(d) if np.isfinite(d) else 0.0
        return d * height if height > 0.0 else 0.0

    endless = np.isinf(b) and a > 0.0
    what, ends = (over_logarithm, (0.0, np.inf)) if endless else (f, (a, b))
    value, error = quad(what, *ends, epsabs=0, epsrel=1e-11, limit=200, full_output=1)[:2]
    if endless and over_logarithm(200.0) > ROUGH * abs(value):
        raise Unknown("the tails of its law fall too slowly for its moments to be found, if there are any")
    if not error <= ROUGH * abs(value) + np.finfo(float).tiny:
        raise Unknown(f"the quadrature of its law is only known to {error:.1g} of {value:.3g}")
    return float(value)


def _off(distance: float, spacing: float) -> float:
    """How far a distance is from a multiple of the spacing, in spacings."""
    return distance / spacing - round(distance / spacing)
