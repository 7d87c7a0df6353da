"""The tests of averages along paths."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from procgen.checks import judge
from procgen.checks.gather import Gather
from procgen.checks.judge import FEW_PATHS, Sample
from procgen.checks.limits import few_paths, limit, sample_of
from procgen.checks.pools import QUANTILES, Changes, Level, Pool
from procgen.checks.probes import SeriesPlan
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check

_NO_CHANCE = 1e-14  # of the eigenvalues of the variance: below it those of a covariance are what rounding leaves


def pooled_checks(gather: Gather, column: int) -> Iterator[Check]:
    """Every check of one series' averages over steps."""
    plan, powers = gather.plan.series[column], gather.pooled[column]
    pool = plan.pool
    if powers is None or pool is None:
        return
    if pool.coarse:
        probe = f"steps {pool.first}–{pool.last - 1}"
        yield Check(plan.name, "averages over steps", probe, "memory", outcome="untestable", note=pool.coarse)
    else:
        yield from averages(plan, powers)
    if plan.name not in gather.routes:
        yield from _neighbours(plan, powers)


def averages(plan: SeriesPlan, powers: Powers) -> Iterator[Check]:
    """Every check of averages along paths; the plan must have a pool."""
    pool = plan.pool
    assert pool is not None
    for k, lag in enumerate((-1, *pool.lags)):
        sample = sample_of(powers, k)
        if sample.n and not (lag > 0 and _without_chance(pool, k)):
            yield _average(plan, pool, k, lag, sample)
    place = 1 + len(pool.lags)
    for each in pool.changes:
        sample = sample_of(powers, place)
        if sample.n:
            yield _change(plan, each, sample)
        place += 1
    if pool.level is not None:
        yield from _level(plan, pool.level, sample_of(powers, place), sample_of(powers, place + 1))
        place += 2
    if pool.shares is not None:
        for k in range(len(pool.shares.points)):
            yield from _share(plan, pool, k, sample_of(powers, place + k))
    if pool.slow is not None:
        yield from pool.slow.check(plan.name, sample_of(powers, pool.size - 1))


def _without_chance(pool: Pool, k: int) -> bool:
    """Whether of all products at a lag one value is known, so that their average is 0 on every path."""
    return pool.exact is not None and bool(np.abs(pool.exact[k]).max() <= _NO_CHANCE * np.abs(pool.exact[1]).max())


def _average(plan: SeriesPlan, pool: Pool, k: int, lag: int, sample: Sample) -> Check:
    """Average k of the pool: the mean (lag -1), the variance (lag 0), or the memory at a lag."""
    probe = f"steps {pool.first}–{pool.last - 1}" + (f", lag {lag}" if lag > 0 else "")
    theory = float(np.mean(pool.mean)) if lag < 0 else float(np.nanmean(pool.covariance[k - 1]))
    what = "mean over steps" if lag < 0 else "variance over steps" if lag == 0 else "autocovariance over steps"
    kind = "level" if lag < 0 else "spread" if lag == 0 else "memory"
    if pool.exact is not None:
        if lag < 0:
            finding = judge.normal_mean(sample.mean, theory, math.sqrt(float(pool.exact[0, 0])), sample.n)
        else:
            finding = judge.quadratic(theory + sample.mean, pool.exact[k], sample.n)
        return Check.of(plan.name, what, probe, kind, finding)
    if lag > 0 and pool.slope is not None:
        variance = float(pool.covariance[0].mean())
        slope = float(np.nanmean(pool.slope[k - 1]))
        hidden = _hidden(plan, pool, lag, slope)
        return limit(plan, "slope over steps", probe, kind, sample.scaled(1 / variance), slope, 2, None, hidden)
    sd = plan.square_sd if lag == 0 and sample.n >= FEW_PATHS else None
    return limit(plan, what, probe, kind, sample, theory, 1 if lag < 0 else 2, sd, _hidden(plan, pool, lag))


def _hidden(plan: SeriesPlan, pool: Pool, lag: int, slope: float = 0.0) -> float:
    """The skewness of a path's average, by theory, which a sample shows only when it has met the tail.

    It is that of one step over the root of the number of steps, of those that repeat each other one. A product of
    rare values needs two of them: of the share p = 1 / skewness² of steps that has one, so many go on to another
    as the slope says, and by accident the share p of the rest.
    """
    steps = pool.last - pool.first - max(lag, 0)
    skew = plan.skewness(2 if lag == 0 else 1)
    repeats = plan.repeats[max(lag, 0)] if skew else 1.0
    pairs = skew * skew / (1.0 + min(abs(slope), 1.0) * skew * skew) if lag > 0 else 1.0
    return skew * math.sqrt(pairs * repeats / steps)


def _change(plan: SeriesPlan, each: Changes, sample: Sample) -> Check:
    """The variance of the change over a number of steps."""
    what, probe = "variance of changes", f"{each.length} steps"
    if each.exact is None:
        return limit(plan, what, probe, "spread", sample, each.variance, 2, None)
    finding = judge.quadratic(each.variance + sample.mean, each.exact, sample.n)
    return Check.of(plan.name, what, probe, "spread", judge.of_scale(finding))


def _level(plan: SeriesPlan, level: Level, spread: Sample, halves: Sample) -> Iterator[Check]:
    """How far the averages of paths lie apart, and how far those of later halves follow those of earlier ones."""
    what, probe = "variance of path means", f"steps {level.first}–{level.last - 1}"
    if level.exact:
        if spread.n:
            finding = judge.variance(level.variance + spread.mean, level.variance, spread.n)
            yield Check.of(plan.name, what, probe, "memory", finding)
        return
    if level.sd is not None and spread.n:
        yield limit(plan, what, probe, "memory", spread, level.variance, 2, level.sd)
    if halves.n:
        what = "slope of path means"
        yield limit(plan, what, f"{probe}, later half on earlier", "memory", halves, level.slope, 2, None)


def _share(plan: SeriesPlan, pool: Pool, k: int, sample: Sample) -> Iterator[Check]:
    """The share of steps below a quantile, averaged over paths."""
    assert pool.shares is not None
    what, probe = f"share below the {QUANTILES[k]:.0%} quantile", f"steps {pool.first}–{pool.last - 1}"
    chance = float(pool.shares.chances[k])
    if sample.n < FEW_PATHS or not sample.sd > 0.0:
        yield Check(plan.name, what, probe, "law", chance, chance + sample.mean, outcome="reported",
                    note=few_paths(sample.n, FEW_PATHS))  # fmt: skip
        return
    steps = pool.last - pool.first
    hidden = (1.0 - 2.0 * chance) / math.sqrt(chance * (1.0 - chance)) * math.sqrt(plan.repeats[0] / steps)
    yield Check.of(plan.name, what, probe, "law", judge.sample_mean(sample, chance, None, hidden))


def _neighbours(plan: SeriesPlan, powers: Powers) -> Iterator[Check]:
    """Correlation of the neighbouring paths' averages, where no shocks say it more sharply."""
    count, total = powers.pairs[:, 0]
    sample = sample_of(powers, 0)
    if count < FEW_PATHS or not sample.sd > 0 or not plan.highest > 3:
        return
    r = float(total / count - sample.mean**2) / sample.sd**2
    finding = judge.neighbours(r, sample, int(count))
    yield Check.of(plan.name, "neighbouring paths", "averages over steps", "dependence", finding)
