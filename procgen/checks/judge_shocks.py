"""The tests of recovered shocks: level, spread, memory, clustering, law, and independence between paths."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from procgen.checks import apart, judge, tails
from procgen.checks.judge import Finding
from procgen.checks.saddle import REACH, sum_finding
from procgen.checks.scores import Scores, largest_gap
from procgen.checks.shocks import CLUSTER_LAGS, ShockSums
from procgen.checks.together import CrossSums
from procgen.checks.verdict import Check
from procgen.checks.words import BALANCE, BY_PHASE

_EXACT_BELOW = 5_000  # products fewer than this are judged by their exact law
_CLUSTER_SKEW = 0.408163  # (E s^3)^2 of a cluster score s = sqrt(5) P2, which is (2 sqrt(5) / 7)^2
_CLUSTER_EXCESS = 8.45  # of the sum of lagged products: m4^2 - 3 + 6 (m4 - 1), m4 = E s^4 = 15/7
_ASYMMETRY_EXCESS = 10.84  # of the sum of s[t] g[t - 1]: 3 m4 - 3 + 6 (E g^2 s^2 - 1), by quadrature


def shock_checks(series: str, sums: ShockSums, source: str) -> Iterator[Check]:
    """Every test of one series' shocks; `source` says in words how they were recovered."""
    if sums.n == 0:
        yield Check(series, "recovered shocks", "", "law", outcome="untestable", note="no shock could be recovered")
        return
    yield from _level_and_spread(series, sums, source)
    yield from _memory(series, sums)
    yield from _stretches(series, sums)
    yield from _clustering(series, sums)
    yield from _law(series, sums)
    yield from _by_step(series, sums)
    yield from _season(series, sums)
    yield from _between_paths(series, sums)


def _level_and_spread(series: str, sums: ShockSums, source: str) -> Iterator[Check]:
    n, law = sums.n, sums.scores.law
    mean, second = sums.sums / n
    root = math.sqrt(n)
    components = sums.scores.component_sums(sums.counts)
    if sums.scores.gaussian:
        yield Check.of(series, "shocks: mean", "all steps", "level", judge.normal_mean(mean, 0.0, 1.0, n), source)
        if n > 1:
            finding = judge.variance((second - mean * mean) * n / (n - 1), 1.0, n - 1)
            yield Check.of(series, "shocks: variance", "all steps", "spread", finding)
        return
    if no_big_jump(sums.scores, n, 1):
        finding = sum_finding(mean * root, n, sums.scores.summand(1, n), 1 / root)
        yield Check.of(series, "shocks: mean", "all steps", "level", finding, source)
    else:
        finding = score_finding(components[0], n, sums.scores, 0)
        yield Check.of(series, "shocks: level score", "all steps", "level", finding, source)
    m4 = law.moment(4) if n > 1 and no_big_jump(sums.scores, n, 2) else None
    if m4 is not None:
        # Around the sample's mean: one summand less, as for normal shocks.
        error = math.sqrt((m4 - 3) / n + 2 / (n - 1))
        spread = (second - mean * mean) * n / (n - 1)
        finding = sum_finding((spread - 1) / error, n - 1, sums.scores.summand(2, n), error, theory=1.0)
        yield Check.of(series, "shocks: variance", "all steps", "spread", finding)
    else:
        finding = score_finding(components[1], n, sums.scores, 1)
        yield Check.of(series, "shocks: spread score", "all steps", "spread", finding)


def no_big_jump(scores: Scores, n: int, order: int) -> bool:
    """Whether no single |z|^order can carry the sum of n of them to the tail that a p of 1e-6 lies in."""
    law, distribution = scores.law, scores.distribution
    m = law.moment(2 * order)
    if m is None or law.moment(3 * order) is None:
        return False
    reach = (REACH * math.sqrt(max(m - (law.moment(order) or 0.0) ** 2, 0.0) * n)) ** (1 / order)
    return n * float(distribution.sf(reach) + distribution.cdf(-reach)) < 0.1 * 1e-6


def _memory(series: str, sums: ShockSums) -> Iterator[Check]:
    for i, lag in enumerate(sums.lags):
        pairs, total = sums.memory[:, i]
        if pairs:
            finding = _lag_finding(sums.chains, lag, int(pairs), total)
            yield Check.of(series, "shocks: autocorrelation", f"lag {lag}", "memory", finding)


def _lag_finding(chains: Counter[int], lag: int, pairs: int, total: float) -> Finding:
    """Sum of g[t] g[t-lag] over runs of the given lengths: a quadratic form in normals."""
    if pairs >= _EXACT_BELOW:
        return judge.unit(total / math.sqrt(pairs), 1 / math.sqrt(pairs))
    without_gaps = pairs == sum(paths * max(length - lag, 0) for length, paths in chains.items())
    weights, dof = _chain_weights(chains, lag) if without_gaps else _longest_chain_weights(max(chains), pairs)
    upper, lower = tails.weighted_chi_squares(total, weights, dof)
    plain = judge.unit(total / math.sqrt(pairs), 1 / math.sqrt(pairs))
    return Finding(0.0, total / pairs, plain.standard_error, tails.two_sided(upper, lower), plain.detect)


