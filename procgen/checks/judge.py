"""Statistics become findings: theory against estimate, a standard error, a p, and what could have been seen.

Exact laws are used where they exist. Where only a central limit theorem is left, the skewness is corrected and the
finding states down to which level its p can be trusted.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from procgen.checks import power, tails
from procgen.spec.records import dataclass

FEW_PATHS = 100  # below this many paths no central limit theorem over paths is trusted
_PLACES = tuple(4.0 * 1.05**k for k in range(40))  # standard errors, at which a tail that falls is made sure of
_TRUSTED = 0.5  # the largest relative error of a tail (as a logarithm) that still counts as known
_STEADY = 3.0  # times the skewness of products that products which depart were seen to have (tests/studies/power.py)


def _always(level: float) -> str | None:
    return None


@dataclass(frozen=True)
class Finding:
    """One comparison of theory and data.

    Attributes
    ----------
    theory, estimate, standard_error : float
        In the unit of the estimate; the standard error is that of the estimate under the theory.
    log_p : float
        Natural logarithm of p.
    detect : callable
        Level -> smallest departure found 9 times in 10, in the unit of the estimate (None: none can be promised).
    doubt : callable
        Level -> why p cannot be trusted that far out, or None.
    """

    theory: float
    estimate: float
    standard_error: float
    log_p: float
    detect: Callable[[float], float | None]
    doubt: Callable[[float], str | None] = _always


def unit(z: float, error: float, theory: float = 0.0, skew: float = 0.0, excess: float = 0.0) -> Finding:
    """A standardised sum, nearly normal under the theory, of known skewness and excess kurtosis.

    The estimate is theory + z·error. The matched chi-square has an excess of its own; what is above it lifts the tail.
    """
    more = max(excess - 1.5 * skew * skew, 0.0)
    log_p = min(0.0, _falling(lambda x: tails.two_sided(*tails.pearson3(x, skew)) + tails.lift(x, more), z))
    return Finding(theory, theory + z * error, error, log_p, lambda level: power.shift(level, error, abs(skew), excess))


def normal_mean(off: float, mu: float, sd: float, n: int) -> Finding:
    """The mean of n independent normals of known standard deviation, which is off by `off` from `mu`: exact."""
    error = sd / math.sqrt(n)
    return Finding(mu, mu + off, error, tails.normal(off / error), lambda level: power.shift(level, error))


def variance(s2: float, sigma2: float, dof: int) -> Finding:
    """A normal sample variance `s2` of `dof` degrees of freedom: exact (chi-square)."""
    log_p = tails.two_sided(*tails.chi_square(dof * s2 / sigma2, dof))
    error = sigma2 * math.sqrt(2 / dof)
    return Finding(sigma2, s2, error, log_p, lambda level: power.variance(level, sigma2, dof))


def ratio(a: float, m: int, b: float, n: int) -> Finding:
    """Two independent chi-squares of m and n degrees of freedom, each divided by these: exact (Fisher's law)."""
    f = (a / m) / (b / n) if b > 0 else math.inf
    weights, dof = (1.0 / m, -f / n), (m, n)
    log_p = tails.two_sided(*tails.weighted_chi_squares(0.0, weights, dof)) if math.isfinite(f) else -math.inf
    error = math.sqrt(2 / m + 2 / n)
    return Finding(1.0, f, error, log_p, lambda level: power.ratio(level, m, n))


def evenness(a: float, m: int, b: float, n: int) -> Finding:
    """Whether `a` is smaller than chance leaves it, beside `b`: as `ratio`, but small ratios alone depart; exact."""
    f = (a / m) / (b / n) if b > 0 else 1.0
    error = math.sqrt(2 / m + 2 / n)
    return Finding(1.0, f, error, tails.ratio_below(f, m, n), lambda level: power.evenness(level, m, n))


def covariance(c: float, s1: float, s2: float, rho: float, dof: int) -> Finding:
    """A sample covariance of jointly normal pairs, standard deviations and correlation stated: exact."""
    log_p = tails.two_sided(*tails.covariance(c, s1, s2, rho, dof))
    error = s1 * s2 * math.sqrt((1 + rho * rho) / dof)
    return Finding(rho * s1 * s2, c, error, log_p, lambda level: power.covariance(level, s1, s2, rho, dof))


def quadratic(estimate: float, weights: ArrayLike, dof: int, shift: float = 0.0) -> Finding:
    """An average over `dof` paths of a quadratic form in normals with eigenvalues `weights`, plus `shift`: exact."""
    w = np.asarray(weights, dtype=float) / dof
    log_p = tails.two_sided(*tails.weighted_chi_squares(estimate - shift, w, dof))
    second, third, fourth = (float(np.sum(w**k)) * dof for k in (2, 3, 4))
    error = math.sqrt(2 * second)
    skew, excess = 8 * third / error**3, 48 * fourth / error**4
    return Finding(
        float(w.sum()) * dof + shift,
        estimate,
        error,
        log_p,
        lambda level: power.shift(level, error, abs(skew), excess),
    )


@dataclass(frozen=True)
class Sample:
    """What a central limit theorem needs of n independent numbers: mean, sd, skewness, excess kurtosis."""

    n: int
    mean: float
    sd: float
    skew: float
    excess: float

    @classmethod
    def from_powers(cls, n: int, sums: Sequence[float]) -> Sample:
        """From the sums of the first four powers."""
        m1, m2, m3, m4 = (s / n for s in sums)
        v = max(m2 - m1 * m1, 0.0)
        if v <= 0.0:
            return cls(n, m1, 0.0, 0.0, 0.0)
        sd, size = math.sqrt(v * n / max(n - 1, 1)), math.sqrt(v)
        third = m3 - 3 * m1 * m2 + 2 * m1 * m1 * m1
        fourth = m4 - 4 * m1 * m3 + 6 * m1 * m1 * m2 - 3 * m1 * m1 * m1 * m1
        skew, excess = third / size / v, fourth / v / v - 3
        if not math.isfinite(skew + excess):  # powers that no number holds: a tail as long as any
            skew, excess = math.inf, math.inf
        return cls(n, m1, sd, skew, excess)

    @property
    def gap(self) -> float:
        """The distance of the two values, where there are only two; else 0.

        Then, and only then, kurtosis = skewness² + 1 (Pearson 1916), and their shares are p q = 1/(skewness² + 4).
        """
        two = self.sd > 0 and self.excess + 2 - self.skew**2 < 1e-6 * (self.excess + 3)
        return self.sd * math.sqrt(self.skew**2 + 4) if two else 0.0

    def scaled(self, factor: float) -> Sample:
        """The same numbers times a positive factor."""
        return replace(self, mean=self.mean * factor, sd=self.sd * factor)


def sample_mean(
    sample: Sample, theory: float, sd: float | None = None, hidden: float = 0.0, times: float = 1.0
) -> Finding:
    """The mean of n independent numbers that need not be normal; `sample.mean` is relative to `theory`.

    With the theoretical `sd` the tail is that of a matched chi-square; without it, the self-normalised sum's.
    `hidden` is a skewness that the numbers may have though this sample does not show it; `times` the
    skewness that it does show is allowed for.
    """
    return _known_sd(sample, theory, sd, hidden) if sd is not None else _studentised(sample, theory, hidden, times)


def _known_sd(sample: Sample, theory: float, sd: float, hidden: float) -> Finding:
    """The skewness is that of the sample, give or take its own error, or the hidden one, whichever makes p largest.

    Given a mean that is off by z standard errors, the sample's skewness is off by (excess - 1.5 skew²) z/sqrt(n) on
    average: for numbers with short tails it is too small just when p is, and that is put back.
    """
    n, error = sample.n, sd / math.sqrt(sample.n)
    z = sample.mean / error
    z -= math.copysign(min(abs(z), sample.gap / (2 * n * error)), z)
    short, doubtful = max(1.5 * sample.skew**2 - sample.excess, 0.0), math.sqrt(6.0) / n
    excess = abs(sample.excess - 1.5 * sample.skew**2)

    def log_p(z: float) -> float:
        skew = sample.skew / math.sqrt(n) + short * z / n
        possible = skew - doubtful, skew + doubtful, math.copysign(hidden, sample.skew) / math.sqrt(n)
        sides = [tails.pearson3(z, each) for each in (possible if hidden > abs(sample.skew) else possible[:2])]
        return max(tails.two_sided(*side) for side in sides) + tails.lift(z, excess / n)

    return Finding(
        theory,
        theory + sample.mean,
        error,
        min(0.0, _falling(log_p, z)),
        lambda level: error * (power.passes(lambda z: _falling(log_p, z), level) + power.Z_POWER),
        lambda level: _few(n) or excess_doubt(excess, n, "paths")(level),
    )


def _falling(log_p: Callable[[float], float], z: float) -> float:
    """The least p that is given at z or nearer to 0: a tail never rises, but what is put on it far out may."""
    nearer = [math.copysign(x, z) for x in _PLACES if x < abs(z)]
    return min(map(log_p, [*nearer, z]))


def _studentised(sample: Sample, theory: float, hidden: float, times: float) -> Finding:
    n, error = sample.n, sample.sd / math.sqrt(sample.n)
    t = sample.mean / error
    x = t / math.sqrt((n - 1 + t * t) / n)
    log_p = tails.two_sided(*tails.self_normalised(x, times * sample.skew, n))
    gauge = times * abs(sample.skew) / (3 * math.sqrt(n))

    def doubt(level: float) -> str | None:
        if max(gauge, hidden / (3 * math.sqrt(n))) * power.needed(level) ** 3 > 1.0:
            return f"{n} paths are too few for the skewed tail that a p of {level:.1g} lies in"
        return _few(n)

    def detect(level: float) -> float:
        return error * (power.self_normalised(level, tails.SAFE * gauge) + power.Z_POWER)

    return Finding(theory, theory + sample.mean, error, log_p, detect, doubt)


def neighbours(r: float, sample: Sample, pairs: int) -> Finding:
    """The correlation of neighbouring independent numbers, given as pairs overlapping by one.

    The products of two have the square of a number's skewness, and the square of its kurtosis.
    """
    root = math.sqrt(pairs)
    skew, kurtosis = sample.skew**2, (sample.excess + 3.0) ** 2
    gauge = skew / (3 * root)

    def doubt(level: float) -> str | None:
        if gauge * power.needed(level) ** 3 > 1.0:
            return f"{pairs} pairs of paths are too few for the skewed tail that a p of {level:.1g} lies in"
        return excess_doubt(kurtosis - 9.0, pairs, "pairs of paths")(level)

    return replace(unit(r * root, 1 / root, skew=tails.SAFE * skew / root), doubt=doubt)


def _few(n: int) -> str | None:
    return f"only {n} paths and no exact law for this estimate" if n < FEW_PATHS else None


def squares(q: float, dof: int, n: int) -> Finding:
    """A sum of `dof` squared unit normals; the estimate is the root mean square departure a case (n cases)."""
    log_p = tails.chi_square(q, dof)[0]
    return Finding(
        0.0,
        math.sqrt(max(q - dof, 0.0) / n),
        math.sqrt(math.sqrt(2 * dof) / n),
        log_p,
        lambda level: math.sqrt(power.chi_square(level, dof) / n),
    )


def excess_doubt(excess: float, n: int, what: str) -> Callable[[float], str | None]:
    """Doubt for a sum of n terms whose excess kurtosis is not part of the p (Edgeworth's next term)."""

    def doubt(level: float) -> str | None:
        if excess * power.needed(level) ** 4 / (24 * n) > _TRUSTED:
            return f"{n} {what} are too few for the tail that a p of {level:.1g} lies in"
        return None

    return doubt


def with_doubt(finding: Finding, doubt: Callable[[float], str | None]) -> Finding:
    return replace(finding, doubt=doubt)


def of_scale(finding: Finding) -> Finding:
    """The finding of a spread, whose estimate is the less certain the larger it is."""
    error, theory, plain = finding.standard_error, finding.theory, finding.detect

    def detect(level: float) -> float | None:
        shift = plain(level)
        return None if shift is None else power.of_scale(shift, error, theory)

    return replace(finding, detect=detect)


def of_products(finding: Finding, sample: Sample, times: float = 1.0, wider: float = 1.0) -> Finding:
    """The finding of a mean product without a known sd: no size is promised where what departs could be too skewed.

    Products of values that follow each other more closely are more skewed than those that were seen, and `wider`.
    """
    gauge, plain = _STEADY * times * abs(sample.skew) / (3 * math.sqrt(sample.n)), finding.detect

    def detect(level: float) -> float | None:
        size = plain(level)
        return None if size is None or gauge * power.needed(level) ** 3 > 1.0 else wider * size

    return replace(finding, detect=detect)


def reach_of_worst(level: float, n: int) -> float:
    """Size in standard errors that the worst of n independent statistics finds 9 times in 10."""
    return power.shift(-math.expm1(math.log1p(-level) / n), 1.0)


def worst(log_ps: NDArray) -> float:
    """log p of the smallest of independent exact p-values (Sidak 1967)."""
    return of_many(float(np.min(log_ps)), log_ps.size)


def of_many(log_p: float, n: int) -> float:
    """log of 1 − (1 − p)^n: of the smallest of n independent exact p-values, where log p is its logarithm."""
    if log_p > -30:
        return math.log(-math.expm1(n * math.log1p(-math.exp(log_p)))) if log_p < 0 else 0.0
    return min(0.0, log_p + math.log(n))


def anderson_darling(u: NDArray) -> Finding:
    """Uniforms against the uniform law. Theory is the expected A² = 1; 0.7611 its standard deviation."""
    return darling(tails.anderson_darling_statistic(u), u.size)


def darling(a2: float, n: int) -> Finding:
    """A² of n uniforms.

    Few of them have a longer tail than the limit law's: by 0.5/n of it at p = 0.01 (Marsaglia & Marsaglia 2004), by
    1.6/n at 1e-4 (tests/studies/calibration.py); 2/n is allowed for.
    """

    def detect(level: float) -> float:
        # A shift sends sqrt(n) times its first Legendre coefficient into the leading chi-square, of weight 1/2.
        reach = math.sqrt(2 * (-math.log(level) + 0.5)) + power.Z_POWER
        return reach * reach / 2

    return Finding(1.0, a2, 0.7611, min(0.0, tails.anderson_darling(a2) + math.log1p(2 / n)), detect)


def kolmogorov(distance: float, n: int) -> Finding:
    """The largest gap between an empirical and the stated distribution function."""
    expected = 0.8687311606 / math.sqrt(n)  # sqrt(pi/2) log 2, the mean of the limit law
    return Finding(0.0, distance, expected, tails.kolmogorov(distance, n), lambda level: power.gap(level, n))


def share(k: int, n: int, p: float) -> Finding:
    """k of n independent cases, each of probability p: exact (binomial)."""
    from scipy.special import bdtr, bdtrc

    def log(tail: float, side: float) -> float:
        return math.log(tail) if tail > 1e-290 else -n * _divergence(side, p)

    upper, lower = log(float(bdtrc(k - 1, n, p)) if k else 1.0, k / n), log(float(bdtr(k, n, p)), k / n)
    return Finding(
        p,
        k / n,
        math.sqrt(p * (1 - p) / n),
        tails.two_sided(upper, lower),
        lambda level: power.share(level, p, n),
    )


def _divergence(a: float, p: float) -> float:
    """Relative entropy of two coins, the exponent of Chernoff's bound."""
    total = a * math.log(a / p) if a > 0 else 0.0
    return total + ((1 - a) * math.log((1 - a) / (1 - p)) if a < 1 else 0.0)
