"""Characteristic functions of sums of independent shocks: they exist where moments do not, and are products.

For y = sum of w z over independent shocks z, E exp(i u y) is the product of those of the shocks at u w, and several
steps of one series are such a sum, too (Lukacs 1970, Characteristic Functions). That of a law is a quadrature over its
quantiles. Where many frequencies are asked, it is Chebyshev's series through a few of them (Clenshaw & Curtis 1960,
A method for numerical integration on an automatic computer; summed as in Clenshaw 1955), one for each octave.
"""

from __future__ import annotations

from functools import lru_cache
from itertools import combinations
from typing import Any

import numpy as np
from numpy.polynomial.chebyshev import chebval
from numpy.typing import NDArray

from procgen.theory.copula import is_symmetric
from procgen.theory.expression import Expression
from procgen.theory.linear import Linear
from procgen.theory.sources import IID, Source
from procgen.theory.unknown import Unknown
from procgen.theory.weights import weights_at

_LAST, _NODES = 8.0, 1024  # normal score of the outermost node, and the number of nodes
_AT_ONCE = 512  # frequencies
_SMALL = 1e-4  # frequency up to which a law of variance 1 has 1 − u²/2, but for a few 1e-10
_DEGREES = (16, 32, 64, 128, 256)  # numbers of terms of a series, tried in turn
_FEW = 32  # so many frequencies of an octave are evaluated one by one
_ROUNDING = 1e-14  # of a value of a characteristic function; the last terms of a series are below


class Characteristic:
    """E exp(i sum of u d) of the deviations d of a series from its mean; what several askings share is made once."""

    def __init__(self, x: Expression) -> None:
        """Raises Unknown where it has no closed form."""
        if reason := refusal(x):
            raise Unknown(reason)
        self._parts = [(source, x.linear.only([source])) for source in x.sources]
        self._logs: dict[tuple[Source, tuple[int, ...], tuple[float, ...]], complex] = {}

    def __call__(self, steps: list[int], frequencies: list[float]) -> complex:
        """At up to two steps, in increasing order, and a frequency of each."""
        parts = (self._log(source, form, tuple(steps), tuple(frequencies)) for source, form in self._parts)
        return complex(np.exp(sum(parts, 0j)))

    def _log(self, source: Source, form: Linear, steps: tuple[int, ...], frequencies: tuple[float, ...]) -> complex:
        """The logarithm of the factor of one source."""
        if form.is_plain:  # only the lag matters
            steps = tuple(step - min(steps) for step in steps)
        key = (source, steps, frequencies)
        if key not in self._logs:
            self._logs[key] = self._made(source, form, steps, frequencies)
        return self._logs[key]

    def _made(self, source: Source, form: Linear, steps: tuple[int, ...], frequencies: tuple[float, ...]) -> complex:
        weights = weights_at([(form, side) for side in range(len(steps))], list(steps))
        each = source.unit * np.asarray(frequencies)[:, None] * weights
        if len(steps) == 2 and _apart(each):
            alone = (self._log(source, form, (step,), (u,)) for step, u in zip(steps, frequencies, strict=True))
            return sum(alone, 0j)
        return _log_product(source.law, each.sum(axis=0))


def _apart(each: NDArray) -> bool:
    """Whether two sums of shocks have the characteristic function of independent ones, but for rounding.

    For one shock of variance 1, E exp(i a z) exp(i b z) is the product of both means but for at most abs(a b), by
    Cauchy and Schwarz; and products of factors of at most 1 differ by at most the sum of the differences of these.
    """
    return bool(np.abs(each[0] * each[1]).sum() <= _ROUNDING)


def characteristic(x: Expression, steps: list[int], frequencies: list[float]) -> complex:
    """The same, asked once."""
    return Characteristic(x)(steps, frequencies)


def refusal(x: Expression) -> str:
    """Why a series has no characteristic function in closed form; empty where it has."""
    if x.terms or not x.linear:
        return "it is no sum of shocks"
    for source in x.sources:
        if source.kind != IID or source.path is not None or source.law.needs_spread:
            return f"{source.called} is not made of independent shocks of one variance"
    if any(x.space.dependent(a, b) for a, b in combinations(x.sources, 2)):
        return "its sources depend on each other"
    return ""


