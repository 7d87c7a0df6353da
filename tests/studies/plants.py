"""For every check that prints a smallest departure: a departure of exactly that size, planted by a parameter.

A plant says which row of a verdict it is about, what the spec states, and how to draw values that depart by `size`,
in the unit of that row's estimate. How a size becomes a parameter is worked out from the law of the values alone:
by hand, by SciPy's laws, by quadrature, or by sending a covariance through the linear filter that makes the errors.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from scipy import integrate, optimize, stats

from tests.studies.departures import Values, draw, spec_of

PATHS, STEPS = 500, 200
Planter = Callable[[float, int, int, int], Any]  # size, seed, paths, steps -> values, or an ensemble


@dataclass(frozen=True)
class Plant:
    """A row of the verdict on `stated`, and how to draw values that depart from it by a given size."""

    what: str
    probe: str
    stated: Any
    plant: Planter
    series: str = "x"
    by: str = ""  # the parameter that is planted, in words
    shape: tuple[int, int] = (PATHS, STEPS)
    whole: bool = False  # planted is an ensemble, to be judged by all of `validate`


def drawn(body_of: Callable[[float], Any]) -> Planter:
    """Values of the spec that a size turns into."""
    return lambda size, seed, paths, steps: draw(spec_of(body_of(size), paths, steps, seed))


def spoilt(stated: Any, change: Callable[[np.ndarray, float, np.random.Generator], np.ndarray]) -> Planter:
    """Values of the stated spec, changed by hand in series x."""

    def plant(size: float, seed: int, paths: int, steps: int) -> Values:
        values = draw(spec_of(stated, paths, steps, seed))
        values["x"] = change(values["x"], size, np.random.default_rng(seed))
        return values

    return plant


def noise(sd: float = 1.0, level: float = 0.0, law: Any = "normal") -> list[Any]:
    return [{"constant": level}, {"white_noise": {"sd": sd, "law": law}}]


def ar(phi: float = 0.6, total_sd: float = 1.0, level: float = 0.0, law: Any = "normal") -> list[Any]:
    return [{"constant": level}, {"ar": {"phi": phi, "total_sd": total_sd, "law": law}}]


def t(df: float) -> dict[str, Any]:
    return {"student_t": {"df": df}}


def ma_of(correlation: float, lag: int = 1) -> list[Any]:
    """White noise with this correlation at one lag, variance 1."""
    theta = (1 - math.sqrt(1 - 4 * correlation**2)) / (2 * correlation)
    return [{"constant": 0}, {"ma": {"theta": [0.0] * (lag - 1) + [theta], "total_sd": 1}}]


def across(x: np.ndarray, correlation: float, axis: int = 0) -> np.ndarray:
    """Each row mixed with the one before it, so that neighbours correlate and nothing else changes."""
    theta = (1 - math.sqrt(1 - 4 * correlation**2)) / (2 * correlation)
    return (x + theta * np.roll(x, 1, axis=axis)) / math.sqrt(1 + theta**2)


def _halves(x: np.ndarray, size: float, axis: int) -> np.ndarray:
    """+size and -size in turn along an axis, in the shape of x."""
    signs = size * (1.0 - 2.0 * (np.arange(x.shape[axis]) % 2))
    return signs[:, None] if axis == 0 else signs[None, :]


def shifted(x: np.ndarray, size: float, axis: int) -> np.ndarray:
    return x + _halves(x, size, axis)


def evened(x: np.ndarray, size: float) -> np.ndarray:
    """The paths' mean at each step drawn to 0: its variance is 1 - size times what it was, as if some were mirrored."""
    return x - (1 - math.sqrt(1 - size)) * x.mean(axis=0)


def begun(x: np.ndarray, size: float) -> np.ndarray:
    """The first two values made wider, so that the mean of y² / (1 + y²) is larger by `size` there; sd 1."""

    def more(factor: float) -> float:
        return float(np.mean((factor * x) ** 2 / (1 + (factor * x) ** 2) - x**2 / (1 + x**2))) - size

    out = x.copy()
    out[:, :2] *= optimize.brentq(more, 1.0, 50.0)
    return out


def alike_at_first(x: np.ndarray, size: float, steps: int = 12) -> np.ndarray:
    """Mean squares of the first steps drawn to 1, so that l² / (1 + l²) of their log l is less by `size`; sd 1."""
    log = np.log(np.square(x[:, :steps]).mean(axis=1))

    def less(share: float) -> float:
        near = np.square((1 - share) * log)
        return float(np.mean(log**2 / (1 + log**2) - near / (1 + near))) - size

    out = x.copy()
    out[:, :steps] *= np.exp(-0.5 * optimize.brentq(less, 0.0, 1.0) * log)[:, None]
    return out