def _chain_weights(chains: Counter[int], lag: int) -> tuple[NDArray, NDArray]:
    """Eigenvalues cos(pi j / (m + 1)) of the products along a chain of m, and how often each occurs."""
    weights, dof = [], []
    for length, paths in chains.items():
        links: Counter[int] = Counter(len(range(start, length, lag)) for start in range(min(lag, length)))
        for m, count in links.items():
            weights.append(_eigenvalues(m))
            dof.append(np.full(m, float(count * paths)))
    return np.concatenate(weights), np.concatenate(dof)


def _longest_chain_weights(most: int, pairs: int) -> tuple[NDArray, NDArray]:
    """The same where shocks are missing here and there, and a path has `most` of them: as if all pairs were in a row.

    Their number gives the variance. How they hang together is not kept: a shock has two partners at most, so that they
    are links of chains, and none is longer than a path's shocks in a row, whose sums have the longest tails.
    """
    links = min(most - 1, pairs)
    return _eigenvalues(links + 1), np.full(links + 1, pairs / links)


def _eigenvalues(m: int) -> NDArray:
    return np.cos(np.pi * np.arange(1, m + 1) / (m + 1))


def _stretches(series: str, sums: ShockSums) -> Iterator[Check]:
    """The variance of the sums over stretches of steps, against that of the shocks within them."""
    for length, count, total in sums.stretches.ratios():
        if count > 1:
            finding = judge.ratio(total, count, float(sums.square[0]) - total, sums.n - count)
            yield Check.of(series, "shocks: variance of sums", f"{length} steps", "memory", finding)


def _clustering(series: str, sums: ShockSums) -> Iterator[Check]:
    for i, lag in enumerate(CLUSTER_LAGS):
        pairs, total = sums.cluster[:, i]
        if pairs:
            yield Check.of(series, "shocks: clustering", f"lag {lag}", "clustering", cluster_finding(pairs, total))
    pairs, total = sums.asymmetry
    if pairs:
        yield Check.of(series, "shocks: asymmetric clustering", "lag 1", "clustering", asymmetry_finding(pairs, total))


def asymmetry_finding(pairs: float, total: float) -> Finding:
    """A sum of products of a cluster score and the normal score before it."""
    return _products(pairs, total, 0.0, _ASYMMETRY_EXCESS)


def cluster_finding(pairs: float, total: float) -> Finding:
    """A sum of products of a cluster score and an earlier one."""
    return _products(pairs, total, _CLUSTER_SKEW, _CLUSTER_EXCESS)


def _products(pairs: float, total: float, skew: float, excess: float) -> Finding:
    """A sum of products of scores; too few of them cannot be judged far out."""
    root = math.sqrt(pairs)
    plain = judge.unit(total / root, 1 / root, skew=skew / root, excess=excess / pairs)
    return judge.with_doubt(plain, judge.excess_doubt(excess, int(pairs), "pairs of shocks"))


def _law(series: str, sums: ShockSums) -> Iterator[Check]:
    components = sums.scores.component_sums(sums.counts)[2:]
    finding = shape_finding(float(components @ components), len(components), sums.n)
    yield Check.of(series, "shocks: shape of the law", "all steps", "law", finding)
    gap = judge.kolmogorov(largest_gap(sums.counts), sums.n)
    yield Check.of(series, "shocks: distribution function", "all steps", "law", gap)
    if sums.scores.bounded:
        what, wrong, right = sums.scores.beyond
        fault = f"{sums.outside} shocks {wrong}" if sums.outside else ""
        check = Check.fact(series, f"shocks: {what}", "all steps", fault, right)
        check.kind = "law"
        yield check


def score_finding(z: float, n: int, scores: Scores, k: int) -> Finding:
    """The standardised sum of component k of n shocks: bounded numbers, whose law is that of the bins."""
    return sum_finding(z, n, scores.component_laws[k], 1 / math.sqrt(n))


def shape_finding(q: float, dof: int, n: int) -> Finding:
    """The sum of squares of the score components that speak of the shape alone."""
    return judge.with_doubt(judge.squares(q, dof, n), judge.excess_doubt(4.0, n, "shocks"))


