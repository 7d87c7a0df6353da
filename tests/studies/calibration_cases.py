"""The cases of the study of calibration: one kind of check each, on the numbers that are hardest for it.

Numbers are drawn by NumPy, never by this project; sums with a known law are drawn from that law.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.checks import judge, masks, ordered
from procgen.checks.judge import Finding, Sample
from procgen.checks.squares import hidden
from procgen.checks.start import BLOCK, differences, from_one
from tests.studies.calibration import Case, Findings, far, of_one_number
from tests.studies.calibration_draws import (
    Draw,
    Rng,
    exponential,
    garch,
    laplace,
    lognormal,
    normal,
    nothing,
    rare,
    student,
    uniform,
)
from tests.studies.calibration_shocks import (
    between_series,
    by_path,
    by_phase,
    clustering,
    component,
    farthest_of,
    longer_lags,
    many_products,
    products,
    shape,
    shock_moment,
    sizes_together,
    worst_path,
)

# means over paths


def sample_findings(
    y: NDArray, sd: float | None, hidden: float = 0.0, times: float = 1.0
) -> Iterator[tuple[Finding, int]]:
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
            yield judge.sample_mean(sample, 0.0, sd, hidden, times), 1


def mean_of(draw: Draw, n: int, known: bool) -> Findings:
    return lambda rng, count: sample_findings(draw(rng, (count, n)), 1.0 if known else None)


def squares_of(draw: Draw, n: int, excess: float | None) -> Findings:
    """A variance over paths: mean of y² − 1, its sd known from the excess kurtosis, or not."""
    sd = None if excess is None else math.sqrt(excess + 2)
    return lambda rng, count: sample_findings(draw(rng, (count, n)) ** 2 - 1, sd)


def slope_of(draw: Draw, n: int, skew: float) -> Findings:
    """The slope of a value on an independent one, as between two series of a known law of this skewness."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        return sample_findings(draw(rng, (count, n)) * draw(rng, (count, n)), None, skew**2)

    return findings


def later_slope(draw: Draw, n: int, steps: int, lag: int) -> Findings:
    """The slope of values on those `lag` steps earlier, averaged over steps, of numbers that are independent."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        x = draw(rng, (steps, count, n))
        return sample_findings(np.einsum("tcn,tcn->cn", x[lag:], x[:-lag]) / (steps - lag), None)

    return findings


def halves_slope(draw: Draw, n: int, steps: int, share: float) -> Findings:
    """The slope of averages of later halves on those of earlier ones, under a level of `share` of a step's variance."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        level = math.sqrt(share) * uniform(rng, (count, n))
        a, b = (level + math.sqrt(1 - share) * draw(rng, (steps, count, n)).mean(axis=0) for _ in range(2))
        slope = share / (share + (1 - share) / steps)
        return sample_findings(a * (b - slope * a), None)

    return findings


def squares_slope(draw: Draw, n: int, steps: int) -> Findings:
    """The slope of squares on those one step earlier, averaged over steps, of numbers that are independent."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        q = draw(rng, (steps, count, n)) ** 2 - 1
        return sample_findings(np.einsum("tcn,tcn->cn", q[1:], q[:-1]) / (steps - 1), None, times=hidden(steps))

    return findings


def changes_of(draw: Draw, n: int, changes: int) -> Findings:
    """The mean square of so many changes from one number to the next, path by path."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        x = np.diff(draw(rng, (changes + 1, count, n)), axis=0)
        return sample_findings(np.einsum("tcn,tcn->cn", x, x) / changes - 2, None)

    return findings


def start_of(draw: Draw, n: int) -> Findings:
    """The sizes of two first values less those of two last ones, path by path."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        sizes = differences(draw(rng, (count * n, 2 * BLOCK)), 1.0)
        return sample_findings(sizes.reshape(count, n), None)

    return findings


def cosines_of(draw: Draw, n: int, known: float) -> Findings:
    """The mean cosine of numbers of variance 1, of which `known` is the real characteristic function at 1."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        return sample_findings(np.cos(draw(rng, (count, n))) - known, None)

    return findings