def followed(x: np.ndarray, size: float, rng: np.random.Generator) -> np.ndarray:
    """Poisson counts of mean 5 whose normal scores, spread over the chance of a count, follow the count before.

    What spreads them knows nothing of it, so that scores follow by the variance of their means by count less.
    """
    counts = np.arange(60)
    ends = stats.norm.ppf(stats.poisson.cdf(np.array([counts - 1, counts]), 5))
    chance = stats.poisson.pmf(counts, 5)
    means = np.diff(-stats.norm.pdf(ends), axis=0)[0] / np.maximum(chance, 1e-300)
    slope = size / float(np.sum(np.where(chance > 1e-12, chance * means**2, 0.0)))
    out = x.copy()
    for t in range(1, x.shape[1]):
        before = np.clip((out[:, t - 1] - 5) / math.sqrt(5), -3, 3)
        out[:, t] = stats.poisson.ppf(stats.norm.cdf(rng.standard_normal(len(x)) + slope * before), 5)
    return out


def wider_by_cosine(body: Any, x: np.ndarray, size: float) -> np.ndarray:
    """Values times a factor that makes the mean cosine, by theory, less by `size`."""
    from procgen.theory import theory
    from procgen.theory.characteristic import characteristic

    known = theory(spec_of(body, 1, 10, 1))["x"]
    sd = math.sqrt(float(known.variance(np.array([5]))[0]))

    def cosine(factor: float) -> float:
        return characteristic(known.expression, [5], [factor / sd]).real

    return x * optimize.brentq(lambda factor: cosine(1.0) - cosine(factor) - size, 1.0, 3.0)


def swayed(x: np.ndarray, size: float, length: int) -> np.ndarray:
    """The mean of each stretch of so many steps made larger: the variance of its sum is 1 + size times what it was."""
    whole = x.shape[1] // length * length
    more = math.sqrt(1 + size) - 1
    out = x.copy()
    for first in range(0, whole, length):
        out[:, first : first + length] += more * x[:, first : first + length].mean(axis=1, keepdims=True)
    return out


def apart(x: np.ndarray, size: float, variance: float) -> np.ndarray:
    """Averages of paths further apart: their variance, stated as `variance`, is larger by `size`."""
    return x + (math.sqrt(1 + size / variance) - 1) * x.mean(axis=1, keepdims=True)


def widened(x: np.ndarray, size: float, axis: int) -> np.ndarray:
    """Variances 1 ± a, whose normal equivalents are of root mean square `size` a shock: (a sqrt(n/2))² = n size²."""
    return x * np.sqrt(1 + _halves(x, math.sqrt(2) * size, axis))


def lone(x: np.ndarray, size: float, what: str) -> np.ndarray:
    """Path 7 moved so that its level, spread or memory, standardised, is `size` in the middle of its law."""
    from procgen.checks.apart import spreads

    out, n = x.copy(), x.shape[1]
    if what == "level":
        out[7] += size / math.sqrt(n)
    elif what == "spread":
        typical = stats.chi2.median(n)
        more = optimize.brentq(lambda v: float(spreads(np.array([v * typical]), np.array([n]))[0]) - size, 1.0, 20.0)
        out[7] *= math.sqrt(more)
    else:
        phi = size / math.sqrt(n + 2)
        for t in range(1, n):
            out[7, t] = phi * out[7, t - 1] + math.sqrt(1 - phi**2) * x[7, t]
    return out


def sized_alike(values: Values, size: float, rng: np.random.Generator) -> Values:
    """Normal series x and y whose cluster scores have the mean product `size`: density 1 + size · s(u) s(v)."""

    def score(u: np.ndarray) -> np.ndarray:
        return math.sqrt(5) * (6 * (u - 0.5) ** 2 - 0.5)

    lean = size * score(stats.norm.cdf(values["x"]))
    y = np.empty(lean.shape)
    left = np.ones(lean.shape, dtype=bool)
    while left.any():
        v = rng.random(int(left.sum()))
        taken = rng.random(v.size) * (1 + 5 * size) < 1 + lean[left] * score(v)
        at = np.flatnonzero(left.ravel())[taken]
        y.ravel()[at] = stats.norm.ppf(v[taken])
        left.ravel()[at] = False
    return {**values, "y": y}


def missing_alike(values: Values, size: float, rng: np.random.Generator, shares: tuple[float, float]) -> Values:
    """What is missing of y follows what is missing of x so that both, 0 or 1, have the correlation `size`."""
    p, q = shares
    lean = size * math.sqrt(p * (1 - p) * q * (1 - q))
    gone = np.isnan(values["x"])
    chance = np.where(gone, q + lean / p, q - lean / (1 - p))
    y = rng.standard_normal(gone.shape)
    y[rng.random(gone.shape) < chance] = np.nan
    return {**values, "y": y}


# sizes that are worked out from a law


