"""The cases of the study of calibration: one kind of check each, on the numbers that are hardest for it.

Numbers are drawn by NumPy, never by this project; sums with a known law are drawn from that law.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.chance.laws import LAWS
from procgen.checks import judge, judge_shocks
from procgen.checks.judge import Finding, Sample
from procgen.checks.scores import BINS, Scores, cluster_scores
from procgen.checks.shocks import ShockSums
from tests.studies.calibration import Case, Findings, far

Rng = np.random.Generator
Draw = Callable[[Rng, tuple[int, ...]], NDArray]

# what is drawn: mean 0 and variance 1


def normal(rng: Rng, shape: tuple[int, ...]) -> NDArray:
    return rng.standard_normal(shape)


def exponential(rng: Rng, shape: tuple[int, ...]) -> NDArray:
    return rng.standard_exponential(shape) - 1


def uniform(rng: Rng, shape: tuple[int, ...]) -> NDArray:
    return math.sqrt(12) * (rng.random(shape) - 0.5)


def laplace(rng: Rng, shape: tuple[int, ...]) -> NDArray:
    return rng.laplace(scale=math.sqrt(0.5), size=shape)


def lognormal(sigma: float) -> Draw:
    mean = math.exp(sigma**2 / 2)
    sd = mean * math.sqrt(math.expm1(sigma**2))
    return lambda rng, shape: (np.exp(sigma * rng.standard_normal(shape)) - mean) / sd


def student(df: float) -> Draw:
    return lambda rng, shape: rng.standard_t(df, shape) * math.sqrt((df - 2) / df)


def rare(share: float) -> Draw:
    """1 with a small probability, else 0: a flag."""
    sd = math.sqrt(share * (1 - share))
    return lambda rng, shape: ((rng.random(shape) < share) - share) / sd


def garch(alpha: float, beta: float) -> Draw:
    """The 40th value of garch(1,1) paths from the mean variance: skewed in no way, with long tails."""

    def draw(rng: Rng, shape: tuple[int, ...]) -> NDArray:
        h = np.ones(shape)
        for _ in range(40):
            x = np.sqrt(h) * rng.standard_normal(shape)
            h = 1 - alpha - beta + alpha * x * x + beta * h
        return x

    return draw


# means over paths


def sample_findings(y: NDArray, sd: float | None, hidden: float = 0.0) -> Iterator[Finding]:
    """Findings of the means of the rows of y, which have mean 0."""
    n = y.shape[1]
    square = y * y
    powers = (
        y.sum(axis=1),
        square.sum(axis=1),
        np.einsum("ij,ij->i", square, y),
        np.einsum("ij,ij->i", square, square),
    )
    sums = np.array(powers).T
    spread = np.sqrt(sums[:, 1]) if sd is None else sd * math.sqrt(n)
    for row in sums[far(sums[:, 0] / spread)].tolist():
        sample = Sample.from_powers(n, row)
        if sample.sd > 0:
            yield judge.sample_mean(sample, 0.0, sd, hidden)


def mean_of(draw: Draw, n: int, known: bool) -> Findings:
    return lambda rng, count: sample_findings(draw(rng, (count, n)), 1.0 if known else None)


def squares_of(draw: Draw, n: int, excess: float | None) -> Findings:
    """A variance over paths: mean of y² − 1, its sd known from the excess kurtosis, or not."""
    sd = None if excess is None else math.sqrt(excess + 2)
    return lambda rng, count: sample_findings(draw(rng, (count, n)) ** 2 - 1, sd)


def slope_of(draw: Draw, n: int, skew: float) -> Findings:
    """The slope of a value on an independent one, as between two series of a known law of this skewness."""

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        return sample_findings(draw(rng, (count, n)) * draw(rng, (count, n)), None, skew**2)

    return findings


# exact laws


def variance(dof: int) -> Findings:
    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        s2 = rng.chisquare(dof, count) / dof
        for value in s2[far((s2 - 1) * math.sqrt(dof / 2))].tolist():
            yield judge.variance(value, 1.0, dof)

    return findings


def covariance(rho: float, n: int) -> Findings:
    """Given the first series' squares, the covariance is normal."""

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        q = rng.chisquare(n, count)
        c = (rho * q + math.sqrt(1 - rho * rho) * np.sqrt(q) * rng.standard_normal(count)) / n
        for value in c[far((c - rho) / math.sqrt((1 + rho * rho) / n))].tolist():
            yield judge.covariance(value, 1.0, 1.0, rho, n)

    return findings


