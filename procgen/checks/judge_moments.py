"""The tests of values at probes, of averages along paths, and of pairs of series."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np

from procgen.checks import judge, special
from procgen.checks.gather import Gather
from procgen.checks.judge import FEW_PATHS, Finding, Sample
from procgen.checks.probes import CrossPlan, Pool, SeriesPlan
from procgen.checks.sums import Powers
from procgen.checks.verdict import Check

_QUANTILES = (0.01, 0.99)
_MOVED = 25  # values, at least, that coarse rounding must move by a cell before their mean can be judged


def moment_checks(gather: Gather, column: int) -> Iterator[Check]:
    """Every check of one series that needs only values, not shocks."""
    plan = gather.plan.series[column]
    if plan.unknown:
        yield Check(plan.name, "moments", "", "level", outcome="untestable", note=plan.unknown)
        yield from _laws(gather, column)
        return
    for i in range(len(plan.steps)):
        if plan.constant[i]:
            yield _constant(gather, column, i)
        else:
            yield from _mean_and_variance(gather, column, i)
    yield from _covariances(gather, column)
    yield from _growth(gather, column)
    yield from _laws(gather, column)
    yield from _pooled(gather, column)


def _constant(gather: Gather, column: int, i: int) -> Check:
    """A step at which theory leaves nothing to chance."""
    plan = gather.plan.series[column]
    k = gather.plan.offset[column] + i
    mean = float(plan.mean[i])
    room = plan.grain / 2 + 1e-9 * max(1.0, abs(mean), float(np.abs(plan.mean).max()))
    n = gather.moments.n
    spread = math.sqrt(max(float(gather.moments.scatter[k, k]), 0.0) / max(n, 1))
    off = abs(float(gather.moments.mean[k]))
    fault = ""
    if n and max(off, spread) > room:
        seen = mean + float(gather.moments.mean[k])
        fault = f"every path must be {mean:.6g} here; the paths' mean is {seen:.6g}, their sd {spread:.3g}"
    check = Check.fact(plan.name, "constant", _at(plan, i), fault, "the same known value on every path")
    check.kind, check.theory, check.estimate = "level", mean, mean + float(gather.moments.mean[k])
    return check


def _at(plan: SeriesPlan, i: int) -> str:
    return f"step {plan.steps[i]}"


def _mean_and_variance(gather: Gather, column: int, i: int) -> Iterator[Check]:
    plan, moments = gather.plan.series[column], gather.moments
    k, n = gather.plan.offset[column] + i, moments.n
    mu, sigma2 = float(plan.mean[i]), float(plan.variance[i])
    if not math.isfinite(sigma2):
        reason = plan.theory.reason("variance") or "its variance is infinite: no central limit theorem holds"
        yield Check(plan.name, "mean", _at(plan, i), "level", outcome="untestable", note=reason)
        return
    if plan.coarse[i] and (i not in plan.rounded or n * sigma2 < _MOVED * plan.grain**2):
        note = plan.too_coarse(math.sqrt(plan.drawn[i]))
        for what, kind in (("mean", "level"), ("variance", "spread")):
            yield Check(plan.name, what, _at(plan, i), kind, outcome="untestable", note=note)
        return
    if plan.gaussian and not plan.coarse[i]:
        if n >= 1:
            mean = judge.normal_mean(mu + float(moments.mean[k]), mu, math.sqrt(sigma2), n)
            yield Check.of(plan.name, "mean", _at(plan, i), "level", mean)
        if n >= 2:
            variance = judge.variance(moments.covariance(k, k), sigma2, n - 1)
            yield Check.of(plan.name, "variance", _at(plan, i), "spread", variance)
        return
    sample = _sample(gather.deviations, k)
    yield _limit(plan, "mean", _at(plan, i), "level", sample, mu, 1, math.sqrt(sigma2))
    product = gather.plan.products.index((column, i, i))
    sd = None if plan.coarse[i] else plan.product_sd.get((i, i))
    sample, hidden = _sample(gather.products, product), plan.skewness(2) if sd is None else 0.0
    yield _limit(plan, "variance", _at(plan, i), "spread", sample, sigma2, 2, sd, hidden)


def _sample(powers: Powers, k: int) -> Sample:
    n = int(powers.n[k])
    return Sample.from_powers(n, powers.sums[:, k].tolist()) if n else Sample(0, math.nan, 0.0, 0.0, 0.0)


def _limit(
    plan: SeriesPlan,
    what: str,
    probe: str,
    kind: str,
    sample: Sample,
    theory: float,
    order: int,
    sd: float | None,
    hidden: float = 0.0,
) -> Check:
    """A check by a central limit theorem, where moments and paths allow it."""
    if sample.n == 0:
        return Check(plan.name, what, probe, kind, theory, outcome="untestable", note=plan.reason("covariance"))
    if not plan.highest > 3 * order:
        bound = (
            f"moments are known to exist only below order {plan.highest:g}"
            if plan.highest
            else "how many moments exist is not known"
        )
        note = f"{bound}: the tail of this estimate is not that of a central limit theorem"
        return Check(plan.name, what, probe, kind, theory, theory + sample.mean, outcome="untestable", note=note)
    if sample.n < FEW_PATHS or sample.sd == 0.0:
        note = f"only {sample.n} paths: reported, not judged"
        return Check(plan.name, what, probe, kind, theory, theory + sample.mean, outcome="reported", note=note)
    finding = judge.sample_mean(sample, theory, sd, hidden)
    if kind == "spread":
        finding = judge.of_scale(finding)
    return Check.of(plan.name, what, probe, kind, finding)


def _covariances(gather: Gather, column: int) -> Iterator[Check]:
    plan, moments = gather.plan.series[column], gather.moments
    for i, j in plan.pairs:
        if plan.constant[i] or plan.constant[j]:
            continue
        probe = f"steps {plan.steps[i]}, {plan.steps[j]}"
        known = plan.covariance[i, j]
        if plan.coarse[i] or plan.coarse[j]:
            note = plan.too_coarse(math.sqrt(min(plan.drawn[i], plan.drawn[j])))
            yield Check(plan.name, "covariance", probe, "memory", outcome="untestable", note=note)
        elif known is None or not math.isfinite(known):
            yield Check(plan.name, "covariance", probe, "memory", outcome="untestable", note=plan.reason("covariance"))
        elif plan.gaussian:
            if moments.n >= 2:
                a, b = gather.plan.offset[column] + i, gather.plan.offset[column] + j
                s1, s2 = math.sqrt(plan.variance[i]), math.sqrt(plan.variance[j])
                finding = judge.covariance(moments.covariance(a, b), s1, s2, known / (s1 * s2), moments.n - 1)
                yield Check.of(plan.name, "covariance", probe, "memory", finding)
        else:
            sample = _sample(gather.products, gather.plan.products.index((column, i, j)))
            sd, variance = plan.product_sd.get((i, j)), float(plan.variance[i])
            if sd is not None:
                yield _limit(plan, "covariance", probe, "memory", sample, known, 2, sd)
            else:
                slope = sample.scaled(1 / variance)
                what, hidden = "slope on the earlier step", plan.skewness(1) ** 2
                yield _limit(plan, what, probe, "memory", slope, known / variance, 2, None, hidden)


def _growth(gather: Gather, column: int) -> Iterator[Check]:
    """How far a series that is not stationary moves from its first moving probe to its last."""
    plan, moments = gather.plan.series[column], gather.moments
    moving = np.flatnonzero(~plan.constant & ~plan.coarse)
    if not plan.gaussian or moments.n < 2 or len(moving) < 2 or plan.theory.stationarity.covariance_stationary:
        return
    i, j = int(moving[0]), int(moving[-1])
    cov = plan.theory.covariance(plan.steps[i : i + 1], plan.steps[j : j + 1])
    if cov is None:
        return
    stated = float(plan.variance[i] + plan.variance[j] - 2 * np.ravel(cov)[0])
    a, b = gather.plan.offset[column] + i, gather.plan.offset[column] + j
    seen = moments.covariance(a, a) + moments.covariance(b, b) - 2 * moments.covariance(a, b)
    if stated > max(plan.grain, 1e-9 * math.sqrt(float(plan.variance[j]))) ** 2:
        finding = judge.variance(seen, stated, moments.n - 1)
        yield Check.of(
            plan.name, "variance of the change", f"steps {plan.steps[i]} to {plan.steps[j]}", "spread", finding
        )


def _laws(gather: Gather, column: int) -> Iterator[Check]:
    plan = gather.plan.series[column]
    mine = [(k, i) for k, (owner, i) in enumerate(gather.plan.kept) if owner == column]
    values = gather.kept.values()
    for k, i in mine:
        if len(values) < 8:
            continue
        law = plan.scores[i].distribution
        if getattr(law.frozen, "spacing", 0.0):
            yield from special.whole_numbers(plan.name, _at(plan, i), law.frozen, values[:, k], i, plan.grain)
            continue
        z = (values[:, k] - law.mean) / law.sd
        if plan.grain > 0.02 * law.sd / math.sqrt(len(values)):
            z = z + plan.grain / law.sd * (np.random.default_rng(i).random(len(z)) - 0.5)
            plan.scores[i].room = plan.grain / law.sd
            z = plan.scores[i].folded(z)
        if plan.grain > 0.5 * law.sd / len(values) ** 0.25:
            note = f"values are rounded to {plan.grain:g}, too coarse for the law"
            yield Check(plan.name, "law", _at(plan, i), "law", outcome="untestable", note=note)
            continue
        note = f"Anderson–Darling, {len(z)} paths"
        yield Check.of(plan.name, "law", _at(plan, i), "law", judge.anderson_darling(law.cdf(z)), note)
        if plan.gaussian:
            continue
        for q in _QUANTILES:
            below = int(np.count_nonzero(z < law.ppf(q)))
            yield Check.of(
                plan.name, f"share below the {q:.0%} quantile", _at(plan, i), "law", judge.share(below, len(z), q)
            )


def _pooled(gather: Gather, column: int) -> Iterator[Check]:
    plan, powers = gather.plan.series[column], gather.pooled[column]
    pool = plan.pool
    if powers is None or pool is None:
        return
    if pool.coarse:
        probe = f"steps {pool.first}–{pool.last - 1}"
        yield Check(plan.name, "averages over steps", probe, "memory", outcome="untestable", note=pool.coarse)
    for k, lag in enumerate(() if pool.coarse else (-1, *pool.lags)):
        sample = _sample(powers, k)
        if sample.n:
            yield _pooled_one(plan, pool, k, lag, sample)
    if plan.name not in gather.routes:
        yield from _neighbours(plan, powers)


def _pooled_one(plan: SeriesPlan, pool: Pool, k: int, lag: int, sample: Sample) -> Check:
    """Average k of the pool: the mean (lag -1), the variance (lag 0), or the memory at a lag."""
    probe = f"steps {pool.first}–{pool.last - 1}" + (f", lag {lag}" if lag > 0 else "")
    theory = float(np.mean(pool.mean)) if lag < 0 else float(np.nanmean(pool.covariance[k - 1]))
    what = "mean over steps" if lag < 0 else "variance over steps" if lag == 0 else "autocovariance over steps"
    kind = "level" if lag < 0 else "spread" if lag == 0 else "memory"
    if pool.exact is not None:
        if lag < 0:
            finding = judge.normal_mean(theory + sample.mean, theory, math.sqrt(float(pool.exact[0, 0])), sample.n)
        else:
            finding = judge.quadratic(theory + sample.mean, pool.exact[k], sample.n)
        return Check.of(plan.name, what, probe, kind, finding)
    if lag > 0 and pool.slope is not None:
        variance = float(pool.covariance[0].mean())
        slope = float(np.nanmean(pool.slope[k - 1]))
        return _limit(plan, "slope over steps", probe, kind, sample.scaled(1 / variance), slope, 2, None)
    sd = plan.square_sd if lag == 0 and sample.n >= FEW_PATHS else None
    return _limit(plan, what, probe, kind, sample, theory, 1 if lag < 0 else 2, sd)


def _neighbours(plan: SeriesPlan, powers: Powers) -> Iterator[Check]:
    """Correlation of the neighbouring paths' averages, where no shocks say it more sharply."""
    count, total = powers.pairs[:, 0]
    sample = _sample(powers, 0)
    if count < FEW_PATHS or not sample.sd > 0 or not plan.highest > 3:
        return
    r = float(total / count - sample.mean**2) / sample.sd**2
    yield Check.of(
        plan.name,
        "neighbouring paths",
        "averages over steps",
        "dependence",
        judge.neighbours(r, sample, int(count)),
    )