def scatter_of(draw: Draw, n: int) -> Findings:
    """How far the mean square of 12 first values is from 1, less that of four times 12 later ones, path by path."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        apart = from_one(np.square(draw(rng, (12, 5, count, n))).mean(axis=0))
        return sample_findings(apart[0] - apart[1:].mean(axis=0), None)

    return findings


# exact laws


def variance(dof: int) -> Findings:
    return of_one_number(
        lambda rng, count: rng.chisquare(dof, count) / dof,
        lambda s2: judge.variance(s2, 1.0, dof),
        1.0,
        math.sqrt(2 / dof),
    )


def ratio(m: int, n: int, judged: Any = judge.ratio) -> Findings:
    """Two variances of normals, m and n squares each, by NumPy's chi-squares."""
    return of_one_number(
        lambda rng, count: (rng.chisquare(m, count) / m) / (rng.chisquare(n, count) / n),
        lambda f: judged(max(f, 0.0) * m, m, float(n), n),
        1.0,
        math.sqrt(2 / m + 2 / n),
    )


def covariance(rho: float, n: int) -> Findings:
    """Given the first series' squares, the covariance is normal."""

    def draw(rng: Rng, count: int) -> NDArray:
        q = rng.chisquare(n, count)
        return (rho * q + math.sqrt(1 - rho * rho) * np.sqrt(q) * rng.standard_normal(count)) / n

    return of_one_number(draw, lambda c: judge.covariance(c, 1.0, 1.0, rho, n), rho, math.sqrt((1 + rho * rho) / n))


def quadratic(n: int, steps: int = 12, phi: float = 0.7) -> Findings:
    """The average of x(t) x(t−1) over steps and paths of an AR(1), by its eigenvalues."""
    gamma = phi ** np.abs(np.subtract.outer(np.arange(steps), np.arange(steps)))
    form = (np.eye(steps, k=1) + np.eye(steps, k=-1)) / (2 * (steps - 1))
    root = np.linalg.cholesky(gamma)
    weights = np.linalg.eigvalsh(root.T @ form @ root)

    def draw(rng: Rng, count: int) -> NDArray:
        x, total = rng.standard_normal((count, n)), np.zeros(count)
        for _ in range(steps - 1):
            y = phi * x + math.sqrt(1 - phi * phi) * rng.standard_normal((count, n))
            total += np.einsum("cn,cn->c", x, y)
            x = y
        return total / (n * (steps - 1))

    sd = math.sqrt(2 * float(weights @ weights) / n)
    return of_one_number(draw, lambda seen: judge.quadratic(seen, weights, n), float(weights.sum()), sd)


def share(p: float, n: int) -> Findings:
    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        k = rng.binomial(n, p, count)
        for value, times in Counter(k[far((k - n * p) / math.sqrt(n * p * (1 - p)))].tolist()).items():
            yield judge.share(value, n, p), times

    return findings


def darling(n: int) -> Findings:
    weights = (2 * np.arange(1, n + 1) - 1) / n

    def draw(rng: Rng, count: int) -> NDArray:
        u = np.sort(rng.random((count, n)), axis=1)
        return -n - (np.log(u) + np.log1p(-u[:, ::-1])) @ weights

    return of_one_number(draw, lambda a2: judge.darling(a2, n), 1.0, 0.76)


def gap(n: int) -> Findings:
    def draw(rng: Rng, count: int) -> NDArray:
        u = np.sort(rng.random((count, n)), axis=1)
        at = np.arange(1, n + 1) / n
        return np.maximum((at - u).max(axis=1), (u - at + 1 / n).max(axis=1))

    return of_one_number(
        draw, lambda d: judge.kolmogorov(min(max(d, 0.0), 1.0), n), 0.87 / math.sqrt(n), 0.26 / math.sqrt(n)
    )


def squares(dof: int) -> Findings:
    return of_one_number(
        lambda rng, count: rng.chisquare(dof, count),
        lambda q: judge.squares(max(q, 0.0), dof, 1000),
        float(dof),
        math.sqrt(2 * dof),
    )


def missing_together(n: int, share: float) -> Findings:
    """Values of two series, each missing by itself with the same chance: how many of n are missing in both."""
    chances = np.outer((share, 1.0 - share), (share, 1.0 - share)).ravel()
    beyond = np.outer((1.0 - share, -share), (1.0 - share, -share)).ravel()
    v = share * (1.0 - share)
    third, fourth = (v * (1.0 - 2.0 * share)) ** 2, (v * (1.0 - 3.0 * v)) ** 2

    def finding(total: float) -> Finding:
        sums = masks.MaskSums()
        sums.sums[0] = n, total, n * v, n * v * v, n * third, n * (fourth - 3.0 * v**4)
        return next(sums.checks("x ~ y")).finding  # type: ignore[return-value]

    return of_one_number(lambda rng, count: rng.multinomial(n, chances, count) @ beyond, finding, 0.0, math.sqrt(n) * v)