def _log_product(law: Any, u: NDArray) -> complex:
    """Sum of the logarithms of a law's characteristic function at frequencies (n,)."""
    if law.gaussian:
        return complex(-0.5 * np.square(u).sum())
    distinct, times = np.unique(u[u != 0.0], return_counts=True)
    return complex(times @ np.log(of_law(law, distinct)))


def of_law(law: Any, u: NDArray) -> NDArray:
    """E exp(i u z) of standardised shocks, at frequencies (n,)."""
    if law.gaussian:
        return np.exp(-0.5 * u * u) + 0j
    out = 1.0 - 0.5 * u * u + 0j
    (large,) = np.nonzero(np.abs(u) > _SMALL)
    octaves = np.frexp(u[large])[1]
    for octave in np.unique(octaves).tolist():
        at = large[octaves == octave]
        out[at] = _in_octave(law, octave, u[at])
    return out


def _in_octave(law: Any, octave: int, u: NDArray) -> NDArray:
    """The same at frequencies of 2^(octave - 1) <= abs(u) < 2^octave."""
    series = _series(law, octave) if len(u) > _FEW else None
    if series is None:
        return _by_nodes(law, u)
    x = np.ldexp(np.abs(u), 2 - octave) - 3.0
    if not series.imag.any():
        return chebval(x, series.real) + 0j
    return chebval(x, series.real) + 1j * np.sign(u) * chebval(x, series.imag)


@lru_cache(maxsize=1024)
def _series(law: Any, octave: int) -> NDArray | None:
    """Coefficients of Chebyshev's series in an octave; None where so many are needed that nodes are as fast.

    It is taken when its last quarter is rounding. A heavy tail makes the quadrature, though hardly its limit, waver
    at high frequencies, and that is followed, too.
    """
    for n in _DEGREES:
        if law.points is not None and n >= len(law.points.values):
            return None
        angles = np.pi * (np.arange(n) + 0.5) / n
        values = _by_nodes(law, np.ldexp(3.0 + np.cos(angles), octave - 2))
        found = 2.0 / n * np.cos(np.outer(np.arange(n), angles)) @ values
        found[0] /= 2.0
        if np.abs(found[-(n // 4) :]).max() <= _ROUNDING:
            (kept,) = np.nonzero(np.abs(found) > np.finfo(float).eps / 8)
            return found[: kept[-1] + 1] if len(kept) else found[:1]
    return None


def _by_nodes(law: Any, u: NDArray) -> NDArray:
    """E exp(i u z) as a sum over nodes, at frequencies (n,)."""
    values, chances, even = _nodes(law)
    out = np.empty(len(u), complex)
    for k in range(0, len(u), _AT_ONCE):
        angles = np.outer(u[k : k + _AT_ONCE], values)
        out[k : k + _AT_ONCE] = np.cos(angles) @ chances if even else np.exp(1j * angles) @ chances
    return out


@lru_cache(maxsize=64)
def _nodes(law: Any) -> tuple[NDArray, NDArray, bool]:
    """Values, their chances, and whether cosines are all: those of a law of few values, else quantiles of normals.

    Of a symmetric law the lower half is enough, with the chances of both.
    """
    if law.points is not None:
        return law.points.values, law.points.chances, False
    from scipy.special import ndtr

    even, ideal = is_symmetric(law), law.distribution()
    g = np.linspace(-_LAST, 0.0, _NODES // 2 + 1)
    with np.errstate(over="ignore"):
        values = np.asarray(ideal.ppf(ndtr(g)), float)
        upper = -values if even else np.asarray(ideal.isf(ndtr(g)), float)
    weights = np.exp(-0.5 * g * g) * np.isfinite(values)
    weights[-1] /= 2.0  # the middle is in both halves
    if not even:
        values = np.concatenate([values, upper])
        weights = np.concatenate([weights, np.exp(-0.5 * g * g) * np.isfinite(upper)])
        weights[-1] /= 2.0
    return np.where(np.isfinite(values), values, 0.0), weights / weights.sum(), even