def cross_moments(gather: Gather, place: int) -> Iterator[Check]:
    """Covariances of two series at common probes."""
    pair = gather.plan.cross[place]
    a, b = (gather.plan.series[k] for k in (pair.first, pair.second))
    start = sum(len(p.places) for p in gather.plan.cross[:place])
    name = f"{a.name} ~ {b.name}"
    stated = [value for value in pair.covariance if value is not None]
    if len(stated) < len(pair.covariance):
        yield Check(name, "covariance between series", "", "dependence", outcome="untestable", note=pair.reason)
        return
    for k, (i, j) in enumerate(pair.places):
        if a.constant[i] or b.constant[j]:
            continue
        probe = f"steps {a.steps[i]}, {b.steps[j]}"
        hidden = [plan.too_coarse(math.sqrt(plan.drawn[q])) for plan, q in ((a, i), (b, j)) if plan.coarse[q]]
        if hidden:
            yield Check(name, "covariance between series", probe, "dependence", outcome="untestable", note=hidden[0])
            continue
        yield from _cross_one(gather, pair, a, b, i, j, stated[k], start + k, name, probe)


def _cross_one(
    gather: Gather,
    pair: CrossPlan,
    a: SeriesPlan,
    b: SeriesPlan,
    i: int,
    j: int,
    known: float,
    k: int,
    name: str,
    probe: str,
) -> Iterator[Check]:
    moments = gather.moments
    if not math.isfinite(known):
        return
    if pair.gaussian:
        s1, s2 = math.sqrt(a.variance[i]), math.sqrt(b.variance[j])
        if moments.n >= 2 and math.isfinite(s1 * s2):
            p, q = gather.plan.offset[pair.first] + i, gather.plan.offset[pair.second] + j
            finding: Finding = judge.covariance(moments.covariance(p, q), s1, s2, known / (s1 * s2), moments.n - 1)
            yield Check.of(name, "covariance between series", probe, "dependence", finding)
        return
    weaker = a if a.highest <= b.highest else b
    sample = _sample(gather.crossed, k).scaled(1 / float(b.variance[j]))
    slope, hidden = known / float(b.variance[j]), a.skewness(1) * b.skewness(1)
    check = _limit(weaker, "slope between series", probe, "dependence", sample, slope, 2, None, hidden)
    check.series = name
    yield check