def worst_of(n: int) -> Findings:
    """The worst of n steps' levels."""

    def judged(z: float) -> Finding:
        from scipy.special import log_ndtr

        log_p = min(0.0, math.log(2) + float(log_ndtr(-abs(z))))
        return Finding(0.0, z, 1.0, judge.worst(np.append(np.zeros(n - 1), log_p)), nothing)

    return of_one_number(lambda rng, count: np.abs(rng.standard_normal((count, n))).max(axis=1), judged, 0.0, 1.0)


def paths_side_by_side(draw: Draw, n: int) -> Findings:
    """The correlation of neighbouring paths' averages."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        y = draw(rng, (count, n))
        mean, second = y.mean(axis=1), np.einsum("ij,ij->i", y, y) / n
        total = np.einsum("ij,ij->i", y[:, 1:], y[:, :-1])
        r = (total / (n - 1) - mean**2) / ((second - mean**2) * n / (n - 1))
        for i in far(r * math.sqrt(n - 1)):
            sample = Sample.from_powers(n, [float((y[i] ** k).sum()) for k in (1, 2, 3, 4)])
            yield judge.neighbours(float(r[i]), sample, n - 1), 1

    return findings


def order_of_paths(paths: int, memory: float, shift: int = 1) -> Findings:
    """Values at the ends of independent paths, in a table, compared with those of paths some places on."""

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        g = rng.standard_normal((2, count, paths))
        for a, b in zip(g[0], memory * g[0] + math.sqrt(1 - memory**2) * g[1], strict=True):
            found = ordered.along(a, b, shift)
            assert found is not None
            yield found, 1

    return findings


_T5, _GAMMA = {"df": 5}, {"shape": 1.0}

CASES = (
    Case("variance, 30 normal paths", 10_000_000, variance(29)),
    Case("variance, 200 normal paths", 10_000_000, variance(199)),
    Case("covariance, 30 normal pairs, ρ 0", 10_000_000, covariance(0.0, 29)),
    Case("covariance, 30 normal pairs, ρ −0.9", 10_000_000, covariance(-0.9, 29)),
    Case("covariance, 200 normal pairs, ρ 0.6", 10_000_000, covariance(0.6, 199)),
    Case("autocovariance over steps, 30 normal paths", 1_000_000, quadratic(30), 12 * 30),
    Case("share below 1 %, 200 paths", 4_000_000, share(0.01, 200)),
    Case("share below 99 %, 2,000 paths", 4_000_000, share(0.99, 2000)),
    Case("law: Anderson–Darling, 8 values", 2_000_000, darling(8), 8),
    Case("law: Anderson–Darling, 100 values", 2_000_000, darling(100), 100),
    Case("law: Kolmogorov, 100 values", 1_000_000, gap(100), 100),
    Case("mean, sd known, 100 exponentials", 4_000_000, mean_of(exponential, 100, True), 100),
    Case("mean, sd known, 100 lognormals (σ 0.5)", 2_000_000, mean_of(lognormal(0.5), 100, True), 100),
    Case("mean, sd known, 100 lognormals (σ 1)", 2_000_000, mean_of(lognormal(1.0), 100, True), 100),
    Case("mean, sd known, 1,000 lognormals (σ 1)", 400_000, mean_of(lognormal(1.0), 1000, True), 1000),
    Case("mean, sd known, 100 of t(4)", 2_000_000, mean_of(student(4), 100, True), 100),
    Case("mean, sd known, 100 of garch (0.14, 0.81)", 400_000, mean_of(garch(0.14, 0.81), 100, True), 4000),
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
    Case("variance, sd known, 2,000 of garch (0.10, 0.80)", 50_000, squares_of(garch(0.1, 0.8), 2000, 0.75), 80_000),
    Case("variance, sd unknown, 200 of Laplace", 2_000_000, squares_of(laplace, 200, None), 200),
    Case("variance, sd unknown, 2,000 of t(7)", 200_000, squares_of(student(7), 2000, None), 2000),
    Case("slope between series, 100 of Laplace", 2_000_000, slope_of(laplace, 100, 0.0), 100),
    Case("slope between series, 100 exponentials", 2_000_000, slope_of(exponential, 100, 2.0), 100),
    Case("slope between series, 2,000 lognormals (σ 1)", 200_000, slope_of(lognormal(1.0), 2000, 6.18), 2000),
    Case("slope over steps, 200 paths of 40 steps, exponentials", 50_000, later_slope(exponential, 200, 40, 8), 8000),
    Case("slope over steps, 100 paths of 20 steps, lognormals", 100_000, later_slope(lognormal(0.5), 100, 20, 4), 2000),
    Case("slope of path means, 1,000 paths of 10 steps", 20_000, halves_slope(exponential, 1000, 5, 0.3), 11_000),
    Case("slope of path means, 200 paths of 40 steps", 50_000, halves_slope(laplace, 200, 20, 0.1), 8200),
    Case("slope of squares, 200 paths of 20 steps, Laplace", 100_000, squares_slope(laplace, 200, 20), 4000),
    Case("slope of squares, 2,000 paths of 20 steps, Laplace", 10_000, squares_slope(laplace, 2000, 20), 40_000),
    Case("slope of squares, 500 paths of 200 steps, Laplace", 5_000, squares_slope(laplace, 500, 200), 100_000),
    Case("variance of changes, 200 paths of 12, Laplace", 200_000, changes_of(laplace, 200, 12), 2600),
    Case("variance of changes, 1,000 paths of 60, normal", 20_000, changes_of(normal, 1000, 60), 61_000),
    Case("size of the start, 100 of t(4)", 2_000_000, start_of(student(4), 100), 400),
    Case("size of the start, 2,000 of t(4)", 100_000, start_of(student(4), 2000), 8000),
    Case("size of the start, 100 lognormals (σ 1)", 2_000_000, start_of(lognormal(1.0), 100), 400),
    Case("size of the start, 500 flags of share 0.02", 200_000, start_of(rare(0.02), 500), 2000),
    Case("neighbouring paths, 100 normal averages", 2_000_000, paths_side_by_side(normal, 100), 100),
    Case("neighbouring paths, 100 exponentials", 2_000_000, paths_side_by_side(exponential, 100), 100),
    Case("neighbouring paths, 100 lognormals (σ 1)", 2_000_000, paths_side_by_side(lognormal(1.0), 100), 100),
    Case("shocks: mean, 50 of Laplace", 2_000_000, shock_moment("laplace", {}, laplace, 50, 1), 50),
    Case("shocks: mean, 50 uniforms", 2_000_000, shock_moment("uniform", {}, uniform, 50, 1), 50),
    Case("shocks: mean, 50 exponentials", 2_000_000, shock_moment("gamma", _GAMMA, exponential, 50, 1), 50),
    Case("shocks: mean, 2,000 of t(9)", 200_000, shock_moment("student_t", {"df": 9}, student(9), 2000, 1), 2000),
    Case("shocks: mean, 2,000 of t(5)", 200_000, shock_moment("student_t", _T5, student(5), 2000, 1), 2000),
    Case("shocks: variance, 50 uniforms", 2_000_000, shock_moment("uniform", {}, uniform, 50, 2), 50),
    Case("shocks: variance, 50 of Laplace", 2_000_000, shock_moment("laplace", {}, laplace, 50, 2), 50),
    Case("shocks: variance, 2,000 of Laplace", 200_000, shock_moment("laplace", {}, laplace, 2000, 2), 2000),
    Case("shocks: variance, 2,000 exponentials", 200_000, shock_moment("gamma", _GAMMA, exponential, 2000, 2), 2000),
    Case("shocks: level score, 30 of t(5)", 4_000_000, component("student_t", _T5, 30, 0), 30),
    Case("shocks: spread score, 30 of t(5)", 4_000_000, component("student_t", _T5, 30, 1), 30),
    Case("shocks: spread score, 1,000 of t(5)", 200_000, component("student_t", _T5, 1000, 1), 1000),
    Case("shocks: shape of the law, 200 normals", 1_000_000, shape("normal", {}, 200), 200),
    Case("shocks: shape of the law, 2,000 normals", 50_000, shape("normal", {}, 2000), 2000),
    Case("shocks: autocorrelation, 20 steps, 2 paths", 4_000_000, products(20, 2, 1), 40),
    Case("shocks: autocorrelation, 5,000 products", 10_000_000, many_products(5000)),
    Case("shocks: clustering, 60 steps", 4_000_000, clustering(60, 1), 60),
    Case("shocks: clustering, 20 steps, 30 paths", 500_000, clustering(20, 30), 600),
    Case("shocks: clustering, 2,000 steps", 200_000, clustering(2000, 1), 2000),
    Case("shocks: asymmetric clustering, 60 steps", 4_000_000, clustering(60, 1, True), 60),
    Case("shocks: asymmetric clustering, 20 steps, 30 paths", 500_000, clustering(20, 30, True), 600),
    Case("shocks: correlation between series, 30 of ρ 0.5", 10_000_000, between_series(0.5, 30)),
    Case("shocks: variance of sums, 12 stretches of 16 steps", 10_000_000, ratio(12, 180)),
    Case("shocks: variance of sums, 2 stretches of 256 steps", 10_000_000, ratio(2, 510)),
    Case("shocks: balance of 30 paths, 20 steps", 10_000_000, ratio(20, 580, judge.evenness)),
    Case("shocks: balance of 2,000 paths, 200 steps", 10_000_000, ratio(200, 399_800, judge.evenness)),
    Case("shocks: level by phase, 1 path of 100 steps", 500_000, by_phase(1, 100, 24), 400),
    Case("shocks: level by phase, 200 paths of 60 steps", 500_000, by_phase(200, 60, 12), 400),
    Case("shocks: level by path, 30 paths of 200 steps", 200_000, by_path("shocks: level by path", 30, 200), 300),
    Case("shocks: spread by path, 30 paths of 200 steps", 200_000, by_path("shocks: spread by path", 30, 200), 300),
    Case("shocks: spread by path, 200 paths of 20 steps", 50_000, by_path("shocks: spread by path", 200, 20), 2000),
    Case("shocks: level of the worst of 30 paths", 200_000, worst_path("level", 30, 20), 600),
    Case("shocks: spread of the worst of 30 paths", 200_000, worst_path("spread", 30, 20), 600),
    Case("shocks: memory of the worst of 30 paths", 50_000, worst_path("memory", 30, 20), 600),
    Case("shocks: farthest of 2,000", 400_000, farthest_of(2000), 100),
    Case("shocks: farthest of 1,000,000", 400_000, farthest_of(1_000_000), 100),
    Case("shocks: correlation of sizes, 60 pairs", 2_000_000, sizes_together(60), 120),
    Case("shocks: correlation of sizes, 1,000 pairs", 200_000, sizes_together(1000), 2000),
    Case("shocks: correlation at longer lags, 40 steps, 10 paths", 200_000, longer_lags(40, 10), 1100),
    Case("shocks: correlation at longer lags, 1,000 steps", 100_000, longer_lags(1000, 1), 2000),
    Case("missing values of two series, 600, each with chance 0.3", 4_000_000, missing_together(600, 0.3), 600),
    Case("missing values of two series, 12,000, chance 0.05", 4_000_000, missing_together(12_000, 0.05), 12_000),
    Case("order of 101 paths of a table", 100_000, order_of_paths(101, 0.0), 20_000),
    Case("order of 101 paths that remember, 3 on", 100_000, order_of_paths(104, 0.8, 3), 20_000),
    Case("order of 1,000 paths that remember", 50_000, order_of_paths(1000, 0.8), 40_000),
    Case("worst of 200 steps", 1_000_000, worst_of(200), 200),
    Case("sums of 6 squares", 10_000_000, squares(6)),
    Case("scatter of the start, 100 of t(4)", 100_000, scatter_of(student(4), 100), 6000),
    Case("scatter of the start, 1,000 of t(4)", 20_000, scatter_of(student(4), 1000), 60_000),
    Case("scatter of the start, 100 of garch (0.10, 0.80)", 20_000, scatter_of(garch(0.1, 0.8), 100), 60_000),
    Case("scatter of the start, 500 flags of share 0.02", 20_000, scatter_of(rare(0.02), 500), 30_000),
    Case("mean cosine, 100 of Laplace", 2_000_000, cosines_of(laplace, 100, 2 / 3), 100),
    Case("mean cosine, 1,000 of Laplace", 400_000, cosines_of(laplace, 1000, 2 / 3), 1000),
)
