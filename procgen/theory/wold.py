"""Linear series as ratios of polynomials in B, and the one-source form of their sum (Wold 1938).

A running sum is 1/(1 - B) and a seasonal one 1/(1 - B^s); their denominators are kept as cyclotomic polynomials, so
that sums with different unit roots have a least common denominator. What is known at step 0 for ever counts for
nothing: long after the start it has been learnt.

The sum has the numerator theta(B) e with theta without roots inside the unit circle, and

    sigma^2 abs(theta)^2 = sum over sources of cov(a, b) N_a conj(N_b)   on the unit circle,

by the logarithm's Fourier coefficients c_k: sigma^2 = exp(c_0), theta = exp(sum over k >= 1 of c_k B^k) (Kolmogorov
1941; Bauer 1955). Common roots on the circle, at roots of unity, are taken out before.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from functools import lru_cache, reduce

import numpy as np

from procgen.spec.records import dataclass
from procgen.theory.arma import polynomial
from procgen.theory.covariance import convolved
from procgen.theory.linear import At, Frozen, Key, Linear, Sum, base_of
from procgen.theory.sources import Source, Space
from procgen.theory.unknown import Unknown

VANISHES = 1e-11  # of the sum of absolute coefficients: a polynomial is 0 there
SETTLED = 1e-11
MOST_POINTS = 1 << 20
HIGHEST_DEGREE = 6_000
DENSE = 300  # degree up to which roots of unity of all orders are looked for

Units = tuple[tuple[int, int], ...]  # (order, multiplicity) of the cyclotomic polynomials in a denominator


@dataclass(frozen=True)
class Ratio:
    """numerator(B) / denominator(B), coefficients from lag 0 on; the denominator begins with 1."""

    numerator: np.ndarray
    denominator: np.ndarray


def ratios(form: Linear) -> Iterator[tuple[Source, Ratio]]:
    """What each source goes through; several ratios of one source are added up."""
    for (source, phi, units), numerator in _numerators(form).items():
        yield source, Ratio(numerator, _product([polynomial(phi), *_cyclotomics(dict(units))]))


def wold(space: Space, form: Linear) -> tuple[float, Ratio]:
    """Variance of the one-step forecast errors, and the ratio that makes the series of them.

    Raises Unknown where a root of the joint numerator is too near to the unit circle.
    """
    units, phis, by_source = _common(form)
    if not by_source:  # all that is left is known for ever
        return 0.0, Ratio(np.ones(1), np.ones(1))
    extra: list[np.ndarray] = []
    for order in _vanishing(list(by_source.values())):
        while _all_vanish(by_source.values(), order):
            by_source = {source: _divided(n, order) for source, n in by_source.items()}
            if units[order]:
                units[order] -= 1
            else:
                extra.append(cyclotomic(order))
    variance, theta = _factored(space, by_source)
    denominator = _product([*map(polynomial, phis), *_cyclotomics(units)])
    return variance, Ratio(_product([theta, *extra]), denominator)


def _numerators(form: Linear) -> dict[tuple[Source, tuple[float, ...], Units], np.ndarray]:
    """Numerators by source and denominator."""
    found: dict[tuple[Source, tuple[float, ...], Units], dict[int, float]] = {}
    for key, c in form.items():
        for delay, units, weight in _unfolded(key):
            base = base_of(key)
            weights = found.setdefault((base.source, base.phi, units), {})
            weights[delay] = weights.get(delay, 0.0) + c * weight
    return {denominator: _dense(weights) for denominator, weights in found.items()}


def _unfolded(key: Key) -> Iterator[tuple[int, Units, float]]:
    """Delay, unit roots and coefficient of each base value in a key."""
    if isinstance(key, At):
        yield key.delay, (), 1.0
    elif isinstance(key, Sum):
        for delay, units, weight in _unfolded(key.of):
            yield delay, _with(units, 1), weight
    elif not isinstance(key, Frozen):
        for inner, c in key.of.items():
            for delay, units, weight in _unfolded(inner):
                yield key.delay + delay, _with(units, key.every), c * weight


def _with(units: Units, season: int) -> Units:
    """The unit roots with those of 1 - B^season too."""
    more = Counter(dict(units)) + Counter({k: 1 for k in range(1, season + 1) if season % k == 0})
    return tuple(sorted(more.items()))


def _dense(weights: dict[int, float]) -> np.ndarray:
    out = np.zeros(max(weights) + 1)
    out[list(weights)] = list(weights.values())
    return out


def _common(form: Linear) -> tuple[Counter[int], list[tuple[float, ...]], dict[Source, np.ndarray]]:
    """Unit roots and autoregressions of the common denominator, and the numerator of each source over it."""
    parts = _numerators(form)
    units: Counter[int] = Counter()
    for _, _, own in parts:
        units |= Counter(dict(own))
    phis = list(dict.fromkeys(phi for _, phi, _ in parts if phi))
    by_source: dict[Source, np.ndarray] = {}
    for (source, phi, own), numerator in parts.items():
        others = [polynomial(other) for other in phis if other != phi]
        whole = _product([numerator, *others, *_cyclotomics(units - Counter(dict(own)))])
        by_source[source] = _sum(by_source.get(source, np.zeros(1)), whole)
    return units, phis, {source: numerator for source, numerator in by_source.items() if numerator.any()}


def _product(polynomials: list[np.ndarray]) -> np.ndarray:
    whole = reduce(convolved, polynomials, np.ones(1))
    if len(whole) > HIGHEST_DEGREE:
        raise Unknown(f"forecasts of a recursion over more than {HIGHEST_DEGREE} steps")
    return whole


def _sum(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    size = max(len(a), len(b))
    return np.pad(a, (0, size - len(a))) + np.pad(b, (0, size - len(b)))


def _cyclotomics(units: dict[int, int]) -> list[np.ndarray]:
    return [cyclotomic(order) for order, times in units.items() for _ in range(times)]


@lru_cache(maxsize=2048)
def cyclotomic(order: int) -> np.ndarray:
    """The polynomial with the primitive roots of unity of an order as its roots, from 1 on: 1 - B, 1 + B, .."""
    whole = np.zeros(order + 1)
    whole[0], whole[-1] = 1.0, -1.0
    for k in range(1, order):
        if order % k == 0:
            whole = np.rint(_quotient(whole, cyclotomic(k)))
    return whole


def _quotient(whole: np.ndarray, by: np.ndarray) -> np.ndarray:
    """whole / by for a divisor that begins with 1, from the lowest power on."""
    from procgen.theory.recursion import recursed

    return recursed(tuple((-by[1:]).tolist()), whole)[: len(whole) - len(by) + 1]


def _divided(numerator: np.ndarray, order: int) -> np.ndarray:
    return _quotient(numerator, cyclotomic(order))


def _vanishing(numerators: list[np.ndarray]) -> list[int]:
    """Orders of the roots of unity at which all numerators are 0.

    Those of an order are as many as there are smaller numbers without a divisor in common with it: a sixth of it or
    more, for orders up to 30,000. A mean over k steps has those of the divisors of k, and the degree k − 1.
    """
    degree = min((len(n) for n in numerators), default=1) - 1
    last = (6 * degree if degree <= DENSE else degree + 1) if degree else 0
    return [order for order in range(1, last + 1) if _all_vanish(numerators, order)]


def _all_vanish(numerators, order: int) -> bool:
    z = np.exp(2j * np.pi * np.arange(max(map(len, numerators))) / order)
    return all(abs(n @ z[: len(n)]) <= VANISHES * np.abs(n).sum() and len(n) > 1 for n in numerators)


def _factored(space: Space, numerators: dict[Source, np.ndarray]) -> tuple[float, np.ndarray]:
    """sigma^2 and theta with theta(0) = 1 and no root inside the unit circle."""
    if len(numerators) == 1:
        ((source, numerator),) = numerators.items()
        first = int(np.flatnonzero(numerator)[0])
        invertible = _invertible(numerator[first:])
        if invertible is not None:
            return space.covariance(source, source) * float(numerator[first]) ** 2, invertible
    degree = max(map(len, numerators.values())) - 1
    scales = {(a, b): space.covariance(a, b) for a in numerators for b in numerators}
    points = 1 << max(10, (8 * degree).bit_length())
    before: np.ndarray | None = None
    while points <= MOST_POINTS:
        spectra = {source: np.fft.rfft(n, points) for source, n in numerators.items()}
        density = sum(scale * (spectra[a] * spectra[b].conj()).real for (a, b), scale in scales.items() if scale)
        if np.min(density) <= np.finfo(float).eps * np.max(density):
            break
        found = innovations(np.fft.irfft(np.log(density)), degree)
        if before is not None and np.abs(found - before).max() <= SETTLED * np.abs(found).max():
            return float(found[0]), found[1:] / found[1]
        before, points = found, 2 * points
    raise Unknown("its one-step form has roots so near to the unit circle that a filter would take too long to settle")


def _invertible(numerator: np.ndarray) -> np.ndarray | None:
    """The numerator as theta, where it has no root inside the unit circle or on it."""
    from procgen.terms.start import partial_autocorrelations

    theta = np.trim_zeros(numerator / numerator[0], "b")
    return theta if partial_autocorrelations((-theta[1:]).tolist()) is not None else None


def innovations(cepstrum: np.ndarray, degree: int) -> np.ndarray:
    """exp(c_0), and the coefficients up to a degree of exp(sum over k >= 1 of c_k B^k), of a log density."""
    folded = np.zeros(len(cepstrum))
    folded[1 : len(cepstrum) // 2] = cepstrum[1 : len(cepstrum) // 2]
    folded[len(cepstrum) // 2] = cepstrum[len(cepstrum) // 2] / 2.0
    theta = np.fft.irfft(np.exp(np.fft.rfft(folded)), len(cepstrum))[: degree + 1]
    return np.concatenate([[np.exp(cepstrum[0])], theta])