def quadratic(n: int, steps: int = 12, phi: float = 0.7) -> Findings:
    """The average of x(t) x(t−1) over steps and paths of an AR(1), by its eigenvalues."""
    gamma = phi ** np.abs(np.subtract.outer(np.arange(steps), np.arange(steps)))
    form = (np.eye(steps, k=1) + np.eye(steps, k=-1)) / (2 * (steps - 1))
    root = np.linalg.cholesky(gamma)
    weights = np.linalg.eigvalsh(root.T @ form @ root)
    sd = math.sqrt(2 * float(weights @ weights) / n)

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        x = np.empty((steps, count, n))
        x[0] = rng.standard_normal((count, n))
        for t in range(1, steps):
            x[t] = phi * x[t - 1] + math.sqrt(1 - phi * phi) * rng.standard_normal((count, n))
        seen = np.einsum("tcn,tcn->c", x[1:], x[:-1]) / (n * (steps - 1))
        for value in seen[far((seen - weights.sum()) / sd)].tolist():
            yield judge.quadratic(value, weights, n)

    return findings


def share(p: float, n: int) -> Findings:
    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        k = rng.binomial(n, p, count)
        for value, times in Counter(k[far((k - n * p) / math.sqrt(n * p * (1 - p)))].tolist()).items():
            finding = judge.share(value, n, p)
            yield from (finding for _ in range(times))

    return findings


def law(n: int, test: Callable[[NDArray], Finding]) -> Findings:
    return lambda rng, count: (test(row) for row in rng.random((count, n)))


def gap(u: NDArray) -> Finding:
    n = u.size
    u = np.sort(u)
    at = np.arange(1, n + 1) / n
    return judge.kolmogorov(float(max((at - u).max(), (u - at + 1 / n).max())), n)


def squares(dof: int) -> Findings:
    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        q = rng.chisquare(dof, count)
        for value in q[far((q - dof) / math.sqrt(dof / 2))].tolist():
            yield judge.squares(value, dof, 1000)

    return findings


# recovered shocks: the real checks on sums that are drawn directly


def sums_of(name: str, parameters: dict[str, Any], n: int) -> ShockSums:
    sums = ShockSums(Scores(LAWS[name](**parameters)), n)
    sums.n = n
    sums.counts[:] = 1
    return sums


def shock_moment(name: str, parameters: dict[str, Any], draw: Draw, n: int, order: int) -> Findings:
    """The mean (order 1) or variance (order 2) of n shocks of a law."""
    sums = sums_of(name, parameters, n)
    kurtosis = float(sums.scores.law.moment(4) or 3)

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        z = draw(rng, (count, n))
        total, square = z.sum(axis=1), np.einsum("ij,ij->i", z, z)
        unit = total / math.sqrt(n) if order == 1 else (square - n) / math.sqrt(n * (kurtosis - 1))
        for i in far(unit):
            sums.sums[:] = total[i], square[i]
            checks = list(judge_shocks._level_and_spread("x", sums, ""))
            yield from (c.finding for c in checks[order - 1 : order] if c.finding and "score" not in c.what)

    return findings


def component(name: str, parameters: dict[str, Any], n: int, order: int) -> Findings:
    """The level score (0), the spread score (1) of n shocks, or what is left of the shape of their law (2)."""
    scores = Scores(LAWS[name](**parameters))
    table = scores.components

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        bins = rng.integers(0, BINS, (count, n))
        if order == 2:
            s = np.array([table[:, k][bins].sum(axis=1) for k in range(2, table.shape[1])]) / math.sqrt(n)
            q = np.einsum("kc,kc->c", s, s)
            for value in q[q > 12].tolist():
                yield judge_shocks.shape_finding(value, len(s), n)
        else:
            z = table[:, order][bins].sum(axis=1) / math.sqrt(n)
            for value in z[far(z)].tolist():
                yield judge_shocks.score_finding(value, n, scores, order)

    return findings


def products(steps: int, paths: int, lag: int) -> Findings:
    """The autocorrelation of normal scores."""
    chains = Counter({steps: paths})
    pairs = (steps - lag) * paths

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        g = rng.standard_normal((steps, paths, count))
        total = np.einsum("tpc,tpc->c", g[lag:], g[:-lag])
        for value in total[far(total / math.sqrt(pairs))].tolist():
            yield judge_shocks._lag_finding(chains, lag, pairs, value)

    return findings


def many_products(pairs: int) -> Findings:
    """As many products, each of two normals of its own."""

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        total = np.sqrt(rng.chisquare(pairs, count)) * rng.standard_normal(count)
        for value in total[far(total / math.sqrt(pairs))].tolist():
            yield judge_shocks._lag_finding(Counter({2: pairs}), 1, pairs, value)

    return findings


