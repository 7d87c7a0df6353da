"""The cases of the study of calibration that are about recovered shocks: the real checks on sums drawn directly.

Numbers are drawn by NumPy, never by this project; sums with a known law are drawn from that law.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from procgen.chance.laws import LAWS
from procgen.checks import apart, farthest, judge_shocks, untied
from procgen.checks.judge import Finding
from procgen.checks.scores import BINS, Scores, cluster_scores
from procgen.checks.shocks import ShockLane, ShockSums
from procgen.checks.together import CrossSums
from tests.studies.calibration import Findings, of_one_number
from tests.studies.calibration_draws import Draw, Rng, nothing


def shock_moment(name: str, parameters: dict[str, Any], draw: Draw, n: int, order: int) -> Findings:
    """The mean (order 1) or variance (order 2) of n shocks of a law."""
    sums = ShockSums(Scores(LAWS[name](**parameters)), n)
    sums.n = n
    sums.counts[:] = 1
    what = ("shocks: mean", "shocks: variance")[order - 1]

    def statistic(rng: Rng, count: int) -> NDArray:
        z = draw(rng, (count, n))
        mean, second = z.mean(axis=1), np.einsum("ij,ij->i", z, z) / n
        return mean if order == 1 else (second - mean * mean) * n / (n - 1)

    def judged(seen: float) -> Finding:
        sums.sums[:] = (n * seen, 0.0) if order == 1 else (0.0, seen * (n - 1))
        found = [c.finding for c in judge_shocks._level_and_spread("x", sums, "") if c.what == what and c.finding]
        return found[0] if found else Finding(0.0, seen, 1.0, 0.0, nothing)  # too few: a score is judged instead

    kurtosis = float(sums.scores.law.moment(4) or 3)
    sd = 1 / math.sqrt(n) if order == 1 else math.sqrt((kurtosis - 1) / n)
    return of_one_number(statistic, judged, float(order - 1), sd)


def component(name: str, parameters: dict[str, Any], n: int, k: int) -> Findings:
    """The level score (0) or the spread score (1) of n shocks."""
    scores = Scores(LAWS[name](**parameters))
    table = np.ascontiguousarray(scores.components[:, k])
    return of_one_number(
        lambda rng, count: table[rng.integers(0, BINS, (count, n))].sum(axis=1) / math.sqrt(n),
        lambda z: judge_shocks.score_finding(z, n, scores, k),
        0.0,
        1.0,
    )


def shape(name: str, parameters: dict[str, Any], n: int) -> Findings:
    """What the components say of the shape of a law alone."""
    table = Scores(LAWS[name](**parameters)).components[:, 2:]

    def draw(rng: Rng, count: int) -> NDArray:
        bins = rng.integers(0, BINS, (count, n))
        return sum(np.ascontiguousarray(row)[bins].sum(axis=1) ** 2 for row in table.T) / n

    dof = table.shape[1]
    return of_one_number(
        draw, lambda q: judge_shocks.shape_finding(max(q, 0.0), dof, n), float(dof), math.sqrt(2 * dof)
    )


def products(steps: int, paths: int, lag: int) -> Findings:
    """The autocorrelation of normal scores."""
    chains, pairs = Counter({steps: paths}), (steps - lag) * paths

    def draw(rng: Rng, count: int) -> NDArray:
        g = rng.standard_normal((steps, paths, count))
        return np.einsum("tpc,tpc->c", g[lag:], g[:-lag])

    return of_one_number(draw, lambda x: judge_shocks._lag_finding(chains, lag, pairs, x), 0.0, math.sqrt(pairs))


def by_phase(paths: int, steps: int, period: int) -> Findings:
    """The level at the phases of a season: sums of scores by phase, drawn from their law."""
    count = paths * np.bincount(np.arange(steps) % period)

    def findings(rng: Rng, count_of: int) -> Iterator[tuple[Finding, int]]:
        sums = ShockSums(Scores(LAWS["normal"]()), steps, period=period)
        sums.n = paths * steps
        sums.profile[0] = paths
        for total in np.sqrt(count) * rng.standard_normal((count_of, period)):
            sums.profile[1] = 0.0
            sums.profile[1, :period] = total
            yield next(judge_shocks._season("x", sums)).finding, 1  # type: ignore[misc]

    return findings


def by_path(what: str, paths: int, steps: int) -> Findings:
    """Levels or spreads of paths: sums of scores and of their squares by path, drawn from their laws."""
    scores = Scores(LAWS["normal"]())

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        levels = math.sqrt(steps) * rng.standard_normal((count, paths))
        squares = levels**2 / steps + rng.chisquare(steps - 1, (count, paths))
        for level, square in zip(levels, squares, strict=True):
            sums, lane = ShockSums(scores, steps), ShockLane(paths)
            lane.totals[:2], lane.length[:] = (level, square), steps
            sums.finish(lane)
            sums.n = paths * steps
            found = [c.finding for c in judge_shocks._between_paths("x", sums) if c.what == what]
            yield found[0], 1  # type: ignore[misc]

    return findings


def worst_path(what: str, paths: int, steps: int) -> Findings:
    """The path farthest out in level, spread or memory; near ones are not judged."""
    from scipy.special import ndtri

    near, n = -float(ndtri(0.03 / paths)), np.full(paths, steps)

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        g = rng.standard_normal((steps, count, paths))
        square = np.einsum("tcp,tcp->cp", g, g)
        slope = np.einsum("tcp,tcp->cp", g[1:], g[:-1]) / square * math.sqrt(steps + 2)
        spread = apart.spreads(square.ravel(), np.full(square.size, float(steps))).reshape(square.shape)
        z = {"level": g.sum(axis=0) / math.sqrt(steps), "spread": spread, "memory": slope}
        for row in np.flatnonzero(np.abs(z[what]).max(axis=1) > (0.8 if what == "memory" else 0.9) * near):
            level, spread, memory = (each[row] for each in z.values())
            sums = np.array([paths, level @ level, spread @ spread, level.sum(), spread.sum()])
            ends = apart.ends_of(level, spread, memory, n, 0)
            rows = apart.checks("x", {what: ends[what]}, sums, {"level": 0.0, "spread": 0.0})
            yield next(rows).finding, 1  # type: ignore[misc]

    return findings


def farthest_of(n: int) -> Findings:
    """The farthest of n shocks, on both sides of its law."""
    from scipy.special import ndtri_exp

    scores = Scores(LAWS["normal"]())

    def findings(rng: Rng, count: int) -> Iterator[tuple[Finding, int]]:
        least = np.log(rng.random(count)) / n  # log of 1 − 2a of the farthest
        size = -ndtri_exp(np.log(-np.expm1(least)) - math.log(2))
        for z in size[np.abs(least * n + 2) > 1.9]:
            far = [[float(z), 0, 0, float(z), float(z)]] if z > 3 else []
            yield next(farthest.checks("x", scores, far, n)).finding, 1  # type: ignore[misc]

    return findings


def sizes_together(n: int) -> Findings:
    """The correlation of the sizes of n pairs of independent shocks."""

    def draw(rng: Rng, count: int) -> NDArray:
        return np.einsum("cn,cn->c", *(cluster_scores(rng.random((count, n))) for _ in range(2)))

    return of_one_number(draw, lambda total: untied.size_finding(n, total), 0.0, math.sqrt(n))


def longer_lags(steps: int, paths: int) -> Findings:
    """Products of scores with sums over the ten steps before the two before."""

    def draw(rng: Rng, count: int) -> NDArray:
        a, b = rng.standard_normal((2, steps, count, paths))
        sums = np.array([b[t - untied.LAST : t - untied.FIRST + 1].sum(axis=0) for t in range(untied.LAST, steps)])
        return np.einsum("tcp,tcp->c", a[untied.LAST :], sums)

    n = (steps - untied.LAST) * paths
    return of_one_number(draw, lambda total: untied.lags_finding(n, total), 0.0, math.sqrt(10 * n))


def many_products(pairs: int) -> Findings:
    """As many products, each of two normals of its own."""
    return of_one_number(
        lambda rng, count: np.sqrt(rng.chisquare(pairs, count)) * rng.standard_normal(count),
        lambda x: judge_shocks._lag_finding(Counter({2: pairs}), 1, pairs, x),
        0.0,
        math.sqrt(pairs),
    )


def clustering(n: int, paths: int, asymmetric: bool = False) -> Findings:
    from scipy.special import ndtr

    judged = judge_shocks.asymmetry_finding if asymmetric else judge_shocks.cluster_finding
    pairs = (n - 1) * paths

    def draw(rng: Rng, count: int) -> NDArray:
        g = rng.standard_normal((n, paths * count))
        s = cluster_scores(ndtr(g))
        return np.einsum("tc,tc->c", s[1:], (g if asymmetric else s)[:-1]).reshape(count, paths).sum(axis=1)

    return of_one_number(draw, lambda total: judged(pairs, total), 0.0, math.sqrt(pairs))


def between_series(rho: float, n: int) -> Findings:
    """The correlation of the scores of two series at one step."""

    def draw(rng: Rng, count: int) -> NDArray:
        q = rng.chisquare(n, count)
        return rho * q + math.sqrt(1 - rho * rho) * np.sqrt(q) * rng.standard_normal(count)

    def judged(total: float) -> Finding:
        sums = CrossSums((0,))
        sums.sums[0][:] = n, total
        (check,) = judge_shocks.cross_checks("x ~ y", sums, {0: rho})
        assert check.finding is not None
        return check.finding

    return of_one_number(draw, judged, n * rho, math.sqrt(n * (1 + rho * rho)))