@lru_cache(maxsize=8)
def anderson_darling_shift(size: float, n: int, law: Any = stats.norm) -> float:
    """The shift whose n ∫ (F − G)² / (G (1 − G)) dG is `size`."""

    def excess(shift: float) -> float:
        value, _ = integrate.quad(
            lambda z: (law.cdf(z - shift) - law.cdf(z)) ** 2 / (law.cdf(z) * law.sf(z)) * law.pdf(z), -7, 7, limit=200
        )
        return n * value - size

    return float(optimize.brentq(excess, 0.0, 2.0))


@lru_cache(maxsize=8)
def score_shift(size: float, column: int, df: float, scaled: bool) -> float:
    """The shift, or log scale, of a t law at which the mean of a score component is `size`."""
    from procgen.chance.laws import LAWS
    from procgen.checks.scores import BINS, Scores

    scores = Scores(LAWS["student_t"](df=df))
    edges = scores.distribution.ppf(np.arange(BINS + 1) / BINS)

    def mean(x: float) -> float:
        moved = edges / math.exp(x) if scaled else edges - x
        return float(np.diff(scores.distribution.cdf(moved)) @ scores.components[:, column])

    sign = 1.0 if mean(0.01) > 0 else -1.0
    return float(optimize.brentq(lambda x: mean(sign * x) - size, 0.0, 1.0)) * sign


@lru_cache(maxsize=8)
def arch_alpha(size: float) -> float:
    """The arch coefficient at which cluster scores of neighbouring shocks have the mean product `size`, variance 1."""
    x, width = np.linspace(-9, 9, 1201, retstep=True)
    score = math.sqrt(5) * (6 * (stats.norm.cdf(x) - 0.5) ** 2 - 0.5)

    def product(alpha: float) -> float:
        sd = np.sqrt(1 - alpha + alpha * x * x)
        kernel = stats.norm.pdf(x[None, :], scale=sd[:, None]) * width  # from row to column
        density = stats.norm.pdf(x) * width
        for _ in range(200):
            density = density @ kernel
        density /= density.sum()
        return float((density * score) @ kernel @ score)

    return float(optimize.brentq(lambda alpha: product(alpha) - size, 1e-4, 0.9, xtol=1e-5))


def asymmetric(x: np.ndarray, size: float, rng: np.random.Generator) -> np.ndarray:
    """Normal shocks made wider after positive ones, so that score of size times earlier shock is `size` on average."""
    nodes, weights = np.polynomial.hermite_e.hermegauss(60)
    weights = weights / weights.sum()

    def product(kappa: float) -> float:
        at = np.exp(kappa * nodes - kappa**2)
        u = stats.norm.cdf(nodes[:, None] * at[None, :])
        mean = weights @ (math.sqrt(5) * (6 * (u - 0.5) ** 2 - 0.5))
        return float((weights * nodes) @ mean) * float(weights @ at)

    kappa = optimize.brentq(lambda k: product(k) - size, 1e-5, 0.4)
    out = x.copy()
    out[:, 1:] *= np.exp(kappa * x[:, :-1] - kappa**2)
    return out


def shaped(x: np.ndarray, size: float, rng: np.random.Generator) -> np.ndarray:
    """Normal scores of uniforms whose density is 1 + size · h, h a unit function that is neither level nor spread."""
    from procgen.chance.laws import LAWS
    from procgen.checks.scores import BINS, Scores

    density = 1 + size * Scores(LAWS["normal"]()).components[:, 3]
    edges = np.concatenate([[0.0], np.cumsum(density) / BINS])
    return stats.norm.ppf(np.interp(rng.random(x.shape), edges, np.arange(BINS + 1) / BINS))


def error_moments(stated: Any, drawn_body: Any, steps: int) -> tuple[float, float, float]:
    """Mean a unit of level, variance, and lag-1 product of the prediction errors of `stated` on values of another spec.

    Errors are a linear map of the values: its matrix comes from unit paths, its moments from the values' covariance.
    """
    from procgen.checks.planning import plan_of
    from procgen.terms.graph import build
    from procgen.theory import theory

    route = plan_of(spec_of(stated, 8, steps, 1)).routes["x"]
    unit, at = np.eye(steps), np.arange(steps)
    mean = theory(spec := spec_of(drawn_body, 8, steps, 1), build(spec))["x"].mean(at)
    base, _ = route.tile(np.zeros((steps, steps)), route.start(0, steps), 0, 0)
    matrix = route.tile(unit, route.start(0, steps), 0, 0)[0] - base
    gamma = theory(spec, build(spec))["x"].covariance(at[:, None], at[None, :])
    errors = matrix @ gamma @ matrix.T
    offset = matrix @ mean + base[:, 0]
    return (
        float(np.mean(offset)),
        float(np.mean(np.diag(errors) + offset**2)),
        float(np.mean(np.diag(errors, 1) + offset[1:] * offset[:-1])),
    )


def solve(wanted: float, of: Callable[[float], float], low: float, high: float) -> float:
    return float(optimize.brentq(lambda x: of(x) - wanted, low, high, xtol=1e-7))