def _by_step(series: str, sums: ShockSums) -> Iterator[Check]:
    """Whether some step, or stretch of steps, has another level or spread than the rest."""
    from scipy.special import ndtri

    count, total, square = sums.profile[:, sums.profile[0] > 0]
    if count.size < 2 or count.min() < 2:
        return
    n = sums.n
    level = total / np.sqrt(count)
    within = square - total**2 / count
    upper, lower = chi_square_logs(within, count - 1)
    spread = np.where(upper < lower, -ndtri(np.exp(np.maximum(upper, -700))), ndtri(np.exp(np.maximum(lower, -700))))
    # The spread is seen against its mean over steps: one that is wrong at all steps alike is told by itself.
    beside = float(spread @ spread) - float(spread.sum()) ** 2 / spread.size
    for kind, z, q, dof in (("level", level, float(level @ level), 0), ("spread", spread, beside, 1)):
        finding = judge.squares(q, z.size - dof, n)
        yield Check.of(series, f"shocks: {kind} by step", "sum over steps", kind, finding)
        yield Check.of(series, f"shocks: {kind} by step", *_worst_step(sums, z, kind))
    yield _balance(series, float(level @ level), float(within.sum()), count)


def _balance(series: str, between: float, within: float, count: NDArray) -> Check:
    """Whether the paths' mean at a step varies less than that of independent ones: as that of mirrored ones does."""
    finding = judge.evenness(between, count.size, within, int(count.sum()) - count.size)
    return Check.of(series, BALANCE, "sum over steps", "dependence", finding)


def _season(series: str, sums: ShockSums) -> Iterator[Check]:
    """The level at each phase of the season beside that of all steps: of one path, too, where it turns often enough.

    Scores are independent unit normals, so that the sum of squares between phases is a chi-square: exact.
    """
    if not sums.period:
        return
    count, total = sums.by_phase()
    phases = np.flatnonzero(count)
    count, total = count[phases], total[phases]
    if count.size < 2 or count.min() < 2:
        return
    apart = total / count - total.sum() / count.sum()
    finding = judge.squares(float(count @ apart**2), count.size - 1, sums.n)
    worst = int(np.argmax(np.abs(apart) * np.sqrt(count)))
    first = int(phases[worst])
    size = f"{apart[worst]:+.3g}".replace("-", "−")
    note = f"most at phase {first}, which is that of steps {first}, {first + sums.period}, …, by {size}"
    yield Check.of(series, BY_PHASE, f"period {sums.period}", "level", finding, note)


def _worst_step(sums: ShockSums, z: NDArray, kind: str) -> tuple[str, str, Finding]:
    from scipy.special import log_ndtr

    at = int(np.argmax(np.abs(z)))
    logs = np.minimum(0.0, math.log(2) + log_ndtr(-np.abs(z)))
    places = np.flatnonzero(sums.profile[0] > 0)
    step = int(places[at]) * sums.width
    probe = f"step {step}" if sums.width == 1 else f"steps {step}–{step + sums.width - 1}"
    finding = Finding(0.0, float(z[at]), 1.0, judge.worst(logs), lambda level: judge.reach_of_worst(level, z.size))
    return f"worst: {probe}", kind, finding


def chi_square_logs(q: NDArray, dof: NDArray) -> tuple[NDArray, NDArray]:
    """Vectors of (log upper, log lower) chi-square tails; -700 stands for what underflows."""
    from scipy.special import gammainc, gammaincc

    with np.errstate(divide="ignore"):
        upper, lower = np.log(gammaincc(dof / 2, q / 2)), np.log(gammainc(dof / 2, q / 2))
    return np.maximum(upper, -700.0), np.maximum(lower, -700.0)


def _between_paths(series: str, sums: ShockSums) -> Iterator[Check]:
    number, *squares = sums.paths[:3]
    pooled: dict[str, float] = {}
    if number >= 2:
        # Seen against the mean of all paths, so that a level or spread that is wrong everywhere is not told here too.
        level, spread = squares - sums.paths[3:] ** 2 / number
        for what, kind, q in (("level", "memory", level), ("spread", "clustering", spread)):
            finding = judge.squares(float(q), int(number) - 1, sums.n)
            pooled[what] = finding.log_p
            yield Check.of(series, f"shocks: {what} by path", "sum over paths", kind, finding)
        yield from apart.checks(series, sums.ends, sums.paths, pooled)
    pairs = sum((width - 1) * steps for width, steps in sums.rows.items())
    if pairs:
        finding = _lag_finding(sums.rows, 1, pairs, sums.neighbours)
        yield Check.of(series, "shocks: neighbouring paths", "path − 1", "dependence", finding)


def cross_checks(pair: str, sums: CrossSums, expected: dict[int, float]) -> Iterator[Check]:
    """Correlations between the shocks of two series at each lag, against those stated."""
    for lag in sums.lags:
        n, total = sums.sums[lag]
        if not n:
            continue
        rho = expected.get(lag, 0.0)
        # Var of the sum over n: 1 + c(lag)^2 when only this lag is correlated, and its neighbours' share otherwise.
        others = sum(expected.get(lag + j, 0.0) * expected.get(lag - j, 0.0) for j in range(-50, 51) if j)
        size = max(2, round(n * (1 + rho * rho) / max(1 + rho * rho + others, 0.1)))
        finding = judge.covariance(total / n, 1.0, 1.0, rho, size)
        probe = "same step" if lag == 0 else f"lag {lag:+d}"
        yield Check.of(pair, "shocks: correlation between series", probe, "dependence", finding)