def clustering(n: int, paths: int, asymmetric: bool = False) -> Findings:
    from scipy.special import ndtr

    judged = judge_shocks.asymmetry_finding if asymmetric else judge_shocks.cluster_finding

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        g = rng.standard_normal((n, paths * count))
        s = cluster_scores(ndtr(g))
        total = np.einsum("tc,tc->c", s[1:], (g if asymmetric else s)[:-1]).reshape(count, paths).sum(axis=1)
        pairs = (n - 1) * paths
        for value in total[far(total / math.sqrt(pairs))].tolist():
            yield judged(pairs, value)

    return findings


def paths_side_by_side(draw: Draw, n: int) -> Findings:
    """The correlation of neighbouring paths' averages."""

    def findings(rng: Rng, count: int) -> Iterator[Finding]:
        y = draw(rng, (count, n))
        mean, second = y.mean(axis=1), np.einsum("ij,ij->i", y, y) / n
        total = np.einsum("ij,ij->i", y[:, 1:], y[:, :-1])
        r = (total / (n - 1) - mean**2) / ((second - mean**2) * n / (n - 1))
        for i in far(r * math.sqrt(n - 1)):
            sample = Sample.from_powers(n, [float((y[i] ** k).sum()) for k in (1, 2, 3, 4)])
            yield judge.neighbours(float(r[i]), sample, n - 1)

    return findings


_T5, _GAMMA = {"df": 5}, {"shape": 1.0}

CASES = (
    Case("variance, 30 normal paths", 4_000_000, variance(29)),
    Case("variance, 200 normal paths", 4_000_000, variance(199)),
    Case("covariance, 30 normal pairs, ρ 0", 2_000_000, covariance(0.0, 29)),
    Case("covariance, 30 normal pairs, ρ −0.9", 2_000_000, covariance(-0.9, 29)),
    Case("covariance, 200 normal pairs, ρ 0.6", 2_000_000, covariance(0.6, 199)),
    Case("autocovariance over steps, 30 normal paths", 1_000_000, quadratic(30), 12 * 30),
    Case("share below 1 %, 200 paths", 4_000_000, share(0.01, 200)),
    Case("share below 99 %, 2,000 paths", 4_000_000, share(0.99, 2000)),
    Case("law: Anderson–Darling, 8 values", 200_000, law(8, judge.anderson_darling), 8),
    Case("law: Anderson–Darling, 100 values", 200_000, law(100, judge.anderson_darling), 100),
    Case("law: Kolmogorov, 100 values", 100_000, law(100, gap), 100),
    Case("mean, sd known, 100 exponentials", 4_000_000, mean_of(exponential, 100, True), 100),
    Case("mean, sd known, 100 lognormals (σ 0.5)", 2_000_000, mean_of(lognormal(0.5), 100, True), 100),
    Case("mean, sd known, 100 lognormals (σ 1)", 2_000_000, mean_of(lognormal(1.0), 100, True), 100),
    Case("mean, sd known, 1,000 lognormals (σ 1)", 400_000, mean_of(lognormal(1.0), 1000, True), 1000),
    Case("mean, sd known, 100 of t(4)", 2_000_000, mean_of(student(4), 100, True), 100),
    Case("mean, sd known, 100 of garch (0.14, 0.81)", 400_000, mean_of(garch(0.14, 0.81), 100, True), 100),
    Case("mean, sd known, 100 flags of share 0.02", 2_000_000, mean_of(rare(0.02), 100, True), 100),
    Case("mean, sd known, 2,000 flags of share 0.02", 200_000, mean_of(rare(0.02), 2000, True), 2000),
    Case("mean, sd unknown, 100 exponentials", 4_000_000, mean_of(exponential, 100, False), 100),
    Case("mean, sd unknown, 100 lognormals (σ 1)", 2_000_000, mean_of(lognormal(1.0), 100, False), 100),
    Case("mean, sd unknown, 1,000 lognormals (σ 1)", 400_000, mean_of(lognormal(1.0), 1000, False), 1000),
    Case("mean, sd unknown, 100 of t(4)", 2_000_000, mean_of(student(4), 100, False), 100),
    Case("mean, sd unknown, 100 flags of share 0.02", 2_000_000, mean_of(rare(0.02), 100, False), 100),
    Case("mean, sd unknown, 2,000 flags of share 0.02", 200_000, mean_of(rare(0.02), 2000, False), 2000),
    Case("variance, sd known, 100 uniforms", 4_000_000, squares_of(uniform, 100, -1.2), 100),
    Case("variance, sd known, 100 of Laplace", 2_000_000, squares_of(laplace, 100, 3.0), 100),
    Case("variance, sd known, 2,000 of Laplace", 200_000, squares_of(laplace, 2000, 3.0), 2000),
    Case("variance, sd known, 2,000 exponentials", 200_000, squares_of(exponential, 2000, 6.0), 2000),
    Case("variance, sd known, 2,000 of t(7)", 200_000, squares_of(student(7), 2000, 2.0), 2000),
    Case("variance, sd known, 2,000 of garch (0.10, 0.80)", 50_000, squares_of(garch(0.1, 0.8), 2000, 0.75), 2000),
    Case("variance, sd unknown, 200 of Laplace", 2_000_000, squares_of(laplace, 200, None), 200),
    Case("variance, sd unknown, 2,000 of t(7)", 200_000, squares_of(student(7), 2000, None), 2000),
    Case("slope between series, 100 of Laplace", 2_000_000, slope_of(laplace, 100, 0.0), 100),
    Case("slope between series, 100 exponentials", 2_000_000, slope_of(exponential, 100, 2.0), 100),
    Case("slope between series, 2,000 lognormals (σ 1)", 200_000, slope_of(lognormal(1.0), 2000, 6.18), 2000),
    Case("neighbouring paths, 100 normal averages", 2_000_000, paths_side_by_side(normal, 100), 100),
    Case("neighbouring paths, 100 exponentials", 2_000_000, paths_side_by_side(exponential, 100), 100),
    Case("neighbouring paths, 100 lognormals (σ 1)", 2_000_000, paths_side_by_side(lognormal(1.0), 100), 100),
    Case("shocks: mean, 50 of Laplace", 2_000_000, shock_moment("laplace", {}, laplace, 50, 1), 50),
    Case("shocks: mean, 50 uniforms", 2_000_000, shock_moment("uniform", {}, uniform, 50, 1), 50),
    Case("shocks: mean, 50 exponentials", 2_000_000, shock_moment("gamma", _GAMMA, exponential, 50, 1), 50),
    Case("shocks: mean, 2,000 of t(9)", 200_000, shock_moment("student_t", {"df": 9}, student(9), 2000, 1), 2000),
    Case("shocks: variance, 2,000 of t(9)", 200_000, shock_moment("student_t", {"df": 9}, student(9), 2000, 2), 2000),
    Case("shocks: mean, 2,000 of t(5)", 200_000, shock_moment("student_t", _T5, student(5), 2000, 1), 2000),
    Case("shocks: variance, 50 uniforms", 2_000_000, shock_moment("uniform", {}, uniform, 50, 2), 50),
    Case("shocks: variance, 50 of Laplace", 2_000_000, shock_moment("laplace", {}, laplace, 50, 2), 50),
    Case("shocks: variance, 2,000 of Laplace", 200_000, shock_moment("laplace", {}, laplace, 2000, 2), 2000),
    Case("shocks: variance, 2,000 exponentials", 200_000, shock_moment("gamma", _GAMMA, exponential, 2000, 2), 2000),
    Case("shocks: level score, 30 of t(5)", 4_000_000, component("student_t", _T5, 30, 0), 30),
    Case("shocks: spread score, 30 of t(5)", 4_000_000, component("student_t", _T5, 30, 1), 30),
    Case("shocks: spread score, 1,000 of t(5)", 200_000, component("student_t", _T5, 1000, 1), 1000),
    Case("shocks: shape of the law, 200 normals", 1_000_000, component("normal", {}, 200, 2), 1200),
    Case("shocks: shape of the law, 2,000 normals", 50_000, component("normal", {}, 2000, 2), 12_000),
    Case("shocks: autocorrelation, 20 steps, 2 paths", 4_000_000, products(20, 2, 1), 40),
    Case("shocks: autocorrelation, 5,000 products", 10_000_000, many_products(5000)),
    Case("shocks: clustering, 60 steps", 4_000_000, clustering(60, 1), 60),
    Case("shocks: clustering, 20 steps, 30 paths", 500_000, clustering(20, 30), 600),
    Case("shocks: clustering, 2,000 steps", 200_000, clustering(2000, 1), 2000),
    Case("shocks: asymmetric clustering, 60 steps", 4_000_000, clustering(60, 1, True), 60),
    Case("shocks: asymmetric clustering, 20 steps, 30 paths", 500_000, clustering(20, 30, True), 600),
    Case("sums of 6 squares", 4_000_000, squares(6)),
)
